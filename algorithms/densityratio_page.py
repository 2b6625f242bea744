"""The report of a density ratio."""

import math

import numpy as np

from ..plugin.looks import DIVERGING, SEQUENCE
from ..plugin.report import Report
from ..plugin.text import number, percent, tr
from .plots import colour_ramp, kilometre_extent, name_kilometres, thinned, thinning

ACCENT = "#8a5a1c"


def write_page(algorithm, job, study, found, relabelling, areas):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    study : densityratio_study.Study
    found : numeric.contrast.Contrast
    relabelling : numeric.contrast.Relabelling or None
    areas : numeric.tolerance.ToleranceAreas or None
    """
    if not job.wanted("REPORT"):
        return
    report = Report(
        algorithm.displayName(),
        tr("Where are there more records than the background leads to expect, beyond chance?"),
        answer_words(found, relabelling, areas),
        confidential=True,
    )
    report.plot(
        tr("The ratio"),
        lambda figure: draw_ratio(figure, job, study, found, relabelling),
        tr(
            "Density of the records over that of the background, both of total 1: brown where "
            "there are more records than expected, blue where fewer; no value where less than {} "
            "effective background points stand behind a pixel."
        ).format(number(job.real("LEAST_BACKGROUND")))
        + (
            tr(" Black: beyond the level of 5 % over the whole map. Grey: pixel by pixel only.")
            if relabelling is not None
            else ""
        ),
        size=(8.5, 6.0),
    )
    if relabelling is not None:
        area_table(report, job, study, areas)
        global_table(report, relabelling)
        report.plot(
            tr("What chance does"),
            lambda figure: draw_extremes(figure, relabelling),
            tr(
                "Highest and lowest log ratio over its noise: bars count the maps with random "
                "labels, the line is the map observed. A finding lies clear of the bars."
            ),
            size=(8.0, 2.8),
        )
    figures_table(report, job, study, found)
    job.write_report(report, method_words(job, study), caution_words(job, study, relabelling))


def answer_words(found, relabelling, areas):
    """The answer in a sentence or two."""
    shown = found.log_ratio[found.shown]
    span = tr("The ratio runs from {} to {}.").format(
        number(math.exp(shown.min())), number(math.exp(shown.max()))
    )
    if relabelling is None:
        return span + tr(" Labels were not drawn, so nothing is known of chance.")
    level = areas.level.max(initial=0.0)
    parts = []
    for side, words in ((1, tr("more")), (-1, tr("fewer"))):
        own = areas.everywhere & (areas.side == side) & (areas.level == level)
        if own.any():
            best = np.flatnonzero(own)[0]
            parts.append(
                tr("{} {} clearly {} records than expected, the largest {} against {}").format(
                    number(int(own.sum())),
                    tr("area has") if own.sum() == 1 else tr("areas have"),
                    words,
                    number(float(areas.records[best])),
                    number(float(areas.expected[best])),
                )
            )
    if parts:
        found_words = "; ".join(parts)
        return tr("Over the whole map {} (level {}). {}").format(
            found_words, percent(level, 0), span
        )
    least = min(relabelling.global_p(which) for which in ("highest_scaled", "lowest_scaled"))
    return tr("No area stands out over the whole map: the smallest p-value is {}. {}").format(
        number(least, 2), span
    )


def area_table(report, job, study, areas):
    """Table of the areas, those that hold over the whole map first."""
    order = np.lexsort((areas.rank, areas.level, -areas.side, ~areas.everywhere))
    metres = job.working.metres
    rows = [
        (
            tr("whole map") if areas.everywhere[i] else tr("pixel by pixel"),
            tr("raised") if areas.side[i] > 0 else tr("lowered"),
            percent(areas.level[i], 1),
            number(float(areas.records[i])),
            number(float(areas.expected[i])),
            number(float(areas.ratio[i])),
            number(float(areas.least_p[i]), 2),
            number(float(areas.area[i]) * job.working.square_kilometres),
            f"{study.grid.x_centres()[areas.column[i]] * metres:.0f}",
            f"{study.grid.y_centres()[areas.row[i]] * metres:.0f}",
        )
        for i in order[:20]
    ]
    report.table(
        tr("Areas beyond tolerance"),
        [
            tr("holds"),
            tr("side"),
            tr("level"),
            tr("records"),
            tr("expected"),
            tr("ratio"),
            tr("least p"),
            tr("km²"),
            tr("easting (m)"),
            tr("northing (m)"),
        ],
        rows,
        note=tr(
            "Of the areas that hold pixel by pixel some are there by chance: at a level of 5 % one "
            "twentieth of the map would be without any cause. Twenty areas at the most are listed."
        ),
    )


def global_table(report, relabelling):
    """Table of the tests of the whole map."""
    names = (
        ("highest_scaled", tr("highest log ratio over its noise")),
        ("lowest_scaled", tr("lowest log ratio over its noise")),
        ("highest", tr("highest log ratio as it is")),
        ("lowest", tr("lowest log ratio as it is")),
    )
    rows = []
    for which, words in names:
        values = getattr(relabelling, which)
        middle, far = np.quantile(values[1:], [0.5, 0.95 if which.startswith("high") else 0.05])
        rows.append(
            (
                words,
                number(float(values[0])),
                number(float(middle)),
                number(float(far)),
                number(relabelling.global_p(which), 2),
            )
        )
    report.table(
        tr("The whole map against chance"),
        [
            tr("statistic"),
            tr("observed"),
            tr("random: middle"),
            tr("random: 1 in 20 beyond"),
            tr("p-value"),
        ],
        rows,
        note=tr(
            "Over its noise: thinly settled places, where the ratio is wild, count no more than "
            "dense ones. As it is, the wildest place decides."
        ),
    )


def figures_table(report, job, study, found):
    """Table of what was read, chosen and found."""
    metres, square = job.working.metres, job.working.square_kilometres
    pooled = study.pooled
    rows = [
        (tr("records"), number(pooled.records)),
        (tr("background points"), number(pooled.x.size - pooled.records)),
        (tr("weight of the records"), number(pooled.totals[0])),
        (tr("weight of the background"), number(pooled.totals[1])),
        (tr("overall bandwidth (m)"), number(study.bandwidth * metres)),
        (tr("narrowest bandwidth (m)"), number(float(found.bandwidths.min()) * metres)),
        (tr("widest bandwidth (m)"), number(float(found.bandwidths.max()) * metres)),
        (tr("cell size (m)"), number(study.grid.cell * metres)),
        (tr("rows x columns"), f"{study.grid.rows} x {study.grid.columns}"),
        (
            tr("area with a value (km²)"),
            number(np.count_nonzero(found.shown) * study.grid.cell_area * square),
        ),
    ]
    report.table(tr("Figures"), [tr("what"), tr("value")], rows)


def draw_ratio(figure, job, study, found, relabelling):
    """Plot the ratio with the areas beyond 5 %."""
    step = thinning(study.grid.shape)
    kilometres = study.grid.cell * job.working.metres / 1000
    extent = kilometre_extent(study.grid, job.working.metres)
    log_ratio = thinned(found.log_ratio)
    reach = max(float(np.quantile(np.abs(found.log_ratio[found.shown]), 0.995)), math.log(1.25))
    axes = figure.subplots()
    axes.set_facecolor("#d9d4c7")
    drawn = axes.imshow(
        log_ratio,
        extent=extent,
        cmap=colour_ramp(DIVERGING),
        vmin=-reach,
        vmax=reach,
        interpolation="nearest",
    )
    bar = figure.colorbar(drawn, ax=axes, shrink=0.8, extend="both", label=tr("times as expected"))
    ticks = np.linspace(-reach, reach, 7)
    bar.set_ticks(ticks, labels=[number(math.exp(tick), 2) for tick in ticks])
    if relabelling is not None:
        x = (np.arange(log_ratio.shape[1]) * step + 0.5) * kilometres
        y = extent[3] - (np.arange(log_ratio.shape[0]) * step + 0.5) * kilometres
        for suffix, colour, width in (("", "#5b6068", 0.8), ("_anywhere", "black", 2.0)):
            for name in ("p_raised", "p_lowered"):
                p_values = thinned(getattr(relabelling, name + suffix))
                beyond = np.nan_to_num(p_values, nan=1.0) <= 0.05
                if beyond.any() and min(beyond.shape) > 1:
                    axes.contour(x, y, beyond, levels=[0.5], colors=[colour], linewidths=width)
    name_kilometres(axes)


def draw_extremes(figure, relabelling):
    """Plot the extremes of the relabelled maps and the observed ones."""
    left, right = figure.subplots(1, 2)
    for axes, values, words in (
        (left, relabelling.lowest_scaled, tr("lowest log ratio over its noise")),
        (right, relabelling.highest_scaled, tr("highest log ratio over its noise")),
    ):
        axes.hist(values[1:], bins=30, color=SEQUENCE[2])
        axes.axvline(values[0], color=ACCENT, linewidth=2, label=tr("observed"))
        axes.set_xlabel(words)
        axes.set_ylabel(tr("random maps"))
        axes.legend(frameon=False)


def method_words(job, study):
    """Method in words, with sources."""
    rule = (
        tr("the normal-scale rule for the pooled points with n1 n2 / (n1 + n2) as their number")
        if study.chosen
        else tr("as asked for")
    )
    units = (
        tr(
            "Each unit of a weight is relabelled by itself, drawn without replacement "
            "(multivariate hypergeometric)."
        )
        if study.pooled.counted
        else tr(
            "Weights move with their records, scaled to add up to the effective number; kernels "
            "and noise take every point alike, since they must not know where the weights lie."
        )
    )
    words = [
        tr(
            "Log ratio of two adaptive kernel densities (Kelsall & Diggle 1995, Stat. Med. "
            "14:2335) with the same bandwidths for both, from the pooled points (Davies, Jones & "
            "Hazelton 2016, Comput. Stat. Data Anal. 101:12). The overall bandwidth of {} m is by "
            "{}; a point's own bandwidth is that times (p / G)^-{}, p the pooled density there and "
            "G its geometric mean (Abramson 1982, Ann. Stat. 10:1217)."
        ).format(number(study.bandwidth * job.working.metres), rule, number(job.real("ADAPT"))),
        tr(
            "What kernels lose beyond the boundary they lose in both densities alike, so the ratio "
            "needs no correction. Ratios beyond 100 either way are shown as 100. No value is given "
            "below {} effective background points, (sum K)² / sum K² (Kish 1965), as they are or "
            "as the pooled points lead to expect: by what lies there alone, places near the floor "
            "would be chosen for having much background, and look lowered."
        ).format(number(job.real("LEAST_BACKGROUND"))),
    ]
    if job.whole("RELABELLINGS"):
        words.append(
            tr(
                "Records and background are pooled and relabelled at random {} times; kernels stay "
                "as they are. {} Pixel by pixel, the p-value is the share of labellings, the "
                "observed one among them, with a ratio at least as far out. Over the whole map it "
                "is the share whose log ratio, divided by its standard deviation under random "
                "labels, is somewhere at least as far out (Westfall & Young 1993, Resampling-Based "
                "Multiple Testing)."
            ).format(number(job.whole("RELABELLINGS")), units)
        )
    return words


def caution_words(job, study, relabelling):
    """What a reader must keep in mind."""
    words = [
        tr(
            "A raised ratio says that records are more frequent than this background leads to "
            "expect. It does not say why: age, habit and reporting may differ from place to place."
        ),
        tr(
            "Random labels take records as independent. Several records of one person or household "
            "make chance look smaller than it is."
        ),
    ]
    if relabelling is not None:
        words.append(tr("Areas that hold pixel by pixel only are places to look at, not findings."))
    if study.boundary is None:
        words.append(
            tr("Without a boundary the ratio runs out into ground with few points behind it.")
        )
    words.append(
        tr(
            "The ratio is not safe for release as it is: in thinly settled places it can show a "
            "single record."
        )
    )
    return words
