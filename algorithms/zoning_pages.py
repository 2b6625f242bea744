"""What the reports and tables of zoning variance share: words, rows and plots."""

import numpy as np

from ..plugin.looks import SEQUENCE
from ..plugin.outputs import Column
from ..plugin.text import number, percent, tr
from .numeric.zone_statistics import summarise

BAND, LINE, MARK = SEQUENCE[2], SEQUENCE[5], "#8a5a1c"
SOURCES = {"scale": SEQUENCE[5], "zoning": SEQUENCE[3], "counting": "#c9a978"}

# Statistics that carry the unit of the value; the others have none.
VALUES = ("largest", "smallest", "value_range")


def statistic_words():
    """Each statistic of a zoning in words, by key, in the order of reading."""
    return {
        "largest": tr("largest value"),
        "smallest": tr("smallest value"),
        "value_range": tr("largest less smallest"),
        "variation": tr("coefficient of variation, weighted by the total"),
        "morans_i": tr("Moran's I over neighbouring zones"),
        "dissimilarity": tr("index of dissimilarity"),
        "share_above": tr("share of the total in zones above the threshold"),
        "zones": tr("zones with a value"),
        "events_reached": tr("events reached with the budget"),
    }


def source_words():
    """The three sources of movement in words, by key."""
    return {
        "scale": tr("grain: from one scale to another"),
        "zoning": tr("cut: from one zoning to another of the same scale"),
        "counting": tr("small numbers: chance alone, under one fixed zoning"),
    }


def verdict_cautions():
    """What a verdict place by place does not say, for the reports of both tools."""
    return [
        tr(
            "A verdict is about one place, not about the map. On maps of pure noise one place in "
            "a hundred or fewer is called settled on average, but up to one map in three has some "
            "such place, and a few have one of 5 % of the people. A lone small place is a reason "
            "to look, not a finding."
        ),
        tr(
            "Counting noise takes events as independent. Where the same people or households have "
            "several, chance is larger than it is taken for, and places are called settled too "
            "often: one in twenty on simulated maps of even risk where a tenth of the people had "
            "all the events. Count people, or keep one event of each."
        ),
    ]


def summaries(statistics, factor):
    """Rows (statistic, lowest, q05, q50, q95, highest) of the scenarios of one scale.

    Parameters
    ----------
    statistics : dict of str to (replicates,) array
    factor : float
        From the core's value to the unit shown.
    """
    return [
        (name, *(summarise(statistics[name]) * (factor if name in VALUES else 1.0)))
        for name in statistic_words()
        if name in statistics
    ]


def table_columns(scale_column, rows, unit):
    """Columns of TABLE, one row for each scale and statistic.

    Parameters
    ----------
    scale_column : (str, str, str)
        Name, kind and alias of the column of the scale.
    rows : sequence of (scale, replicates, statistic, lowest, q05, q50, q95, highest)
    unit : str
        Of the values, for the statistics that carry one.
    """
    scale, replicates, statistic, *figures = zip(*rows)
    words = statistic_words()
    name, kind, alias = scale_column
    aliases = {
        "lowest": tr("lowest over the replicates"),
        "q05": tr("5 % quantile"),
        "q50": tr("median"),
        "q95": tr("95 % quantile"),
        "highest": tr("highest over the replicates"),
    }
    return [
        Column(name, kind, scale, alias),
        Column("replicates", "int", replicates, tr("Zonings")),
        Column("statistic", "text", statistic, tr("Statistic")),
        Column("meaning", "text", [words[key] for key in statistic], tr("Meaning")),
        Column("unit", "text", [unit if key in VALUES else "" for key in statistic], tr("Unit")),
        *(Column(key, "float", column, aliases[key]) for key, column in zip(aliases, figures)),
    ]


