"""The report of a release in hexagons: for the custodian's file, not for release."""

import numpy as np
import shapely

from ..plugin.looks import MISSING
from ..plugin.report import Report
from ..plugin.text import number, percent, tr
from .numeric.release_plan import CONTROLLED, MERGE, NOISE, ROUND, WITHHOLD
from .plots import colour_ramp


def write_page(algorithm, job, study, made, shown, shapes, loss):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    study : safehexagons_study.Study
    made : numeric.release_plan.Release
    shown : (k,) int array
        Zones in the release.
    shapes : (zones,) array of shapely polygons
    loss : (float, float)
        Hellinger distance and rank correlation.
    """
    if not job.wanted("REPORT"):
        return
    report = Report(
        algorithm.displayName(),
        tr("Can anyone be picked out, alone or combined with what is already published?"),
        answer_words(job, study, made),
        confidential=True,
    )
    report.plot(
        tr("What is released"),
        lambda figure: draw_release(figure, job, study, made, shown, shapes),
        tr(
            "Published figures only; grey hexagons carry none. Which of those are unsafe, empty or "
            "withheld to protect others is not shown here and must not be told."
        ),
        size=(8.0, 6.4),
    )
    report.table(
        tr("Figures"),
        [tr("figure"), tr("value"), tr("may be published")],
        figure_rows(job, study, made, loss),
        tr(
            "Loss compares the true counts of the hexagons with what a reader can rebuild: a "
            "merged zone's count shared evenly, 0 where nothing is published."
        ),
    )
    report.text(tr("Rules"), *rule_words(study))
    report.text(tr("What the rules protect from, and what not"), *protection_words(study))
    job.write_report(report, method_words(study), caution_words(study))


def answer_words(job, study, made):
    """The answer in a sentence."""
    results = job.results
    words = tr("{} hexagons are released").format(number(results["CELLS_RELEASED"]))
    if results["CELLS_MERGED"]:
        words += tr(", {} more in merged zones").format(number(results["CELLS_MERGED"]))
    words += tr(" and {} withheld").format(number(results["CELLS_WITHHELD"]))
    records = made.behind.whole.records.sum()
    kept = results["RECORDS_RELEASED"] + results["RECORDS_MERGED"]
    words += tr("; they carry {} of the records. ").format(percent(kept / max(records, 1)))
    if study.plan.method == NOISE:
        if study.plan.seed is not None:
            return words + tr("This is a rehearsal with a seed and must not be released.")
        return words + tr(
            "No figure is a true count; one person's records make no outcome more than {} times as "
            "likely."
        ).format(number(np.exp(study.plan.epsilon)))
    if study.plan.method in (ROUND, CONTROLLED):
        return words + tr(
            "From these figures and the totals released with them alone, no count below the least "
            "can be told more closely than its own rounding tells it."
        )
    return words + tr(
        "Every figure meets the rules below, and from these figures and the totals released with "
        "them alone, by subtraction, no withheld figure can be placed within its protection range."
    )


def figure_rows(job, study, made, loss):
    """Rows (figure, value, may be published)."""
    yes, no = tr("yes"), tr("no")
    results = job.results
    rows = [
        (tr("Hexagon size (m)"), number(results["HEXAGON_SIZE_USED"]), yes),
        (tr("Hexagons released on their own"), number(results["CELLS_RELEASED"]), yes),
        (tr("Hexagons in merged zones"), number(results["CELLS_MERGED"]), yes),
        (tr("Hexagons withheld, empty ones among them"), number(results["CELLS_WITHHELD"]), yes),
    ]
    if study.plan.region_totals:
        told = int(np.isfinite(made.region_values[0]).sum())
        rows.append((tr("Region totals released"), number(told), yes))
        rows.append((tr("Region totals withheld"), number(len(study.regions) - told), yes))
    if study.plan.grand_total:
        kept = np.isfinite(made.grand_values[0])
        rows.append((tr("Grand total"), tr("released") if kept else tr("withheld"), yes))
    whole = made.behind.whole
    rows += [
        (tr("Unsafe hexagons or zones"), number(made.unsafe.sum()), no),
        (tr("Withheld to protect others"), number(made.complementary.sum()), no),
        (tr("Records"), number(whole.records.sum()), no),
        (tr("Records released in single hexagons"), number(results["RECORDS_RELEASED"]), no),
        (tr("Records released in merged zones"), number(results["RECORDS_MERGED"]), no),
        (tr("Records withheld"), number(results["RECORDS_WITHHELD"]), no),
    ]
    if study.plan.method == NOISE and made.left_out:
        rows.append((tr("Records left out to bound contributions"), number(made.left_out), no))
    rows += [
        (tr("Hellinger distance, 0 none to 1 all"), number(loss[0]), no),
        (tr("Rank correlation, 1 none lost"), number(loss[1]), no),
    ]
    return rows


def rule_words(study):
    """The rules that were used, each in a sentence."""
    rules = study.plan.rules
    by = (
        tr("records, because no contributor field was given")
        if study.records.contributors is None
        else tr("distinct contributors")
    )
    words = [
        tr("Least count: a figure needs at least {} contributors, counted as {}.").format(
            rules.least_count, by
        )
    ]
    if rules.dominance_n:
        words.append(
            tr("Dominance: the {} largest contributors may hold at most {} % of a total.").format(
                rules.dominance_n, number(rules.dominance_share)
            )
        )
    if rules.p_percent:
        words.append(
            tr(
                "p % rule: what is left of a total without its two largest contributions must be "
                "at least {} % of the largest."
            ).format(number(rules.p_percent))
        )
    if study.records.numerator is not None:
        words.append(
            tr(
                "Share: the numerator and the rest of the count each meet the same rules or are "
                "empty, and the numerator is not the whole count."
            )
            + (tr(" A share of none is unsafe too.") if rules.none_is_group else "")
        )
    if study.plan.region_totals or study.plan.grand_total:
        words.append(
            tr(
                "Subtraction: from the published totals nobody can rule out, for a withheld "
                "figure, any value between what one contributor and what {} contributors of its "
                "average would give."
            ).format(rules.least_count)
        )
    return words


def protection_words(study):
    """What each rule protects from, and what it does not."""
    words = [
        tr(
            "The least count keeps single persons from being counted out. It does not help against "
            "one who holds most of a total; for weighted data switch on dominance or the p % rule."
        ),
        tr(
            "No rule helps against what somebody knows already, for instance nine of the ten "
            "people in a hexagon, nor against something that nearly everybody in a hexagon shares."
        ),
        tr(
            "Several releases of the same records, of other months or other cells, can be "
            "subtracted from one another. Run Release audit over all that is or was published, and "
            "keep the seed of rounding the same."
        ),
        tr("Budgets of noise add up over releases: two of epsilon 1 promise what one of 2 does.")
        if study.plan.method == NOISE
        else tr(
            "Whoever knows that a person is in the records learns nothing new that is exact, but a "
            "high share is still a hint; releases with a bound on hints need noise."
        ),
    ]
    if study.plan.method == MERGE:
        words.append(
            tr(
                "The shapes of merged zones hint at which hexagons were unsafe: what is joined is "
                "drawn at random, but not with equal chances."
            )
        )
    return words


def method_words(study):
    """Method and sources."""
    terms = tr(
        "Terms and rules: Hundepool et al. (2012), Statistical Disclosure Control, Wiley; Handbook "
        "on Statistical Disclosure Control, 2nd edition (2024)."
    )
    words = {
        WITHHOLD: tr("Unsafe hexagons carry no figure."),
        MERGE: tr(
            "Unsafe hexagons join the neighbour that costs least detail until every zone is safe "
            "on a recount of its records; what stays unsafe within the reach is withheld."
        ),
        ROUND: tr(
            "Every figure goes to one of its two neighbouring multiples of {}, up with the "
            "probability that keeps its mean. Totals are rounded on their own, and one that would "
            "tell more than the hexagons' own rounding is left out; so is one in ten of those over "
            "few hexagons, at random, so that a gap does not tell why."
        ).format(study.plan.base),
        CONTROLLED: tr(
            "Figures go to neighbouring multiples of {} so that hexagons add up to the rounded "
            "totals, without bias (Cox 1987, JASA 82:520)."
        ).format(study.plan.base),
        NOISE: tr(
            "Two-sided geometric noise with epsilon {} (Ghosh, Roughgarden & Sundararajan 2012, "
            "SIAM J. Comput. 41:1673), drawn in whole numbers (Canonne, Kamath & Steinke 2020), on "
            "at most {} records of each contributor."
        ).format(number(study.plan.epsilon), study.plan.contribution_limit),
    }
    parts = [words[study.plan.method]]
    if study.plan.method in (ROUND, CONTROLLED):
        parts.append(
            tr("Hexagons that rounding cannot hide, few people with many records, are withheld.")
        )
    if study.plan.method != NOISE and (study.plan.region_totals or study.plan.grand_total):
        parts.append(
            tr(
                "More hexagons are withheld at little cost in records until two linear programmes "
                "for each withheld figure leave its whole protection range open (Kelly, Golden & "
                "Assad 1992, Networks 22:397; Fischetti & Salazar 2001, Math. Program. 89:283). "
                "The outsider is granted all values of single contributors and the smallest unsafe "
                "one of each region; costs carry a random factor, so that nobody can conclude from "
                "the choice which others would have been cheaper."
            )
        )
    return [*parts, terms]


def caution_words(study):
    """What the reader must know."""
    words = [
        tr("Thresholds are set by the data's owner and by law, not by this tool."),
        tr("This page is for the custodian's file. Publish from it only what is marked “yes”."),
        tr("Totals other than those released with the hexagons must not be published."),
    ]
    if study.chosen:
        words.append(tr("The hexagon size was chosen from the number of records, then rounded."))
    if study.area is None:
        words.append(
            tr(
                "Without a boundary the release ends at the rectangle around published hexagons; "
                "records beyond are withheld."
            )
        )
    if study.plan.show_empty and study.plan.method in (WITHHOLD, MERGE):
        words.append(
            tr(
                "Empty hexagons are shown as 0, so a withheld hexagon is known to hold somebody. "
                "Where few people live that alone can tell whom."
            )
        )
    if study.plan.method in (ROUND, CONTROLLED):
        words.append(tr("A rounded figure above 0 tells that somebody is there."))
    if study.plan.method == ROUND and study.plan.seed is None:
        words.append(
            tr(
                "No secret seed was given: the next release rounds anew, and the mean of several "
                "releases comes close to the true figure. Give the same seed every time."
            )
        )
    if study.plan.seed is not None:
        words.append(
            tr(
                "The seed is a secret: who knows it, or can try all that are likely and knows some "
                "true figures, can undo part of the protection. Draw it at random, all nine digits."
            )
        )
    return words


def draw_release(figure, job, study, made, shown, shapes):
    """Map of published figures with a legend bar."""
    from matplotlib.collections import PolyCollection

    share = made.share()
    values, label = made.count()[shown], tr("count")
    if share is not None:
        values, label = share[shown], tr("share")
    elif study.plan.method == MERGE:
        areas = shapely.area(shapes[shown]) * job.working.square_kilometres
        values, label = values / areas, tr("count per km²")
    axes = figure.add_subplot()
    rings = [shapely.get_coordinates(shape.exterior) for shape in shapes[shown]]
    colours = colour_ramp(missing=MISSING)
    drawn = PolyCollection(rings, array=np.ma.masked_invalid(values), cmap=colours)
    drawn.set(edgecolor="#a8a497", linewidth=0.3)
    axes.add_collection(drawn)
    if study.area is not None:
        for one in shapely.get_parts(study.area):
            axes.plot(*shapely.get_coordinates(one.exterior).T, color="#3b3f46", linewidth=0.8)
    axes.autoscale_view()
    axes.set_aspect("equal")
    axes.set_axis_off()
    figure.colorbar(drawn, ax=axes, shrink=0.6, label=label)
