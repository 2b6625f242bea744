"""The report of a release audit."""

import numpy as np
import shapely

from ..plugin.report import Report
from ..plugin.text import number, said, tr
from .numeric.wording import interval_words

LISTED = 60
BORDER_COLOURS = ("#a8a497", "#2e7179", "#8a5a1c", "#5b4a7d", "#3f6b3a", "#444444")
KIND_WORDS = {
    "exact": tr("the count is known"),
    "range": tr("the count is known within limits"),
    "at most": tr("known to be few, perhaps none"),
    "empty": tr("known to be empty"),
}
FILLS = {"exact": "#7d1f1f", "range": "#b36a2a", "at most": "#dda968", "empty": "#dbe7ee"}

METHOD = (
    tr(
        "All zonings were laid over each other. The pieces of ground are unknown whole numbers of "
        "records, 0 or more; every published count, total, rounding and withholding is a "
        "statement about sums of them. Differencing: Duke-Williams & Rees 1998, International "
        "Journal of Geographical Information Science 12:579; Costemalle 2019, Statistical Journal "
        "of the IAOS 35:559."
    ),
    tr(
        "A piece lies in a remainder below the least count exactly when the statements leave it "
        "no room for the least count, so the most that each piece can hold was sought, with the "
        "reason why. Where all zones fall into two families that nest within themselves, records "
        "flow through zones as in a two-way table and the bounds are exact (Cox 1995, Journal of "
        "the American Statistical Association 90:1453). Otherwise pairs of layers were searched "
        "so, and all layers together by linear and whole-number programmes."
    ),
    tr(
        "Disclosed is ground where an outsider can be certain of at least 1 and fewer than the "
        "least count (exact or within limits), and ground known to hold fewer than the least "
        "count though no published count there says so (at most). A withheld cell that is known "
        "to hold 1 to one less than the least count, and a rounded 0, are no risk while nothing "
        "narrows them. Ground known to be empty is listed apart: it tells that nobody is there, "
        "and discloses no one."
    ),
)

CAUTIONS = (
    tr("The least count belongs to the data's owner and to law; this tool does not set it."),
    tr(
        "Clean means: from the layers given here alone. Layers left out, tables published "
        "elsewhere, later releases and what neighbours know may still single someone out."
    ),
    tr(
        "Counts protect against recognition, not against inference about a group: where everyone "
        "in a cell shares an attribute (all ill, none ill), it is disclosed whatever the count."
    ),
    tr(
        "Records are counted, not people: several records of one person, or of one household, "
        "make a count look safer than it is."
    ),
    tr(
        "One count of each layer was looked at. Where shares are published, audit the numerators, "
        "and what the counts have besides them, in runs of their own."
    ),
    tr(
        "Noisy counts were given an interval that holds with a probability of 99.9 % each; what "
        "follows from many of them is likely, not certain."
    ),
)


def answer(found, least_count):
    """The answer in a sentence."""
    if found.clean:
        words = tr("Clean: no ground with 1 to {} records can be worked out from these layers.")
        return words.format(least_count - 1)
    words = []
    if found.risks:
        regions = tr("regions") if len(found.risks) > 1 else tr("region")
        words.append(
            tr("{} {} with fewer than {} records can be worked out; the smallest count is {}")
            .format(number(len(found.risks)), regions, least_count, number(found.worst_count))
        )  # fmt: skip
        derived = sum(not _published_alone(risk) for risk in found.risks)
        if derived:
            words.append(
                tr("{} of them only by combining published counts").format(number(derived))
            )
        else:
            words.append(tr("published counts tell them as they stand"))
    if found.contradictions:
        words.append(
            tr("the layers contradict each other ({} counts), so nothing is certain").format(
                number(len(found.contradictions))
            )
        )
    if found.undecided:
        words.append(tr("the search left {} pieces of ground open").format(number(found.undecided)))
    return tr("Not clean: {}.").format("; ".join(words))


def _published_alone(risk):
    """Whether one published count tells it all."""
    return len(risk.added) == 1 and not risk.subtracted


def stop_words(found, least_count):
    """The error that halts a model."""
    examples = "; ".join(said(risk.words) for risk in found.risks[:3])
    words = answer(found, least_count)
    return f"{words} {examples}." if examples else words


