"""Centre and spread of point records by group, and the path from group to group."""

from dataclasses import dataclass

import numpy as np
import shapely
from qgis.core import QgsProcessingParameterFeatureSink

from ..plugin import centre_looks as looks
from ..plugin.host import LINES, POINTS
from ..plugin.outputs import Column
from ..plugin.text import number, tr
from .base import SteadfieldAlgorithm
from .centrespread_page import write_page
from .numeric import centre_confidence, centres
from .numeric.errors import InputError
from .numeric.field_faults import null_mask
from .numeric.grouping import group_name, in_order, rows_by_group
from .numeric.progress import part

MANY_GROUPS = 500
ALL = tr("all records")


@dataclass(frozen=True)
class Group:
    """One group of records and what was found about it; lengths in units of the working CRS.

    Attributes
    ----------
    name : str
    records : int
    total : float
        Sum of the weights.
    mean, median : (x, y)
    standard_distance : float
    deviation : numeric.centres.Ellipse
    confidence : numeric.centres.Ellipse or None
    sampled : numeric.centre_confidence.SampledCentre
    """

    name: str
    records: int
    total: float
    mean: tuple
    median: tuple
    standard_distance: float
    deviation: centres.Ellipse
    confidence: object
    sampled: centre_confidence.SampledCentre


@dataclass(frozen=True)
class Step:
    """From one group to the next: distance in CRS units, bearing in degrees, chance of no move."""

    start: Group
    stop: Group
    distance: float
    bearing: float
    chance: float


class CentreSpread(SteadfieldAlgorithm):
    """Mean centre, geometric median and spread by group, with confidence."""

    ID = "centrespread"
    NAME = tr("Centre and spread by group")
    GROUP = "records"
    QUESTION = "real"
    HELP = tr(
        "Finds for every group of records the mean centre, the geometric median (the place with "
        "the least total distance), the standard distance and the standard deviational ellipse, "
        "and how sure the centre is: an ellipse that holds the true centre with the chosen "
        "confidence. With an order, such as months, the centres form a path, and for every step "
        "the chance is given that the centres lie so far apart though nothing moved."
    )
    TAGS = (
        tr("centre"),
        tr("mean"),
        tr("median"),
        tr("standard distance"),
        tr("ellipse"),
        tr("path"),
        tr("centroid"),
    )

    def define(self):
        self.add_points("RECORDS", tr("Records"), tr("Points, in any CRS."))
        self.add_field(
            "WEIGHT", tr("Weight"), "RECORDS", tr("Number of events or people at each record.")
        )
        self.add_field(
            "GROUP",
            tr("Group"),
            "RECORDS",
            tr("One centre for each value of this field. Empty: one centre of all records."),
            numeric=False,
        )
        self.add_field(
            "ORDER",
            tr("Order of the groups"),
            "RECORDS",
            tr(
                "Groups follow each other by the middle value of this field, such as a date. "
                "Empty: by their own values."
            ),
            numeric=False,
        )
        self.add_field(
            "CONTRIBUTOR",
            tr("Contributor"),
            "RECORDS",
            tr(
                "Whose record it is, such as the household. Records of one contributor are not "
                "independent; the confidence and the chance of a step take that into account."
            ),
            numeric=False,
            advanced=True,
        )
        self._add_settings()
        self._add_outputs()

    def _add_settings(self):
        self.add_number(
            "DEVIATIONS",
            tr("Standard deviations of the ellipse"),
            tr(
                "Half axes of the ellipse in standard deviations along them. Of a normal cloud 1 "
                "holds 39 %, 1.414 holds 63 %, 2 hold 86 % of the records."
            ),
            default=1.0,
            least=0.01,
            advanced=True,
        )
        self.add_number(
            "LEVEL",
            tr("Confidence (%)"),
            tr("How often the confidence ellipse holds the true centre."),
            default=95.0,
            least=50.0,
            most=99.9,
            advanced=True,
        )
        self.add_number(
            "DRAWS",
            tr("Bootstrap draws"),
            tr("More make the confidence ellipse steadier."),
            default=999,
            least=99,
            most=99_999,
            whole=True,
            advanced=True,
        )
        self.add_seed()
        self.add_working_crs()

    def _add_outputs(self):
        for name, label, kind, optional, words in (
            ("CENTRES", tr("Centres"), POINTS, False, tr("Mean centre and median of each group.")),
            ("ELLIPSES", tr("Ellipses"), None, False, tr("Spread and confidence of each group.")),
            ("PATH", tr("Path"), LINES, True, tr("From each group's mean centre to the next.")),
        ):
            if kind is None:
                self.add_polygon_output(name, label, words)
                continue
            self.add(
                QgsProcessingParameterFeatureSink(name, label, kind, None, optional, not optional),
                words,
            )
        self.add_report()
        self.add_numbers(
            GROUPS=tr("Groups"),
            CENTRE_X=tr("Mean centre of all records, eastwards (working CRS)"),
            CENTRE_Y=tr("Mean centre of all records, northwards (working CRS)"),
            STANDARD_DISTANCE=tr("Standard distance of all records (m)"),
            PATH_LENGTH=tr("Length of the path (m)"),
        )

    def work(self, job):
        fields = {key: job.field(key) for key in ("GROUP", "ORDER", "CONTRIBUTOR")}
        wanted = list(dict.fromkeys(name for name in fields.values() if name))
        records = job.records("RECORDS", "WEIGHT", wanted)
        columns = {key: records.values[name] if name else None for key, name in fields.items()}
        members = _members(job, records, columns["GROUP"], columns["ORDER"])
        groups = _measure(job, records, members, columns["CONTRIBUTOR"])
        steps = _steps(groups)
        job.progress(0.95)
        self._write(job, groups, steps)
        write_page(job, groups, steps, fields, records)
        x, y = centres.mean_centre(records.x, records.y, records.weight)
        spread = centres.standard_distance(records.x, records.y, records.weight)
        job.give("GROUPS", len(groups))
        job.give("CENTRE_X", x)
        job.give("CENTRE_Y", y)
        job.give("STANDARD_DISTANCE", spread * job.working.metres)
        job.give("PATH_LENGTH", sum(step.distance for step in steps) * job.working.metres)

    def _write(self, job, groups, steps):
        metres = job.working.metres
        _write_centres(job, groups, metres)
        _write_ellipses(job, groups, metres)
        path = [
            Column("from_group", "text", [step.start.name for step in steps], tr("From")),
            Column("to_group", "text", [step.stop.name for step in steps], tr("To")),
            Column(
                "distance", "float", [step.distance * metres for step in steps], tr("Distance (m)")
            ),
            Column(
                "bearing",
                "float",
                [step.bearing for step in steps],
                tr("Direction (degrees clockwise from north)"),
            ),
            Column(
                "chance",
                "float",
                [step.chance for step in steps],
                tr("Chance of this distance though nothing moved (0 to 1)"),
            ),
        ]
        lines = [shapely.LineString([step.start.mean, step.stop.mean]) for step in steps]
        job.write_layer("PATH", path, np.array(lines, object), "line", looks.path)


