"""The report of the cell size sweep."""

import numpy as np

from ..plugin.looks import SEQUENCE
from ..plugin.report import Report
from ..plugin.text import number, percent, tr

FIRST, SECOND, MARK = SEQUENCE[5], SEQUENCE[3], "#8a5a1c"


def write_page(algorithm, job, found, advice, records):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    found : numeric.cell_size.Sweep
    advice : numeric.cell_size.Advice
    records : int
    """
    if not job.wanted("REPORT"):
        return
    metres, least = job.working.metres, job.whole("LEAST_RECORDS")
    report = Report(
        algorithm.displayName(),
        tr("How large should the cells be that these records are counted in?"),
        answer_words(found, advice, metres, least),
    )
    report.text("", *reason_words(found, advice, metres, job.real("MOST_BELOW") / 100))
    report.plot(
        tr("What the records support"),
        lambda figure: draw_criteria(figure, found, advice, metres),
        tr(
            "Both criteria against the cell size, each from its best (0) to its worst (1) value. "
            "Low is good: small cells follow noise, large cells blur."
        ),
    )
    report.plot(
        tr("What a cell then holds"),
        lambda figure: draw_counts(figure, found, advice, metres),
        tr(
            "A cell with fewer than {} records is thin. The error of a cell is the relative "
            "uncertainty of its count by chance."
        ).format(least),
        size=(8.0, 3.4),
    )
    report.table(
        tr("Sizes tried"),
        [
            tr("cell size (m)"),
            tr("cells with records"),
            tr("thin cells"),
            tr("records in them"),
            tr("median relative error"),
            tr("cross-validation (per km²)"),
            tr("mean-variance cost (per km⁴)"),
        ],
        table_rows(found, metres),
        tr("Averages over {} tilings of each size.").format(job.whole("OFFSETS")),
    )
    job.write_report(report, method_words(records), caution_words())


def answer_words(found, advice, metres, least):
    """The answer in a sentence."""
    return tr(
        "Cells of {} m are advised: {} of the records then stand in cells that hold fewer than {}, "
        "and the count of the middling cell is uncertain by {}."
    ).format(
        number(found.size[advice.advised] * metres),
        percent(found.records_below[advice.advised]),
        least,
        percent(found.counting_error[advice.advised], 0),
    )


def reason_words(found, advice, metres, most_below):
    """Why this size, and where the criteria disagree."""

    def size(position):
        return tr("{} m").format(number(found.size[position] * metres))

    first, second = size(advice.by_cross_validation), size(advice.by_mean_variance)
    if advice.agree:
        words = [
            tr("The two criteria agree: {} by cross-validation, {} by mean and variance.").format(
                first, second
            )
        ]
    else:
        words = [
            tr(
                "The two criteria disagree: {} by cross-validation, {} by mean and variance. The "
                "larger was taken; look at the map with both before it is used."
            ).format(first, second)
        ]
    wanted = max(advice.by_cross_validation, advice.by_mean_variance)
    tolerated = percent(most_below, 0)
    if advice.by_least_records is None:
        words.append(
            tr(
                "At every size tried, more than {} of the records stand in thin cells; the size "
                "with the fewest was taken. Try larger cells, or a lower least count."
            ).format(tolerated)
        )
    elif advice.advised > wanted:
        words.append(
            tr(
                "Larger cells than that are advised so that at most {} of the records stand in "
                "thin cells."
            ).format(tolerated)
        )
    else:
        words.append(
            tr("At that size at most {} of the records stand in thin cells.").format(tolerated)
        )
    if advice.at_the_end:
        words.append(
            tr(
                "A criterion is best at the end of the sizes tried, so a better one may lie "
                "beyond: try a wider range."
            )
        )
    return words


def draw_criteria(figure, found, advice, metres):
    """Plot both criteria, each scaled to 0 to 1."""
    axes = figure.add_subplot()
    size = found.size * metres
    # The two often agree so closely that only a broken line lets both be seen.
    for values, position, colour, dash, words in (
        (found.cross_validation, advice.by_cross_validation, FIRST, "-", tr("cross-validation")),
        (found.mean_variance, advice.by_mean_variance, SECOND, "--", tr("mean and variance")),
    ):
        spread = float(np.ptp(values)) or 1.0
        scaled = (values - values.min()) / spread
        axes.plot(size, scaled, dash, color=colour, lw=2.2, marker="o", ms=4, label=words)
        axes.plot(size[position], scaled[position], "o", color=colour, ms=10, mfc="white", mew=2)
    _mark(axes, size, advice)
    axes.set_ylabel(tr("criterion, best 0 to worst 1"))
    axes.legend(frameon=False, fontsize=9)


def draw_counts(figure, found, advice, metres):
    """Plot the thin cells, the records in them and the counting error."""
    axes = figure.add_subplot()
    size = found.size * metres
    for values, colour, marker, words in (
        (found.records_below, FIRST, "o", tr("records in thin cells")),
        (found.share_below, SEQUENCE[2], "^", tr("thin cells, of those with records")),
        (found.counting_error, SECOND, "s", tr("median error of a cell")),
    ):
        axes.plot(size, 100 * values, color=colour, marker=marker, ms=4, label=words)
    _mark(axes, size, advice)
    axes.set_ylabel("%")
    axes.set_ylim(0, None)
    axes.legend(frameon=False, fontsize=9)


def _mark(axes, size, advice):
    if len(size) > 1:
        axes.set_xscale("log")
    shown = size[:: max(1, len(size) // 7)]
    axes.set_xticks(shown, [number(value) for value in shown])
    axes.minorticks_off()
    axes.axvline(size[advice.advised], color=MARK, lw=1.5, ls="--", label=tr("advised"))
    axes.set_xlabel(tr("cell size (m)"))


def table_rows(found, metres):
    """Rows of the table of sizes, as text."""
    per_area = (metres / 1000) ** 2
    return [
        (
            number(found.size[row] * metres),
            number(found.cells[row]),
            percent(found.share_below[row]),
            percent(found.records_below[row]),
            percent(found.counting_error[row]),
            number(found.cross_validation[row] / per_area),
            number(found.mean_variance[row] / per_area**2),
        )
        for row in range(len(found.size))
    ]


def method_words(records):
    """What was done, with sources."""
    return [
        tr(
            "{} records were counted in every tiling, shifted and turned at random. "
            "Cross-validation is the score of Rudemo (1982), Scand. J. Stat. 9:65, for the density "
            "of the records; the cost by mean and variance is (2 mean − variance) / area², "
            "Shimazaki & Shinomoto (2007), Neural Comput. 19:1503, over the cells whose centre "
            "lies in the study area. Both estimate, up to a constant, the squared error of the "
            "cell counts taken as a density."
        ).format(number(records)),
        tr(
            "The relative counting error of a cell is the root of the sum of squared weights over "
            "the sum of weights, 1 / √n without weights. The tolerated share is common practice, "
            "no source."
        ),
    ]


def caution_words():
    """What a reader must not conclude."""
    return [
        tr(
            "The advice balances noise against blur over the whole area; a dense centre bears "
            "smaller cells than the outskirts."
        ),
        tr(
            "A size that suits counting is not thereby safe to publish: the group Safe release "
            "looks at least counts cell by cell."
        ),
    ]
