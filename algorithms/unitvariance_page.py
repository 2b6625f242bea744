"""The report of zoning variance from base units."""

import numpy as np

from ..plugin.report import Report
from ..plugin.text import listed, number, percent, tr
from .numeric.official import share_as_extreme
from .unitvariance_plots import FANNED, draw_fans, draw_maps, draw_source_maps, map_height
from .zoning_pages import (
    VALUES,
    allocation_words,
    draw_allocation,
    draw_sources,
    source_words,
    statistic_words,
    summaries,
    verdict_cautions,
)
from .zoning_units import builder_words

MOST_LISTED = 25


def write_page(algorithm, job, study):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    study : unitvariance_study.Study
    """
    if not job.wanted("REPORT"):
        return
    report = Report(
        algorithm.displayName(),
        tr("Would the map say the same had the boundaries been drawn otherwise?"),
        answer_words(study),
        confidential=True,
    )
    report.text("", *movement_words(study))
    _maps(report, study, job.working.metres)
    _fans(report, study)
    _official(report, study)
    _sources(report, study, job.working.metres)
    if study.run.allocation is not None:
        report.text(tr("What the cut costs a service"), *allocation_words(study.run.allocation))
        report.plot(
            "",
            lambda figure: draw_allocation(figure, study.run.allocation),
            tr("Share of the held-out events that each zoning reaches with the same budget."),
            size=(8.0, 3.2),
        )
    _places(report, study)
    _statistics(report, study)
    job.write_report(report, method_words(job, study), caution_words(study))


def _maps(report, study, metres):
    report.plot(
        tr("Where the verdict holds"),
        lambda figure: draw_maps(figure, study, metres),
        tr(
            "Left: value averaged over all zonings ({}). Right: units that stand above or below "
            "{} {} under at least 95 of 100 zonings and beyond what chance alone would do."
        ).format(study.rate.unit, number(study.threshold), study.rate.unit),
        size=(9.5, map_height(study, 9.0, 2, 1.9)),
    )


def _fans(report, study):
    caption = tr(
        "Each zoning gives one figure; the band holds nine of ten zonings of a number, the dots "
        "are the lowest and the highest. All of them show the same counts."
    )
    if study.run.official is not None:
        caption += " " + tr("The diamond is the official zoning, at its own number of zones.")
    report.plot(
        tr("What each statistic can be made to say"),
        lambda figure: draw_fans(figure, study),
        caption,
        size=(9.5, 6.2),
    )


def _sources(report, study, metres):
    report.plot(
        tr("What moves the value of a unit"),
        lambda figure: draw_source_maps(figure, study, metres),
        tr(
            "Standard deviation of each unit's value ({}), on one scale of colour: from one number "
            "of zones to another, from one zoning to another of the same number, and by chance "
            "under one fixed zoning."
        ).format(study.rate.unit),
        size=(9.5, map_height(study, 8.4, 3, 0.9)),
    )
    report.plot(
        "",
        lambda figure: draw_sources(figure, typical_deviations(study), study.rate.unit),
        tr(
            "The same at a typical unit, averaged over the total. The squares of grain and cut add "
            "up to all the movement over zonings; small numbers stand beside them."
        ),
        size=(8.0, 2.6),
    )


def answer_words(study):
    """The answer in a sentence."""
    verdicts = study.verdicts()
    above, below = study.share_with(1), study.share_with(-1)
    against = (
        tr("the overall value of {} {}")
        if np.isclose(study.threshold, study.overall)
        else tr("the threshold of {} {}")
    ).format(number(study.threshold), study.rate.unit)
    many = int((~np.isnan(verdicts)).sum())
    if above + below == 0:
        return tr(
            "None of the {} units stands above or below {} under nearly every zoning and beyond "
            "chance: what the map shows depends on how units are grouped, or on small numbers."
        ).format(number(many), against)
    return tr(
        "{} of {} units, with {} of the total, stand above {} however they are grouped, and {} "
        "({}) stand below; for the other {} the map depends on the cut or on small numbers."
    ).format(
        number((verdicts == 1).sum()),
        number(many),
        percent(above),
        against,
        number((verdicts == -1).sum()),
        percent(below),
        number((verdicts == 0).sum()),
    )


def movement_words(study):
    """Sentences on the spread of the highest value, where movement comes from, and the official."""
    run = study.run
    column = run.problem.statistic_names().index("largest")
    largest = np.concatenate([scale.statistics[:, column] for scale in run.scales])
    low, high = np.nanquantile(largest, [0.05, 0.95]) * study.rate.factor
    unit = study.rate.unit
    words = [
        tr(
            "The same counts show a highest zone of {} or of {} {} (5 % and 95 % of {} zonings), "
            "and {} {} over the whole area."
        ).format(number(low), number(high), unit, number(len(largest)), number(study.overall), unit)
    ]
    small = total_of_highest(study)
    if small is not None and small * run.problem.overall < 5:
        words.append(
            tr(
                "The highest zone of all holds only {} of the total, so few that chance alone "
                "makes such values; tree-cut zones with a least total keep them out."
            ).format(number(small))
        )
    typical = typical_deviations(study)
    total = typical["scale"] ** 2 + typical["zoning"] ** 2
    if total > 0:
        words.append(
            tr(
                "Of the variance of a typical unit over all zonings, {} is grain and {} is cut. "
                "Chance alone, under one fixed zoning, would give {} of that variance."
            ).format(
                percent(typical["scale"] ** 2 / total, 0),
                percent(typical["zoning"] ** 2 / total, 0),
                percent(typical["counting"] ** 2 / total, 0),
            )
        )
    return words


def total_of_highest(study):
    """Total of the highest zone in the zoning with the highest; None when others were kept."""
    run = study.run
    if run.statistic != "largest" or run.largest is None:
        return None
    labels = run.largest.labels
    counts = np.bincount(labels, study.rate.counts)
    totals = np.bincount(labels, study.rate.totals)
    used = totals > 0
    return float(totals[used][np.argmax(counts[used] / totals[used])])


def typical_deviations(study):
    """Root of the mean variance over the total, by source, in the unit shown."""
    split = study.run.decomposition()
    known = ~np.isnan(split.mean) & (study.rate.totals > 0)
    weight = study.rate.totals[known]
    return {
        name: study.rate.factor
        * float(np.sqrt(np.average(getattr(split, name)[known], weights=weight)))
        for name in ("scale", "zoning", "counting")
    }


def _official(report, study):
    """The official zoning among those with as many zones: words and a table."""
    run = study.run
    if run.official is None:
        return
    beside = [scale for scale in (*run.scales, run.reference) if scale is not None]
    beside = [s for s in beside if s.recipe.zone_count == run.official.zone_count]
    title = tr("The official zoning among {} that could have been drawn")
    if not beside:
        report.text(
            tr("The official zoning"),
            tr("No zonings of {} zones could be simulated to compare it with.").format(
                number(run.official.zone_count)
            ),
        )
        return
    names, words = run.problem.statistic_names(), statistic_words()
    statistics = dict(zip(names, beside[0].statistics.T))
    rows, odd = [], []
    for row in summaries(statistics, study.rate.factor):
        column = names.index(row[0])
        place = run.official.places[column]
        factor = study.rate.factor if row[0] in VALUES else 1.0
        if row[0] == "zones":
            continue
        rows.append(
            [
                words[row[0]],
                number(run.official.statistics[column] * factor),
                *(number(value) for value in row[2:5]),
                percent(place, 0),
            ]
        )
        if place < 0.025 or place > 0.975:
            odd.append(words[row[0]])
    counted = [names.index(row) for row in statistic_words() if row in names and row != "zones"]
    together = share_as_extreme(beside[0].statistics[:, counted], run.official.statistics[counted])
    if odd:
        said = tr(
            "Against chance zonings of as many zones it stands out in: {}. Of all zonings {} stand "
            "as far out in some statistic, so that {}."
        ).format(
            listed(odd),
            percent(together, 0),
            tr("it is an unusual one as a whole")
            if together <= 0.05
            else tr("this may be chance: of many statistics one is often far out"),
        )
    else:
        said = tr(
            "In none of the statistics does it stand outside the middle 95 % of chance zonings of "
            "as many zones."
        )
    report.text(title.format(number(beside[0].replicates)), said)
    report.table(
        "",
        [
            tr("statistic"),
            tr("official"),
            tr("5 %"),
            tr("median"),
            tr("95 %"),
            tr("simulated below it"),
        ],
        rows,
        tr("Simulated: {} zonings of {} zones.").format(
            number(beside[0].replicates), number(run.official.zone_count)
        ),
    )


def _places(report, study):
    """Units that hold, and those with much at stake that depend most on the cut."""
    run, verdicts = study.run, study.verdicts()
    split = run.decomposition()
    p_above, _ = run.above()
    mean, cut = study.shown(split.mean), study.shown(np.sqrt(split.zoning))
    low, high = study.shown(run.quantiles(0.05)), study.shown(run.quantiles(0.95))
    rank_low, rank_high = run.rank_quantiles(0.05), run.rank_quantiles(0.95)

    def rows(chosen):
        return [
            [
                study.labels[unit],
                number(mean[unit]),
                f"{number(low[unit])} – {number(high[unit])}",
                percent(p_above[unit], 0),
                f"{rank_low[unit]:.0f} – {rank_high[unit]:.0f}",
            ]
            for unit in chosen[:MOST_LISTED]
        ]

    columns = [
        tr("unit"),
        tr("mean ({})").format(study.rate.unit),
        tr("5 % – 95 % of zonings"),
        tr("zonings above"),
        tr("rank, 5 % – 95 %"),
    ]
    depend = np.flatnonzero((verdicts == 0) & ~np.isnan(cut))
    lists = (
        (tr("Units that hold above"), np.flatnonzero(verdicts == 1), -mean, tr("highest first")),
        (tr("Units that hold below"), np.flatnonzero(verdicts == -1), mean, tr("lowest first")),
        (tr("Units that depend most on the cut"), depend, -cut, tr("most moved first")),
    )
    for title, chosen, key, order in lists:
        if not len(chosen):
            report.text(title, tr("None."))
            continue
        chosen = chosen[np.argsort(key[chosen], kind="stable")]
        note = tr("{} of {}, {}; all are in the layer of units.").format(
            number(min(len(chosen), MOST_LISTED)), number(len(chosen)), order
        )
        report.table(title, columns, rows(chosen), note)


def _statistics(report, study):
    """Medians and the middle nine tenths of each statistic, a row a number of zones."""
    words, names = statistic_words(), study.run.problem.statistic_names()
    rows = []
    for scale in study.run.scales:
        found = {
            row[0]: row[1:]
            for row in summaries(dict(zip(names, scale.statistics.T)), study.rate.factor)
        }
        cells = [
            f"{number(found[name][2])} ({number(found[name][1])} – {number(found[name][3])})"
            for name in FANNED
        ]
        rows.append([number(scale.recipe.zone_count), *cells])
    report.table(
        tr("Statistics of the zonings by number of zones"),
        [tr("zones"), *(words[name] for name in FANNED)],
        rows,
        tr(
            "Median, and in brackets the 5 % and 95 % quantiles over {} zonings of each number. "
            "Values in {}."
        ).format(number(study.run.scales[0].replicates), study.rate.unit),
    )


def method_words(job, study):
    """What was done, with sources."""
    source = source_words()
    shared = (
        tr("a share v, v (1 − v) / N")
        if study.run.problem.kind == "share"
        else tr("a rate v, v / N")
    )
    return [
        tr(
            "{} units in {} zonings of each number of zones. {} Every zone is one connected piece; "
            "units are neighbours when they share a border longer than zero. Only running sums are "
            "kept (Welford 1962, Technometrics 4:419; Chan, Golub & LeVeque 1983, Am. Stat. "
            "37:242)."
        ).format(
            number(study.run.problem.graph.units),
            number(job.whole("REPLICATES")),
            builder_words(job),
        ),
        tr(
            "Movement is split by the law of total variance: {}; {}. Counting noise is, for {}, N "
            "the total of the zone, averaged over zonings: {}."
        ).format(source["scale"], source["zoning"], shared, source["counting"]),
        tr(
            "A unit holds above (below) when its zone exceeds the threshold in at least 95 % (at "
            "most 5 %) of zonings, and when the excess in units of counting noise (Anscombe 1948, "
            "Biometrika 35:246), averaged over zonings, is at least 1.96 in size. The second "
            "condition is needed because one set of counts has chance clusters that show under "
            "nearly every cut."
        ),
        tr(
            "Quantiles are read from fine bins fixed beforehand. The mean over zonings is itself a "
            "published estimator (overlay aggregation: Tuson et al. 2020, Int. J. Health Geogr. "
            "19:42). Why the cut matters: Gehlke & Biehl 1934; Openshaw & Taylor 1979."
        ),
    ]


def caution_words(study):
    """What a reader must not conclude."""
    words = [
        tr(
            "A unit that holds does so against random zonings of these base units at these numbers "
            "of zones; how the base units themselves were drawn is not put to the test."
        ),
        *verdict_cautions(),
        tr(
            "Simulated zones follow no river, road or history. An official zoning that stands out "
            "among them may have good reasons to."
        ),
        tr(
            "Values of single units may point to single persons. Neither this page nor the layers "
            "are made for release; use the tools of the group Safe release for what is published."
        ),
    ]
    if study.rate.factor == 1.0:
        words.insert(1, tr("Without a total a high density may only show where people live."))
    return words