def _members(job, records, group, order):
    """Names of the groups in their order, and the rows of each with weight."""
    if group is None:
        return [(ALL, np.arange(len(records)))]
    missing = null_mask(group)
    if missing.any():
        job.warn(
            tr("{}: {} records without a value were left out.").format(
                job.label("GROUP"), number(missing.sum())
            )
        )
    rows_of = rows_by_group(group)
    if len(rows_of) > MANY_GROUPS:
        raise InputError(
            tr("{}: {} groups were found, more than {}; choose a field with fewer values.").format(
                job.label("GROUP"), number(len(rows_of)), MANY_GROUPS
            )
        )
    for value in [value for value, rows in rows_of.items() if not records.weight[rows].sum() > 0]:
        job.warn(tr("Group {}: the weights add up to 0; it was left out.").format(value))
        del rows_of[value]
    if not rows_of:
        raise InputError(
            tr("{}: no record has a value and a weight; choose another field.").format(
                job.label("GROUP")
            )
        )
    return [(group_name(value), rows_of[value]) for value in in_order(rows_of, order)]


def _measure(job, records, members, contributors):
    seed = np.random.SeedSequence(job.seed())
    labels = None if contributors is None else _labels(contributors)
    deviations, level = job.real("DEVIATIONS"), job.real("LEVEL") / 100.0
    done, total = 0, sum(len(rows) for _, rows in members)
    groups, unsure = [], []
    for (name, rows), own_seed in zip(members, seed.spawn(len(members))):
        told = part(
            job.progress, 0.05 + 0.9 * done / total, 0.05 + 0.9 * (done + len(rows)) / total
        )
        told(0.0)
        x, y, weight = records.x[rows], records.y[rows], records.weight[rows]
        whose = None if labels is None else labels[rows]
        confidence = centre_confidence.confidence_ellipse(
            x, y, weight, whose, level, job.whole("DRAWS"), np.random.default_rng(own_seed), told
        )
        if confidence is None:
            unsure.append(name)
        groups.append(
            Group(
                name=name,
                records=len(rows),
                total=float(weight.sum()),
                mean=centres.mean_centre(x, y, weight),
                median=centres.geometric_median(x, y, weight),
                standard_distance=centres.standard_distance(x, y, weight),
                deviation=centres.deviation_ellipse(x, y, weight, deviations),
                confidence=confidence,
                sampled=centre_confidence.sampled_centre(x, y, weight, whose),
            )
        )
        done += len(rows)
    if unsure:
        job.warn(
            tr("Too few places to say how sure the centre is: {}.").format(", ".join(unsure[:20]))
        )
    return groups