def report(job, published, found, least_count):
    """The page.

    Parameters
    ----------
    job : job.Job
    published : list of releaseaudit_inputs.Published
    found : numeric.differencing.Audit
    least_count : int

    Returns
    -------
    plugin.report.Report
    """
    page = Report(
        tr("Release audit"),
        tr("Can anyone be picked out from these layers, alone or by subtraction?"),
        answer(found, least_count),
        confidential=True,
    )
    page.table(
        tr("Published layers"),
        [tr("layer"), tr("zones"), tr("withheld"), tr("count field"), tr("counts"), tr("total")],
        [_layer_row(one) for one in published],
    )
    page.plot(
        tr("Where"),
        lambda figure: _draw(figure, published, found, job.working.metres),
        tr("Borders of the published layers and the ground that is disclosed; distances in km."),
        size=(8.0, 5.6),
    )
    combined = [risk for risk in found.risks if not _published_alone(risk)]
    _risk_table(page, tr("Disclosed by combining published counts"), combined, job)
    alone = [risk for risk in found.risks if _published_alone(risk)]
    _risk_table(page, tr("Published counts that disclose by themselves"), alone, job)
    if found.empty:
        _risk_table(page, tr("Known to be empty (lower severity)"), found.empty, job)
    if found.contradictions:
        page.text(tr("Counts that contradict each other"), *found.contradictions[:LISTED])
    page.table(
        tr("The search"),
        [tr("what"), tr("value")],
        [
            (tr("pieces of ground"), number(found.atoms)),
            (tr("unknown counts"), number(found.unknowns)),
            (tr("slivers absorbed"), number(found.slivers)),
            (
                tr("their area (m²)"),
                number(found.sliver_area * job.working.square_kilometres * 1e6),
            ),
            (tr("sliver tolerance (m)"), number(found.tolerance * job.working.metres)),
            (
                tr("bounds"),
                tr("exact, by network flow")
                if found.method == "network"
                else tr("by network flow for pairs and programmes for all layers"),
            ),
            (tr("pieces left open"), number(found.undecided)),
        ],
    )
    return page


def _layer_row(one):
    total = one.table.total
    return (
        one.table.name,
        number(len(one.values)),
        number(int(np.isnan(one.values).sum())),
        one.field,
        one.kind,
        tr("not published") if total is None else interval_words(*total),
    )


def _risk_table(page, title, risks, job):
    if not risks:
        page.text(title, tr("None."))
        return
    confirmed = not np.isnan([risk.true_count for risk in risks]).all()
    columns = [tr("records"), *([tr("true count")] if confirmed else []), tr("area (km²)")]
    rows = [
        (
            interval_words(risk.lower, risk.upper),
            *([number(int(risk.true_count))] if confirmed else []),
            number(risk.polygon.area * job.working.square_kilometres),
            risk.words,
        )
        for risk in risks[:LISTED]
    ]
    left = len(risks) - LISTED
    note = tr("{} more are in the layer of risks.").format(number(left)) if left > 0 else ""
    page.table(title, [*columns, tr("derivation")], rows, note)


def _draw(figure, published, found, metres):
    from matplotlib.collections import LineCollection, PolyCollection
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    axes = figure.add_subplot()
    scale = metres / 1000
    handles = []
    for place, one in enumerate(published):
        colour = BORDER_COLOURS[place % len(BORDER_COLOURS)]
        width = 0.5 + 0.5 * (len(one.values) <= 50)
        rings = shapely.get_rings(shapely.get_parts(one.table.zones))
        lines = [shapely.get_coordinates(ring) * scale for ring in rings]
        axes.add_collection(LineCollection(lines, colors=colour, linewidths=width, zorder=3))
        handles.append(Line2D([], [], color=colour, linewidth=width + 0.5, label=one.table.name))
    for kind in ("empty", "at most", "range", "exact"):
        shapes = [risk.polygon for risk in (*found.empty, *found.risks) if risk.kind == kind]
        if not shapes:
            continue
        rings = shapely.get_exterior_ring(shapely.get_parts(np.array(shapes, object)))
        faces = [shapely.get_coordinates(ring) * scale for ring in rings]
        axes.add_collection(PolyCollection(faces, facecolors=FILLS[kind], zorder=2))
        handles.append(Patch(color=FILLS[kind], label=KIND_WORDS[kind]))
    axes.autoscale_view()
    axes.set_aspect("equal")
    axes.grid(False)
    axes.set_xlabel(tr("east (km)"))
    axes.set_ylabel(tr("north (km)"))
    axes.legend(handles=handles, loc="upper left", bbox_to_anchor=(1.01, 1.0), frameon=False)
