"""The report of zoning variance from points."""

import numpy as np

from ..plugin.looks import VERDICTS
from ..plugin.report import Report
from ..plugin.text import number, percent, tr
from .plots import colour_ramp, kilometre_extent
from .zoning_pages import (
    allocation_words,
    draw_allocation,
    draw_fan,
    draw_sources,
    source_words,
    statistic_words,
    summaries,
    verdict_cautions,
)


def write_page(algorithm, job, study, outcome, shape):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    study : gridvariance_study.Study
    outcome : gridvariance.Outcome
    shape : str
        Cells in words.
    """
    if not job.wanted("REPORT"):
        return
    metres = job.working.metres
    report = Report(
        algorithm.displayName(),
        tr("Would the map say the same had the cells been drawn otherwise?"),
        answer_words(study, outcome),
        confidential=True,
    )
    report.text("", *movement_words(study, outcome))
    report.plot(
        tr("Where the verdict holds"),
        lambda figure: draw_maps(figure, study, outcome, metres),
        tr(
            "Left: value averaged over all zonings ({}). Right: places that stand above or below "
            "{} {} under at least 95 of 100 zonings and beyond what chance alone would do."
        ).format(study.unit, number(study.ground.threshold * study.factor), study.unit),
        size=(9.5, 5.0),
    )
    report.plot(
        tr("The highest value depends on the cell size"),
        lambda figure: draw_fan(
            figure,
            study.sizes * metres,
            [scale.statistics["largest"] * study.factor for scale in outcome.scales],
            tr("cell size (m)"),
            tr("highest value of a cell ({})").format(study.unit),
            overall_value(study),
        ),
        tr(
            "Each zoning has one highest cell. The band holds nine of ten zonings of a size: all "
            "of them show the same records."
        ),
    )
    report.plot(
        tr("What moves the value of a place"),
        lambda figure: draw_sources(figure, typical_deviations(study, outcome), study.unit),
        tr(
            "Standard deviations at a typical place, averaged over the {}. The squares of grain "
            "and cut add up to all the movement over zonings. Small numbers stand beside them: "
            "what chance would do to the value under one fixed zoning."
        ).format(total_words(study)),
        size=(8.0, 2.6),
    )
    if outcome.allocation is not None:
        report.text(tr("What the cut costs a service"), *allocation_words(outcome.allocation))
        report.plot(
            "",
            lambda figure: draw_allocation(figure, outcome.allocation),
            tr("Share of the held-out events that each zoning reaches with the same budget."),
            size=(8.0, 3.2),
        )
    statistics_table(report, study, outcome, metres)
    job.write_report(report, method_words(job, study, shape), caution_words(study))


def overall_value(study):
    """Value of the whole area in the unit shown."""
    return study.ground.count.sum() / study.ground.total.sum() * study.factor


def total_words(study):
    """What values are taken over, in words."""
    return tr("area") if study.dense else tr("background")


def share_with(study, outcome, code):
    """Share of the total in places with a verdict, out of all with a value."""
    known = ~np.isnan(outcome.verdict)
    whole = study.place_total[known].sum()
    return float(study.place_total[outcome.verdict == code].sum() / whole) if whole else 0.0


def typical_deviations(study, outcome):
    """Root of the mean variance over the total, by source, in the unit shown."""
    known = ~np.isnan(outcome.mean) & (study.place_total > 0)
    weight = study.place_total[known]
    return {
        name: float(np.sqrt(np.average(deviation[known] ** 2, weights=weight)))
        for name, deviation in outcome.deviations.items()
    }


def answer_words(study, outcome):
    """The answer in a sentence."""
    above, below = share_with(study, outcome, 1), share_with(study, outcome, -1)
    threshold = study.ground.threshold * study.factor
    overall = overall_value(study)
    against = (
        tr("the overall value of {} {}").format(number(threshold), study.unit)
        if np.isclose(threshold, overall)
        else tr("the threshold of {} {}").format(number(threshold), study.unit)
    )
    if above + below == 0:
        return tr(
            "No place stands above or below {} under nearly every zoning and beyond chance: what "
            "the map shows depends on how the cells are drawn, or on small numbers."
        ).format(against)
    return tr(
        "{} of the {} lies in places that stand above {} however the cells are drawn, and {} in "
        "places that stand below; for the other {} the map depends on the cut or on small numbers."
    ).format(
        percent(above), total_words(study), against, percent(below), percent(1 - above - below)
    )


def movement_words(study, outcome):
    """Two sentences: the spread of the highest value, and where movement comes from."""
    largest = np.concatenate([scale.statistics["largest"] for scale in outcome.scales])
    low, high = np.nanquantile(largest, [0.05, 0.95]) * study.factor
    typical = typical_deviations(study, outcome)
    total = typical["scale"] ** 2 + typical["zoning"] ** 2
    words = [
        tr(
            "The same records show a highest cell of {} or of {} {} (5 % and 95 % of {} zonings), "
            "and {} {} over the whole area."
        ).format(
            number(low),
            number(high),
            study.unit,
            number(len(largest)),
            number(overall_value(study)),
            study.unit,
        )
    ]
    if total > 0:
        words.append(
            tr(
                "Of the variance of a typical place over all zonings, {} is grain and {} is cut. "
                "For comparison, small numbers alone, under one fixed zoning, give a variance of "
                "{} of that."
            ).format(
                percent(typical["scale"] ** 2 / total, 0),
                percent(typical["zoning"] ** 2 / total, 0),
                percent(typical["counting"] ** 2 / total, 0),
            )
        )
    return words


def draw_maps(figure, study, outcome, metres):
    """Plot the mean and the verdict side by side."""
    from matplotlib.colors import ListedColormap

    extent = kilometre_extent(study.grid, metres)
    left, right = figure.subplots(1, 2, sharex=True, sharey=True)
    known = outcome.mean[~np.isnan(outcome.mean)]
    top = float(np.quantile(known, 0.995))
    drawn = left.imshow(
        _image(study, outcome.mean), extent=extent, cmap=colour_ramp(), vmin=0, vmax=top or 1.0,
        interpolation="nearest",
    )  # fmt: skip
    figure.colorbar(drawn, ax=left, location="bottom", shrink=0.8, label=study.unit, extend="max")
    left.set_title(tr("mean over all zonings"), fontsize=11)
    codes = sorted(VERDICTS)
    coded = right.imshow(
        _image(study, outcome.verdict), extent=extent, vmin=-1.5, vmax=1.5, interpolation="nearest",
        cmap=ListedColormap([VERDICTS[code] for code in codes]),
    )  # fmt: skip
    # A bar of three colours keeps both maps the same size, which a legend would not.
    bar = figure.colorbar(coded, ax=right, location="bottom", shrink=0.8, ticks=codes)
    bar.ax.set_xticklabels([tr("holds below"), tr("not settled"), tr("holds above")])
    bar.ax.tick_params(length=0)
    bar.set_label(" ")
    right.set_title(tr("verdict"), fontsize=11)
    for axes in (left, right):
        axes.grid(visible=False)
        axes.set_xlabel("km")
        if study.boundary is not None:
            _outline(axes, study, metres / 1000)


def _outline(axes, study, kilometres):
    for polygon in getattr(study.boundary, "geoms", [study.boundary]):
        for ring in (polygon.exterior, *polygon.interiors):
            x, y = np.array(ring.coords)[:, :2].T
            axes.plot(
                (x - study.grid.left) * kilometres,
                (y - study.grid.bottom) * kilometres,
                color="#3b3f46",
                lw=0.7,
            )


def _image(study, values):
    image = np.full(study.grid.shape, np.nan)
    image[study.rows, study.columns] = values
    return image


def statistics_table(report, study, outcome, metres):
    """Medians and the middle nine tenths of each statistic, a row a cell size."""
    words = statistic_words()
    shown = (
        "largest",
        "smallest",
        "variation",
        "morans_i",
        "dissimilarity",
        "share_above",
        "zones",
    )
    rows = []
    for scale in outcome.scales:
        for name, _, low, middle, high, _ in summaries(scale.statistics, study.factor):
            if name in shown:
                rows.append((name, scale.size * metres, low, middle, high))
    rows.sort(key=lambda row: (shown.index(row[0]), row[1]))
    report.table(
        tr("Statistics of the zonings by cell size"),
        [tr("statistic"), tr("cell size (m)"), tr("5 %"), tr("median"), tr("95 %")],
        [
            (words[name] if size == rows[0][1] else "", *(number(value) for value in (size, *row)))
            for name, size, *row in rows
        ],
        tr("Quantiles over {} zonings of each size; values {}.").format(
            number(outcome.scales[0].replicates), study.unit
        ),
    )


def method_words(job, study, shape):
    """What was done, with sources."""
    source = source_words()
    turned = tr("shifted and turned") if job.flag("ROTATE") else tr("shifted")
    return [
        tr(
            "{}, {} zonings of each of {} sizes, {} at random over one cell. Every pixel of {} m "
            "takes the value of the cell that holds its centre; only running sums are kept "
            "(Welford 1962, Technometrics 4:419; Chan, Golub & LeVeque 1983, Am. Stat. 37:242)."
        ).format(
            shape,
            number(job.whole("REPLICATES")),
            len(study.sizes),
            turned,
            number(study.grid.cell * job.working.metres),
        ),
        tr(
            "Movement is split by the law of total variance into two: {} (variance between sizes "
            "of the mean over zonings) and {} (mean over sizes of the variance between zonings). "
            "Every size weighs the same; a zoning that gives a place no value drops out."
        ).format(source["scale"], source["zoning"]),
        tr(
            "Counting noise is v (1 − v) / N for a share and v / N for a rate or a density, v the "
            "value and N the total of the cell, averaged over zonings."
        ),
        tr(
            "A place holds above (below) when its cell exceeds the threshold in at least 95 % (at "
            "most 5 %) of zonings, and when the excess in units of counting noise (Anscombe 1948, "
            "Biometrika 35:246), averaged over zonings, is at least 1.96 in size. The second "
            "condition is needed because one set of records has chance clusters that show under "
            "nearly every cut; with it, at most about 5 % of places whose true value equals the "
            "threshold are called settled. A place without a value in more than half of the "
            "zonings is not settled."
        ),
        tr(
            "Averaging squares of one size over shifts is the averaged shifted histogram (Scott "
            "1985, Ann. Stat. 13:1024); averaging over zonings as an estimator: overlay "
            "aggregation (Tuson et al. 2020, Int. J. Health Geogr. 19:42)."
        ),
    ]


def caution_words(study):
    """What a reader must not conclude."""
    words = [
        tr(
            "A place that holds does so against cells of the sizes and shape tried here; official "
            "areas may be cut in ways that no regular tiling resembles."
        ),
        *verdict_cautions(),
        tr(
            "Values of small cells may point to single persons. Neither this page nor the raster "
            "is made for release; use the tools of the group Safe release for what is published."
        ),
    ]
    if study.dense:
        words.insert(1, tr("Without a background a high density may only show where people live."))
    return words
