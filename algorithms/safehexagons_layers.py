"""The layers of a release in hexagons: what is published, and the custodian's."""

import numpy as np
import shapely

from ..plugin import looks
from ..plugin.outputs import Column
from ..plugin.text import tr
from .numeric.errors import InputError
from .numeric.release_plan import MERGE, NOISE

# why a hexagon carries a figure or not, in the custodian's layer, and its colour
UNSAFE, COMPLEMENTARY = tr("unsafe by the rules"), tr("withheld to protect others")
EMPTY, SAFE = tr("empty"), tr("safe")
REASONS = {SAFE: "#93bb93", UNSAFE: "#6b1f3f", COMPLEMENTARY: "#a9803f", EMPTY: "#f6f2e8"}


def _names(study, made):
    """Name of each zone: axial coordinates of its first hexagon."""
    first = np.unique(made.zones, return_index=True)[1]
    return [f"{q} {r}" for q, r in zip(study.q[first].tolist(), study.r[first].tolist())]


def _inside_area(study, shapes):
    """Area of each zone inside the study area, square units of the CRS."""
    areas = shapely.area(shapes)
    if study.area is not None:
        edge = np.flatnonzero(~shapely.contains_properly(study.area, shapes))
        areas[edge] = shapely.area(shapely.intersection(shapes[edge], study.area))
    return areas


def figure_columns(study, count, numerator, share, kilometres):
    """Columns of published figures."""
    kind = "int" if study.records.weights is None else "float"
    columns = [Column("count", kind, count, tr("Count"))]
    if numerator is not None:
        numerator_kind = kind if _whole(study.records.numerator) else "float"
        columns.append(Column("numerator", numerator_kind, numerator, tr("Numerator")))
        columns.append(Column("share", "float", share, tr("Share (0 to 1)")))
    with np.errstate(divide="ignore", invalid="ignore"):
        density = np.where(kilometres > 0, count / kilometres, np.nan)
    columns.append(Column("per_km2", "float", density, tr("Count (per km²)")))
    columns.append(Column("area_km2", "float", kilometres, tr("Area inside (km²)")))
    return columns


def _whole(values):
    return bool(np.array_equal(values, np.rint(values)))


def write_release(job, study, made, shown, shapes):
    """Write RELEASE: published figures, and nothing that depends on others."""
    kilometres = _inside_area(study, shapes) * job.working.square_kilometres
    names, sizes = _names(study, made), np.bincount(made.zones)
    count, numerator, share = made.count(), made.numerator(), made.share()
    status = np.where(made.withheld, tr("withheld"), tr("released"))
    columns = [
        Column("cell", "text", [names[zone] for zone in shown], tr("Hexagon (axial q r)")),
        *figure_columns(
            study,
            count[shown],
            None if numerator is None else numerator[shown],
            None if share is None else share[shown],
            kilometres[shown],
        ),
        Column("cells", "int", sizes[shown], tr("Hexagons merged")),
        Column("status", "text", status[shown], tr("Status")),
    ]
    if study.plan.method == NOISE and study.plan.seed is not None:
        words = [tr("rehearsal: not for release")] * len(shown)
        columns.append(Column("note", "text", words, tr("Note")))
    field, values, unit = "count", count, "" if job.field("WEIGHT") else tr("records")
    if share is not None:
        field, values, unit = "share", share, tr("of the count")
    elif study.plan.method == MERGE:
        # zones differ in size, so their counts cannot be compared by colour
        field, values, unit = "per_km2", count / kilometres, tr("per km²")
    # the classes follow from published figures only: a style is read like any other table
    look = looks.groups_or_missing(field, looks.groups_of(values[shown]), tr("withheld"), unit=unit)
    job.write_layer("RELEASE", columns, shapes[shown], "polygon", look)


def write_totals(job, study, made):
    """Write TOTALS_OUT: the totals that go with the release."""
    if not job.wanted("TOTALS_OUT"):
        return
    values = [made.region_values] if study.plan.region_totals else []
    names = list(study.region_names) if study.plan.region_totals else []
    shapes = list(study.regions) if study.plan.region_totals else []
    if study.plan.grand_total:
        values.append(made.grand_values[:, None])
        names.append(tr("whole area"))
        shapes.append(study.area)
    if not names:
        raise InputError(
            tr("{}: no totals are published; leave this output out or choose totals.").format(
                job.label("TOTALS_OUT")
            )
        )
    values = np.concatenate(values, axis=1)
    count = values.sum(0)
    areas = np.array([np.nan if shape is None else shape.area for shape in shapes])
    numerator = share = None
    if len(values) > 1:
        numerator = values[0]
        share = np.divide(numerator, count, out=np.full(len(count), np.nan), where=count > 0)
    columns = [
        Column("region", "text", names, tr("Region")),
        *figure_columns(study, count, numerator, share, areas * job.working.square_kilometres),
        Column(
            "status",
            "text",
            np.where(np.isnan(count), tr("withheld"), tr("released")),
            tr("Status"),
        ),
    ]
    packed = np.empty(len(shapes), object)
    packed[:] = shapes
    job.write_layer("TOTALS_OUT", columns, packed, "polygon", looks.single("transparent"))


def write_custodian(job, study, made, shapes):
    """Write CUSTODIAN: true figures and reasons, not for release."""
    if not job.wanted("CUSTODIAN"):
        return
    behind = made.behind
    whole, values = behind.whole, behind.values()
    reasons = np.select(
        [made.unsafe, made.complementary, whole.records == 0],
        [UNSAFE, COMPLEMENTARY, EMPTY],
        SAFE,
    )
    columns = [
        Column("cell", "text", _names(study, made), tr("Hexagon (axial q r)")),
        Column("true_count", "float", values.sum(0), tr("True count (confidential)")),
        Column("records", "int", whole.records, tr("Records (confidential)")),
        Column("contributors", "int", whole.contributors, tr("Contributors (confidential)")),
        Column("largest", "float", whole.largest, tr("Largest contribution (confidential)")),
        Column("released", "float", made.count(), tr("Released count")),
        Column("reason", "text", reasons, tr("Reason (confidential)")),
    ]
    if behind.parts:
        columns.insert(
            2, Column("true_numerator", "float", values[0], tr("True numerator (confidential)"))
        )
    classes = [(words, colour, words) for words, colour in REASONS.items()]
    job.write_layer("CUSTODIAN", columns, shapes, "polygon", looks.categories("reason", classes))