def draw_fan(figure, scales, values, scale_label, value_label, overall=None, official=None):
    """Plot the spread of a statistic over scenarios against the scale.

    Parameters
    ----------
    figure : matplotlib figure
    scales : (scales,) array
    values : sequence of (replicates,) arrays
    overall : float or None
        Drawn as a level line: the value of the whole area.
    official : (scale, value) or None
        Drawn as a mark.
    """
    summary = np.array([summarise(one) for one in values])
    axes = figure.add_subplot()
    order = np.argsort(scales)
    scales, summary = np.asarray(scales, float)[order], summary[order]
    if len(scales) > 1:
        axes.fill_between(
            scales, summary[:, 1], summary[:, 3], color=BAND, alpha=0.75, lw=0,
            label=tr("9 of 10 zonings"),
        )  # fmt: skip
        axes.set_xscale("log")
    axes.plot(scales, summary[:, 2], color=LINE, marker="o", label=tr("median"))
    for column, label in ((0, tr("lowest and highest")), (4, None)):
        axes.plot(scales, summary[:, column], color=LINE, lw=0.9, ls=":", marker=".", label=label)
    if overall is not None:
        axes.axhline(overall, color=MARK, lw=1.2, label=tr("whole area"))
    if official is not None:
        axes.plot(*official, "D", color=MARK, ms=8, label=tr("official zoning"))
    axes.set_xticks(scales, [number(scale) for scale in scales])
    axes.minorticks_off()
    axes.set_xlabel(scale_label)
    axes.set_ylabel(value_label)
    axes.set_ylim(bottom=min(0.0, float(np.nanmin(summary))))
    axes.legend(frameon=False, fontsize=9)


def draw_sources(figure, deviations, unit):
    """Plot the three standard deviations side by side.

    Parameters
    ----------
    deviations : dict of str to float
        Keys ``scale``, ``zoning`` and ``counting``.
    unit : str
    """
    words = source_words()
    axes = figure.add_subplot()
    names = list(words)[::-1]
    heights = [deviations[name] for name in names]
    bars = axes.barh([words[name] for name in names], heights, color=[SOURCES[n] for n in names])
    axes.bar_label(bars, [f"{number(height)} {unit}" for height in heights], padding=4, fontsize=9)
    axes.set_xlim(0, 1.2 * max([*heights, 1e-300]))
    axes.grid(axis="y", visible=False)
    axes.set_xlabel(tr("standard deviation ({})").format(unit))


def draw_allocation(figure, found):
    """Plot the share of the events that the budget reaches under each zoning.

    Parameters
    ----------
    found : numeric.allocation.Allocation
    """
    axes = figure.add_subplot()
    shares = 100 * found.scenarios / found.events
    axes.hist(shares, bins=min(40, max(5, len(shares) // 8)), color=BAND, edgecolor="white", lw=0.4)
    lines = [
        (found.averaged, LINE, "-", tr("average over all zonings")),
        (found.by_chance, "#7c8188", ":", tr("places drawn at random")),
    ]
    if found.official is not None:
        lines.append((found.official, MARK, "--", tr("official zoning")))
    for events, colour, dash, label in lines:
        axes.axvline(100 * events / found.events, color=colour, ls=dash, lw=2, label=label)
    axes.set_xlabel(tr("share of held-out events reached (%)"))
    axes.set_ylabel(tr("zonings"))
    axes.set_ylim(top=1.3 * axes.get_ylim()[1])
    axes.legend(frameon=False, fontsize=9, loc="upper left", ncol=len(lines))


def allocation_words(found):
    """Plain sentences on what a budget reaches.

    Parameters
    ----------
    found : numeric.allocation.Allocation

    Returns
    -------
    list of str
    """
    low, middle, high = found.quantiles()
    events = found.events
    words = [
        tr(
            "A service that covers {} of the total and goes to the places with the highest values "
            "reaches {} of the events when the middling single zoning chooses the places; nine of "
            "ten zonings reach between {} and {}."
        ).format(
            percent(found.budget, 0),
            percent(middle / events),
            percent(low / events),
            percent(high / events),
        ),
        tr(
            "Between them lie {} events out of {}. Up to about {} would lie there by luck, if all "
            "zonings chose equally good places; only what is beyond that is owed to where lines "
            "run. Places chosen by the value averaged over all zonings reach {}, {} events {} than "
            "the middling zoning; places drawn at random would reach {}."
        ).format(
            number(round(high - low)),
            number(events),
            number(round(found.by_luck)),
            percent(found.averaged / events),
            number(abs(round(found.averaged - middle))),
            tr("more") if found.averaged >= middle else tr("fewer"),
            percent(found.budget),
        ),
        tr(
            "Places are chosen on one random half of the events and counted on the other, then the "
            "halves change parts. Chosen with hindsight, by the very events that are counted, they "
            "would seem to reach {}; nobody can plan by that."
        ).format(percent(found.best / events)),
    ]
    if found.official is not None:
        words.insert(
            1,
            tr("The official zoning reaches {}; {} of the simulated zonings reach fewer.").format(
                percent(found.official / events), percent(found.official_place(), 0)
            ),
        )
    return words
