"""Correlation under re-zoning: how far r and the slope depend on the zones they are taken over."""

from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np

from ..plugin.outputs import Column
from ..plugin.report import Report
from ..plugin.text import number, percent, tr
from .base import SteadfieldAlgorithm
from .numeric import zones
from .numeric.correlation import MEASURES, CorrelationSpread, relation, simulate_correlation
from .numeric.errors import InputError
from .numeric.progress import part
from .numeric.variance import zone_values
from .zoning_pages import BAND, LINE, MARK
from .zoning_units import (
    BUILDERS,
    Rate,
    Units,
    add_scheduler,
    add_units,
    add_zones,
    builder_words,
    place_of_work,
    read_rate,
    read_units,
    zone_counts,
)

MOST_MEMORY = 2e9
BYTES_A_ZONING = 64.0  # four measures, and once more while quantiles are taken


@dataclass(frozen=True)
class Study:
    """Two rates over the units and their correlation under many zonings."""

    units: Units
    x: Rate
    y: Rate
    names: tuple
    spread: CorrelationSpread

    def factor(self, measure):
        """From the core's value of a measure to the unit shown."""
        return self.y.factor / self.x.factor if measure.endswith("slope") else 1.0


class CorrelationSpreadAlgorithm(SteadfieldAlgorithm):
    """Correlate two rates over many random zonings of the same units."""

    ID = "correlationspread"
    NAME = tr("Correlation under re-zoning")
    GROUP = "zoning"
    QUESTION = "cut"
    TAGS = (tr("correlation"), tr("regression"), tr("slope"), tr("zoning"), tr("ecological"))
    HELP = tr(
        "Two rates of the same base units are correlated again and again, each time over zones "
        "that the units are grouped into at random, at several numbers of zones. The spread of r "
        "and of the slope says how far a published correlation between areas is owed to the areas. "
        "It says nothing about persons: what holds between areas need not hold between people."
    )

    def define(self):
        add_units(self, tr("Small areas with both counts; they share borders."))
        for axis, words in (("X", tr("x, what explains")), ("Y", tr("y, what is explained"))):
            self.add_field(
                f"{axis}_COUNT",
                tr("Count of {}").format(words),
                "UNITS",
                tr("Events or members in each unit."),
                optional=False,
            )
            self.add_field(
                f"{axis}_TOTAL",
                tr("Total of {}").format(words),
                "UNITS",
                tr("What the count is taken over. Empty: area."),
            )
        add_zones(self, 1000)
        self.add_seed()
        add_scheduler(self)
        self.add_working_crs()
        self.add_table(
            "TABLE",
            tr("Table of correlations"),
            tr("One row for each number of zones and measure: quantiles, extremes, base units."),
        )
        self.add_report()
        self.add_numbers(
            R_UNITS=tr("r over the base units"),
            R_MEDIAN=tr("Median r over all zonings"),
            R_LOW=tr("5 % quantile of r over all zonings"),
            R_HIGH=tr("95 % quantile of r over all zonings"),
        )

    def work(self, job):
        study = examine(job)
        r = all_zonings(study, "r")
        low, middle, high = quantiles(r, (0.05, 0.5, 0.95))
        job.give("R_UNITS", float(study.spread.base[0]))
        job.give("R_MEDIAN", middle)
        job.give("R_LOW", low)
        job.give("R_HIGH", high)
        job.write_layer("TABLE", table_of(study), None, "none")
        write_page(self, job, study)