def _labels(contributors):
    """Contributors as words; a record without one is a contributor of its own."""
    missing = null_mask(contributors)
    return np.array(
        [
            f"record {row}" if absent else f"value {value}"
            for row, (value, absent) in enumerate(zip(contributors.tolist(), missing))
        ]
    )


def _steps(groups):
    return [
        Step(
            start,
            stop,
            float(np.hypot(stop.mean[0] - start.mean[0], stop.mean[1] - start.mean[1])),
            float(centres.bearing(*start.mean, *stop.mean)),
            centre_confidence.chance_of_distance(start.sampled, stop.sampled),
        )
        for start, stop in zip(groups, groups[1:])
    ]


def _write_centres(job, groups, metres):
    twice = [(group, place) for group in groups for place in (looks.MEAN, looks.MEDIAN)]
    positions = {group.name: index + 1 for index, group in enumerate(groups)}
    columns = [
        Column("group", "text", [group.name for group, _ in twice], tr("Group")),
        Column("position", "int", [positions[group.name] for group, _ in twice], tr("Position")),
        Column("place", "text", [place for _, place in twice], tr("Kind of centre")),
        Column("records", "int", [group.records for group, _ in twice], tr("Records")),
        Column("total", "float", [group.total for group, _ in twice], tr("Sum of weights")),
        Column(
            "standard_distance",
            "float",
            [group.standard_distance * metres for group, _ in twice],
            tr("Standard distance (m)"),
        ),
        Column(
            "sure_within",
            "float",
            [
                group.confidence.semi_major * metres
                if group.confidence and place == looks.MEAN
                else None
                for group, place in twice
            ],
            tr("Mean centre sure to within (m)"),
        ),
    ]
    places = [group.mean if place == looks.MEAN else group.median for group, place in twice]
    job.write_layer("CENTRES", columns, shapely.points(places), "point", looks.centres)


def _write_ellipses(job, groups, metres):
    drawn = []
    for group in groups:
        for kind, ellipse in (
            (looks.DEVIATION, group.deviation),
            (looks.CONFIDENCE, group.confidence),
        ):
            if ellipse is not None and ellipse.semi_minor > 1e-9 * max(ellipse.semi_major, 1e-9):
                drawn.append((group, kind, ellipse))
    columns = [
        Column("group", "text", [group.name for group, _, _ in drawn], tr("Group")),
        Column("kind", "text", [kind for _, kind, _ in drawn], tr("Kind of ellipse")),
        Column(
            "semi_major",
            "float",
            [ellipse.semi_major * metres for _, _, ellipse in drawn],
            tr("Long half axis (m)"),
        ),
        Column(
            "semi_minor",
            "float",
            [ellipse.semi_minor * metres for _, _, ellipse in drawn],
            tr("Short half axis (m)"),
        ),
        Column(
            "bearing",
            "float",
            [ellipse.bearing for _, _, ellipse in drawn],
            tr("Direction of the long axis (degrees clockwise from north)"),
        ),
        Column(
            "area",
            "float",
            [ellipse.area * job.working.square_kilometres for _, _, ellipse in drawn],
            tr("Area (km²)"),
        ),
    ]
    shapes = [shapely.Polygon(ellipse.outline()) for _, _, ellipse in drawn]
    job.write_layer("ELLIPSES", columns, np.array(shapes, object), "polygon", looks.ellipses)
