"""The page about centres and spreads."""

import math

import numpy as np

from ..plugin.centre_looks import INK, SECOND_INK
from ..plugin.report import Report
from ..plugin.text import number, percent, tr

SMALL = 30
SHOWN_RECORDS = 8000
DIRECTIONS = (
    tr("north"),
    tr("north-east"),
    tr("east"),
    tr("south-east"),
    tr("south"),
    tr("south-west"),
    tr("west"),
    tr("north-west"),
)


def write_page(job, groups, steps, fields, records):
    """Write REPORT.

    Parameters
    ----------
    job : Job
    groups : list of centrespread.Group
    steps : list of centrespread.Step
    fields : dict of str to str or None
        Field names by parameter.
    records : plugin.layers.Records
    """
    if not job.wanted("REPORT"):
        return
    metres, level = job.working.metres, job.real("LEVEL") / 100.0
    # names follow each other by letter only, and arrows between them would tell of a move
    ordered = fields["ORDER"] or all(group.name[:1].isdigit() for group in groups)
    arrows = steps if ordered else []
    report = Report(
        tr("Centre and spread"),
        tr("Where are the records centred, how far do they spread, and did the centre move?"),
        _answer(groups, steps, metres, level),
        confidential=True,
    )
    report.plot(
        tr("Map"),
        lambda figure: _draw(figure, groups, arrows, records, metres),
        tr(
            "Records in grey, mean centres as dots, geometric medians as crosses, the ellipse of "
            "each group's spread in blue and of the confidence in its centre in orange; arrows "
            "lead from group to group where these have an order. Kilometres, north is up."
        ),
        size=(8.0, 6.0),
    )
    if len(groups) > 1:
        report.plot(
            tr("The centres from near"),
            lambda figure: _draw(figure, groups, arrows, None, metres),
            tr("The same without records: centres, arrows and confidence ellipses only."),
            size=(8.0, 6.0),
        )
    _tables(report, groups, steps, fields, metres, level)
    job.write_report(report, _method(job), _cautions(groups, steps))


def _answer(groups, steps, metres, level):
    if len(groups) == 1:
        group = groups[0]
        sure = _sure(group, metres, level)
        return tr("The records spread {} m (standard distance) around their mean centre{}.").format(
            number(group.standard_distance * metres), sure
        )
    apart = [step for step in steps if step.chance < 0.05]
    first, last = groups[0].mean, groups[-1].mean
    distance = math.hypot(last[0] - first[0], last[1] - first[1]) * metres
    towards = math.degrees(math.atan2(last[0] - first[0], last[1] - first[1])) % 360.0
    return tr(
        "From {} to {} the mean centre lies {} m further to the {}. Of {} steps between groups {} "
        "are longer than chance explains at the 5 % level; about {} would be if nothing moved."
    ).format(
        groups[0].name,
        groups[-1].name,
        number(distance),
        DIRECTIONS[round(towards / 45.0) % 8],
        len(steps),
        len(apart),
        number(0.05 * len(steps), 2),
    )


def _sure(group, metres, level):
    if group.confidence is None:
        return ""
    return tr(", which is sure to within {} m at {} confidence").format(
        number(group.confidence.semi_major * metres), percent(level, 0)
    )


def _tables(report, groups, steps, fields, metres, level):
    rows = []
    for group in groups:
        ellipse, sure = group.deviation, group.confidence
        between = math.hypot(group.median[0] - group.mean[0], group.median[1] - group.mean[1])
        rows.append(
            (
                group.name,
                number(group.records),
                number(group.total),
                number(group.standard_distance * metres),
                f"{number(ellipse.semi_major * metres)} × {number(ellipse.semi_minor * metres)}",
                f"{ellipse.bearing:.0f}°",
                "–"
                if sure is None
                else f"{number(sure.semi_major * metres)} × {number(sure.semi_minor * metres)}",
                number(between * metres),
            )
        )
    report.table(
        tr("Groups"),
        [
            fields["GROUP"] or tr("group"),
            tr("records"),
            tr("sum of weights"),
            tr("standard distance (m)"),
            tr("ellipse, half axes (m)"),
            tr("long axis"),
            tr("{} confidence, half axes (m)").format(percent(level, 0)),
            tr("mean to median (m)"),
        ],
        rows,
    )
    if steps:
        report.table(
            tr("Steps"),
            [tr("from"), tr("to"), tr("distance (m)"), tr("direction"), tr("chance")],
            [
                (
                    step.start.name,
                    step.stop.name,
                    number(step.distance * metres),
                    f"{step.bearing:.0f}°",
                    "–" if math.isnan(step.chance) else f"{step.chance:.3f}",
                )
                for step in steps
            ],
            note=tr(
                "Chance: how often two groups of these sizes and spreads would have centres so far "
                "apart if their true centre were the same. None with fewer than three contributors "
                "(records without that field) in a group."
            ),
        )


