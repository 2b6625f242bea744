"""The page that says what is wrong with point records and what to do."""

import numpy as np

from ..plugin.report import Report
from ..plugin.text import number, percent, said, tr
from .numeric import record_faults
from .numeric.grouping import reading_order
from .numeric.record_faults import FAULT, FINE, LOOK

LISTED_GROUPS = 30
COLOURS = ("#650008", "#e0b942", "#7f64c1", "#00a791", "#361b73", "#966d00", "#23625b", "#c1b0ff")
SEVERITIES = {FAULT: tr("fault"), LOOK: tr("worth a look"), FINE: tr("fine")}


def write_page(job, checks, records, sizes, groups, concerned):
    """Write REPORT.

    Parameters
    ----------
    job : Job
    checks : list of numeric.record_faults.Check
    records : numeric.record_faults.RawRecords
    sizes : (n,) int array
        Records on the spot of each record.
    groups : (n,) array or None
        Values of the field of groups.
    concerned : (n,) bool array
        Records with a fault.
    """
    if not job.wanted("REPORT"):
        return
    report = Report(
        tr("Check of point records"),
        tr("Can these records be mapped as they are?"),
        record_faults.verdict(checks),
        confidential=True,
    )
    order = {FAULT: 0, LOOK: 1, FINE: 2}
    checks = sorted(checks, key=lambda check: order[check.severity])
    open_ones = [check for check in checks if check.severity != FINE]
    if open_ones:
        report.table(
            tr("What to do"),
            [tr("check"), tr("outcome"), tr("found"), tr("advice")],
            [(c.key, SEVERITIES[c.severity], c.words, c.advice) for c in open_ones],
        )
    report.table(
        tr("What is fine"),
        [tr("check"), tr("found")],
        [(check.key, check.words) for check in checks if check.severity == FINE],
    )
    if open_ones and records.placed.any():
        report.plot(
            tr("Where they lie"),
            lambda figure: _draw_map(figure, records, open_ones),
            tr("All placed records in grey, those concerned in colour; kilometres, north is up."),
            size=(7.5, 4.6),
        )
    report.plot(
        tr("Records on one spot"),
        lambda figure: _draw_stacks(figure, sizes[records.placed]),
        tr("How many records share their exact coordinates with how many others."),
        size=(7.5, 3.2),
    )
    if groups is not None:
        report.table(
            tr("By group"),
            [job.field("GROUP"), tr("records"), tr("concerned"), tr("share")],
            _group_rows(groups, concerned),
            note=tr("A share that differs much between groups makes groups hard to compare."),
        )
    job.write_report(report, _method(), _cautions())


def _group_rows(groups, concerned):
    labels = np.array(["–" if value is None else str(value) for value in groups.tolist()])
    names, index, sizes = np.unique(labels, return_inverse=True, return_counts=True)
    hit = np.bincount(index.ravel(), concerned, len(names))
    kept = np.argsort(-sizes, kind="stable")[:LISTED_GROUPS]
    return [
        (names[i], number(sizes[i]), number(hit[i]), percent(hit[i] / sizes[i]))
        for i in sorted(kept, key=lambda i: reading_order(names[i]))
    ]


def _draw_map(figure, records, checks):
    axes = figure.add_subplot()
    kilometre = 1000.0 / records.metres
    placed = np.flatnonzero(records.placed & ~_far(checks, len(records.x)))
    shown = placed[:: max(1, len(placed) // 20_000)]
    left, bottom = records.x[placed].min(), records.y[placed].min()
    axes.plot(
        (records.x[shown] - left) / kilometre,
        (records.y[shown] - bottom) / kilometre,
        ".",
        color="#c9c3b4",
        markersize=1.5,
    )
    for index, check in enumerate(check for check in checks if check.count):
        rows = np.intersect1d(np.flatnonzero(check.found), placed)
        if len(rows):
            axes.plot(
                (records.x[rows] - left) / kilometre,
                (records.y[rows] - bottom) / kilometre,
                ".",
                color=COLOURS[index % len(COLOURS)],
                markersize=4,
                label=f"{said(check.key)} ({number(check.count)})",
            )
    axes.set_aspect("equal")
    axes.set_xlabel("km")
    axes.set_ylabel("km")
    if axes.get_legend_handles_labels()[0]:
        axes.legend(loc="upper left", bbox_to_anchor=(1.0, 1.0), frameon=False)


def _far(checks, count):
    for check in checks:
        if check.key == "far away":
            return check.found
    return np.zeros(count, bool)


def _draw_stacks(figure, sizes):
    axes = figure.add_subplot()
    limits = [1, 2, 3, 5, 9, 13, 31, 61, 121, 10**12]
    names = ["1", "2", "3–4", "5–8", "9–12", "13–30", "31–60", "61–120", tr("over 120")]
    counts = np.histogram(sizes, bins=limits)[0]
    used = max(4, int(np.flatnonzero(counts).max()) + 1)
    bars = axes.bar(names[:used], counts[:used], color="#2e7179")
    axes.bar_label(bars, [number(count) for count in counts[:used]], padding=2, fontsize=9)
    axes.set_xlabel(tr("records on the spot"))
    axes.set_ylabel(tr("records"))
    axes.grid(False, axis="x")


def _method():
    return [
        tr(
            "Stacks: by default a spot is too full above 12 records, above one in 400 of all "
            "records, or above 60 where most records share their spot as in a register of "
            "residents, whichever is most. A fifth of all records on spots of more than 12, or ten "
            "records to a spot, are taken for middle points of areas. Common practice, no source."
        ),
        tr(
            "Rounding: round steps and the commonest gap between coordinates are tried, each from "
            "the start that most places share. A lattice is reported when it holds evidently more "
            "of the distinct places (six standard errors and 1 %) than the precision to which they "
            "are written would put there by chance."
        ),
        tr(
            "Far away: more than ten times the range of the middle nine tenths of the records from "
            "their median. Distortion: area in the plane over area on the ellipsoid on "
            "nine small squares over the extent of the middle 99 % of the records."
        ),
    ]


def _cautions():
    return [
        tr(
            "No check sees records that were never made. Ask who is missing: places without an "
            "address, people who do not call, months before a system was introduced."
        ),
        tr("Corrections belong into the source, with a note of what was changed and why."),
    ]