def examine(job):
    """Read the units, simulate the zonings and put together what was found.

    Returns
    -------
    Study
    """
    units = read_units(job)
    x, y = read_rate(job, units, "X_COUNT", "X_TOTAL"), read_rate(job, units, "Y_COUNT", "Y_TOTAL")
    both = relation(units.graph, x.counts, x.totals, y.counts, y.totals)
    counts = zone_counts(job, units)
    generator = np.random.default_rng(np.random.SeedSequence(job.seed(), spawn_key=(1,)))
    plan = zones.recipes(
        both_as_problem(both),
        job.choice("BUILDER", BUILDERS),
        counts,
        generator,
        job.real("LEAST_TOTAL"),
        job.real("BALANCE_TOLERANCE"),
        part(job.progress, 0.1, 0.12),
    )
    replicates = job.whole("REPLICATES")
    if BYTES_A_ZONING * replicates * len(plan) > MOST_MEMORY:
        raise InputError(
            tr("{}: so many zonings do not fit into memory; choose {} or fewer.").format(
                job.label("REPLICATES"), number(MOST_MEMORY // (BYTES_A_ZONING * len(plan)))
            )
        )
    with place_of_work(job) as executor:
        spread = simulate_correlation(
            both, plan, replicates, job.seed(), executor, part(job.progress, 0.12, 0.95)
        )
    return Study(units, x, y, (job.field("X_COUNT"), job.field("Y_COUNT")), spread)


def both_as_problem(both):
    """The part of a relation that zones are made by: the graph and the totals of y."""
    return SimpleNamespace(graph=both.graph, totals=both.y_totals)


def all_zonings(study, measure):
    """A measure over the zonings of all numbers of zones, in the unit shown."""
    column = MEASURES.index(measure)
    every = np.concatenate([rows[:, column] for rows in study.spread.scenarios])
    return every * study.factor(measure)


def quantiles(values, levels):
    """Quantiles of what is defined; NaN without any."""
    values = values[~np.isnan(values)]
    if not len(values):
        return [float("nan")] * len(levels)
    return [float(value) for value in np.quantile(values, levels)]


def measure_words():
    """Each measure in words, by key."""
    return {
        "r": tr("correlation r, zones alike"),
        "slope": tr("slope of y on x, zones alike"),
        "weighted_r": tr("correlation r, zones weighted by the total of y"),
        "weighted_slope": tr("slope of y on x, zones weighted by the total of y"),
    }


def slope_unit(study):
    """Unit of the slope: y for each unit of x."""
    return tr("{} of y for 1 {} of x").format(study.y.unit, study.x.unit)


def shown_rows(study):
    """Rows (zones, measure, lowest, q05, q50, q95, highest, share above 0, base) as shown."""
    rows = []
    for zone_count, measure, *levels, above in study.spread.summary():
        factor = study.factor(measure)
        base = study.spread.base[MEASURES.index(measure)] * factor
        rows.append((zone_count, measure, *(factor * level for level in levels), above, base))
    return rows


def table_of(study):
    """The columns of TABLE."""
    zone_count, measure, *figures = zip(*shown_rows(study))
    words = measure_words()
    unit = slope_unit(study)
    replicates = [len(study.spread.scenarios[0])] * len(measure)
    aliases = {
        "lowest": tr("lowest over the replicates"),
        "q05": tr("5 % quantile"),
        "q50": tr("median"),
        "q95": tr("95 % quantile"),
        "highest": tr("highest over the replicates"),
        "above_zero": tr("share of zonings above 0"),
        "base_units": tr("over the base units themselves"),
    }
    return [
        Column("zone_count", "int", zone_count, tr("Number of zones")),
        Column("replicates", "int", replicates, tr("Zonings")),
        Column("measure", "text", measure, tr("Measure")),
        Column("meaning", "text", [words[key] for key in measure], tr("Meaning")),
        Column("unit", "text", [unit if k.endswith("slope") else "" for k in measure], tr("Unit")),
        *(Column(key, "float", column, aliases[key]) for key, column in zip(aliases, figures)),
    ]


def answer_words(study):
    """The answer in a sentence."""
    r = all_zonings(study, "r")
    low, high = quantiles(r, (0.05, 0.95))
    base = study.spread.base[0]
    opposite = float(np.mean(np.sign(r[~np.isnan(r)]) == -np.sign(base)))
    words = tr(
        "Over the {} base units the two rates correlate with r = {}; over zones made of the same "
        "units r is between {} and {} in nine of ten zonings"
    ).format(number(study.units.graph.units), number(base, 2), number(low, 2), number(high, 2))
    if opposite < 0.0005:
        return words + tr(", always of the same sign.")
    return words + tr(", and of the opposite sign in {}.").format(percent(opposite))


def scale_words(study):
    """How r changes from many zones to few."""
    rows = [row for row in shown_rows(study) if row[1] == "r"]
    if len(rows) < 2:
        return []
    few, many = rows[0], rows[-1]
    return [
        tr(
            "The middling r is {} with {} zones and {} with {}. A correlation between large areas "
            "is not comparable with one between small areas."
        ).format(number(few[4], 2), number(few[0]), number(many[4], 2), number(many[0]))
    ]


def draw_spread(figure, study, measures, label):
    """Plot the spread of two measures against the number of zones, the base units beside."""
    words = measure_words()
    panels = figure.subplots(1, 2, sharey=True)
    for axes, measure in zip(panels, measures):
        rows = np.array(
            [row[:1] + row[2:] for row in shown_rows(study) if row[1] == measure], float
        )
        counts, lowest, q05, q50, q95, highest, _, base = rows.T
        if len(counts) > 1:
            axes.fill_between(
                counts, q05, q95, color=BAND, alpha=0.75, lw=0, label=tr("9 of 10 zonings")
            )
            axes.set_xscale("log")
        else:
            axes.vlines(counts, q05, q95, color=BAND, lw=8, label=tr("9 of 10 zonings"))
        axes.plot(counts, q50, color=LINE, marker="o", label=tr("median"))
        for limit, name in ((lowest, tr("lowest and highest")), (highest, None)):
            axes.plot(counts, limit, color=LINE, lw=0.9, ls=":", marker=".", label=name)
        axes.axhline(base[0], color=MARK, lw=1.4, ls="--", label=tr("base units"))
        axes.axhline(0, color="#5b6068", lw=0.8)
        axes.set_xticks(counts, [number(count) for count in counts])
        axes.minorticks_off()
        axes.set_xlabel(tr("number of zones"))
        axes.set_title(words[measure], fontsize=10)
    panels[0].set_ylabel(label)
    panels[1].legend(frameon=False, fontsize=9)


def draw_units(figure, study):
    """Plot the two rates of the base units against each other."""
    axes = figure.add_subplot()
    x = zone_values(study.x.counts, study.x.totals) * study.x.factor
    y = zone_values(study.y.counts, study.y.totals) * study.y.factor
    size = 4 + 40 * study.y.totals / max(study.y.totals.max(), 1e-300)
    axes.scatter(x, y, s=size, color=LINE, alpha=0.45, lw=0)
    axes.set_xlabel(f"{study.names[0]} ({study.x.unit})")
    axes.set_ylabel(f"{study.names[1]} ({study.y.unit})")


def write_page(algorithm, job, study):
    """Write REPORT."""
    if not job.wanted("REPORT"):
        return
    report = Report(
        algorithm.displayName(),
        tr("Would the correlation be the same between other areas?"),
        answer_words(study),
        confidential=True,
    )
    report.text("", *scale_words(study))
    report.plot(
        tr("r by number of zones"),
        lambda figure: draw_spread(figure, study, ("r", "weighted_r"), "r"),
        tr(
            "Each zoning gives one r; the band holds nine of ten zonings, the dots are the lowest "
            "and highest. The dashed line is r over the base units."
        ),
        size=(9.0, 4.2),
    )
    report.plot(
        tr("Slope by number of zones"),
        lambda figure: draw_spread(figure, study, ("slope", "weighted_slope"), slope_unit(study)),
        tr("The slope of y on x in the same zonings: {}.").format(slope_unit(study)),
        size=(9.0, 4.2),
    )
    report.plot(
        tr("The base units themselves"),
        lambda figure: draw_units(figure, study),
        tr("Each dot is a base unit; its area grows with the total of y."),
        size=(6.0, 4.2),
    )
    words = measure_words()
    rows = [
        [number(row[0]), words[row[1]], *(number(v, 3) for v in row[2:7]), percent(row[7]),
         number(row[8], 3)]
        for row in shown_rows(study)
    ]  # fmt: skip
    report.table(
        tr("Measures by number of zones"),
        [tr("zones"), tr("measure"), tr("lowest"), tr("5 %"), tr("median"), tr("95 %"),
         tr("highest"), tr("above 0"), tr("base units")],
        rows,
        tr("{} zonings of each number of zones. Slopes: {}.").format(
            number(len(study.spread.scenarios[0])), slope_unit(study)
        ),
    )  # fmt: skip
    job.write_report(report, method_words(job, study), caution_words())


def method_words(job, study):
    """What was done, with sources."""
    return [
        tr(
            "{} units in {} zonings of each number of zones. {} Every zone is one connected piece."
        ).format(
            number(study.units.graph.units), number(job.whole("REPLICATES")), builder_words(job)
        ),
        tr(
            "In every zoning both rates are counts over totals of the zones; r is Pearson's and "
            "the slope is by least squares of y on x, once with zones alike and once weighted by "
            "the total of y. Zones without one of the rates drop out."
        ),
        tr(
            "That r rises as areas are merged: Gehlke & Biehl 1934, J. Am. Stat. Assoc. 29:169. "
            "That it says nothing of persons: Robinson 1950, Am. Sociol. Rev. 15:351. That zonings "
            "of one map can give almost any r: Openshaw & Taylor 1979."
        ),
    ]


def caution_words():
    """What a reader must not conclude."""
    return [
        tr("A correlation between areas, however steady, is not one between persons."),
        tr(
            "Zones share borders and so are not independent: the spread over zonings is no "
            "confidence interval."
        ),
        tr("Rates of single units may point to single persons. This page is not made for release."),
    ]