def _draw(figure, groups, steps, records, metres):
    axes = figure.add_subplot()
    kilometre = 1000.0 / metres
    places = np.array([place for group in groups for place in (group.mean, group.median)])
    left, bottom = places.min(axis=0) if records is None else (records.x.min(), records.y.min())

    def at(values):
        return (np.asarray(values) - (left, bottom)) / kilometre

    if records is not None:
        shown = at(np.column_stack([records.x, records.y])[:: 1 + len(records) // SHOWN_RECORDS])
        axes.plot(*shown.T, ".", color="#c9c3b4", markersize=1.5)
    for group in groups:
        if records is not None:
            axes.plot(*at(group.deviation.outline()).T, color=INK, linewidth=0.9)
        if group.confidence is not None and len(groups) <= 4:
            axes.fill(*at(group.confidence.outline()).T, color=SECOND_INK, alpha=0.18)
        if group.confidence is not None:
            axes.plot(*at(group.confidence.outline()).T, color=SECOND_INK, linewidth=0.6)
        axes.plot(*at(group.mean), "o", color=INK, markersize=4)
        axes.plot(*at(group.median), "x", color=SECOND_INK, markersize=4)
        if records is None or len(groups) <= 6:
            axes.annotate(
                group.name, at(group.mean), (4, 4), textcoords="offset points", fontsize=9
            )
    for step in steps:
        axes.annotate(
            "",
            at(step.stop.mean),
            at(step.start.mean),
            arrowprops={"arrowstyle": "->", "color": INK, "linewidth": 0.9},
        )
    axes.set_aspect("equal", adjustable="datalim")
    axes.set_xlabel("km")
    axes.set_ylabel("km")


def _method(job):
    deviations = job.real("DEVIATIONS")
    return [
        tr(
            "Standard deviational ellipse (Lefever 1926; Yuill 1971): half axes are {} times the "
            "standard deviations along the principal axes of the weighted covariance matrix, "
            "divided by the total weight. Of a bivariate normal cloud it holds {} (Wang, Shi & "
            "Miao 2015). Standard distance (Bachi 1963): root mean square distance from the mean "
            "centre."
        ).format(number(deviations), percent(1.0 - math.exp(-0.5 * deviations**2))),
        tr(
            "Geometric median: Weiszfeld's iteration as completed by Vardi & Zhang (2000). "
            "Confidence: contributors are drawn with replacement, and the ellipse is sized by the "
            "studentised distances of the drawn centres (Hall 1987; Efron & Tibshirani 1993)."
        ),
        tr(
            "Chance of a step: squared difference of the centres over its covariance, to which a "
            "contributor of both groups adds once with the difference of what it does to each; "
            "taken as Hotelling's T² (Mardia, Kent & Bibby 1979) with the degrees of freedom of "
            "Krishnamoorthy & Yu (2004, Stat. Probab. Lett. 66:161), so that few contributors make "
            "it no smaller than it is."
        ),
    ]


def _cautions(groups, steps):
    cautions = [
        tr(
            "A geometric median can be the exact place of one record, and the centre of a small "
            "group lies near its members' homes: do not release centres of small groups."
        ),
        tr(
            "A centre follows where people live. Compare it with the centre of the background "
            "before calling it a shift in risk. A centre may lie where nobody is."
        ),
    ]
    if min(len(group.sampled.shares) for group in groups) < SMALL:
        cautions.append(
            tr(
                "Groups of fewer than {} contributors (records without that field) have rough "
                "confidence ellipses, rather too wide than too narrow. Between a tiny group and a "
                "large one whose records lie lopsided, the chance of a step comes out too small."
            ).format(SMALL)
        )
    if len(steps) > 1:
        cautions.append(
            tr("Of many steps some look significant by chance; do not pick out the one that does.")
        )
    return cautions
