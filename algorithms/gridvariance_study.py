"""From the layers of a grid variance run to the ground that its zonings are laid over."""

from dataclasses import dataclass
from typing import Optional

import numpy as np
import shapely
from qgis.core import QgsWkbTypes

from ..plugin import layers
from ..plugin.text import number, tr
from .numeric import cell_size, hexagons, lattice_variance, spread, variance
from .numeric.errors import InputError
from .numeric.grid import Grid, covering
from .numeric.ground import Ground, ground

SHAPES = {hexagons.HEXAGON: tr("Hexagons"), hexagons.SQUARE: tr("Squares")}
KINDS = {
    variance.RATE: tr("Events that may repeat: a rate per 1000 of the background"),
    variance.SHARE: tr("Members of the background: a share, per 1000"),
}
MOST_MEMORY = 2e9
MOST_SAMPLES = 400_000
MOST_PIXELS = 50_000_000
LEAST_EXPECTED = 5
LEAST_INSIDE = 0.1


@dataclass(frozen=True)
class Counted:
    """Counts on points in the working CRS, and whether they came from polygons."""

    x: np.ndarray
    y: np.ndarray
    count: np.ndarray
    polygons: Optional[np.ndarray] = None


@dataclass(frozen=True)
class Study:
    """All that a run has settled on; lengths in units of the working CRS.

    Attributes
    ----------
    ground : Ground
    grid : Grid
    rows, columns : (places,) int arrays of the evaluated pixels
    place_total : (places,) array, total in each evaluated pixel
    event_places, total_places : int arrays, evaluated pixel of each point of the ground
    sizes : (sizes,) array
    boundary : shapely geometry or None
    factor : float, from the core's value to the unit shown
    unit : str
    dense : bool, whether counts are taken per area, without a background
    """

    ground: Ground
    grid: Grid
    rows: np.ndarray
    columns: np.ndarray
    place_total: np.ndarray
    event_places: np.ndarray
    total_places: np.ndarray
    sizes: np.ndarray
    boundary: object
    factor: float
    unit: str
    dense: bool


def prepare(algorithm, job):
    """Read the layers and settle on sizes, pixels and threshold.

    Returns
    -------
    Study
    """
    records, background, boundary = read_layers(algorithm, job)
    area = boundary if boundary is not None else hull_of(records, background)
    sizes = settle_sizes(job, records, area)
    cell = settle_pixel(job, area, sizes)
    records = on_points(records, sizes)
    dense = background is None
    if dense:
        totals = area_as_total(job, area, sizes, cell)
        factor, unit, kind = job.working.per_square_kilometre, tr("per km²"), variance.RATE
    else:
        background = on_points(background, sizes)
        totals = background.x, background.y, background.count
        factor, unit, kind = 1000.0, tr("per 1000"), job.choice("KIND", KINDS)
        check_share(job, kind, records.count.sum(), background.count.sum())
    grid, rows, columns = evaluated_pixels(job, area, cell, (records.x, records.y), totals[:2])
    check_work(job, grid, len(rows), sizes)
    threshold = job.real("THRESHOLD")
    packed = ground(
        (records.x, records.y, records.count),
        totals,
        (grid.x_centres()[columns], grid.y_centres()[rows]),
        kind,
        None if threshold is None else threshold / factor,
        least_total(job, records.count.sum(), totals[2].sum(), dense),
        LEAST_INSIDE if dense else 0.0,
    )
    index = np.full(grid.shape, -1)
    index[rows, columns] = np.arange(len(rows))
    event_places = index[pixels_of(grid, packed.x, packed.y)]
    total_places = index[pixels_of(grid, packed.total_x, packed.total_y)]
    place_total = np.bincount(total_places, weights=packed.total, minlength=len(rows))
    return Study(
        packed, grid, rows, columns, place_total, event_places, total_places, sizes,
        boundary, factor, unit, dense,
    )  # fmt: skip


def read_layers(algorithm, job):
    """Records, background and boundary; the latter two None where they are not given."""
    records = read_counted(algorithm, job, "RECORDS", "COUNT")
    boundary = job.boundary()
    background, source = None, "BACKGROUND"
    if job.given("BACKGROUND"):
        background = read_counted(algorithm, job, "BACKGROUND", "TOTAL")
    elif job.given("TOTAL"):
        background, source = read_counted(algorithm, job, "RECORDS", "TOTAL"), "RECORDS"
    if boundary is not None:
        records = kept_inside(job, records, boundary, "RECORDS")
        if background is not None:
            background = kept_inside(job, background, boundary, source)
    if not records.count.sum() > 0:
        raise InputError(tr("{}: all counts are 0; check the field.").format(job.label("COUNT")))
    if background is not None and not background.count.sum() > 0:
        raise InputError(tr("{}: all totals are 0; check the field.").format(job.label("TOTAL")))
    return records, background, boundary


def check_share(job, kind, count, total):
    """Refuse members of a background that number more than it."""
    if kind == variance.SHARE and count > total:
        raise InputError(
            tr("{}: {} records cannot all be members of a background of {}; choose events.").format(
                job.label("KIND"), number(count), number(total)
            )
        )


def least_total(job, count, total, dense):
    """Least total of a cell in the core's units: as given, or enough for five expected records.

    That least expected count is Cochran's (1954, Biometrics 10:417). It is held to a tenth of the
    whole, so that a few records still make a map.
    """
    given = job.real("LEAST_TOTAL")
    if given is not None:
        return given / job.working.square_kilometres if dense else given
    if dense:
        return 0.0
    least = min(LEAST_EXPECTED * total / count, total / 10)
    job.inform(tr("Least total of a cell chosen: {}").format(number(least)))
    return least


def read_counted(algorithm, job, name, field):
    """Counts of a point or polygon layer; null and negative counts are left out and counted."""
    source = algorithm.parameterAsSource(job.parameters, name, job.context)
    kind = None if source is None else QgsWkbTypes.geometryType(source.wkbType())
    if kind != QgsWkbTypes.GeometryType.PolygonGeometry:
        found = job.records(name, weight=field)
        return Counted(found.x, found.y, found.weight)
    count_field = job.field(field)
    if count_field is None:
        raise InputError(
            tr("{}: the layer holds polygons, so a field is needed in {}.").format(
                job.label(name), job.label(field)
            )
        )
    found = job.polygons(name, fields=[count_field])
    count = layers.as_floats(found.values[count_field])
    geometry = shapely.make_valid(found.geometry)
    flat = shapely.area(geometry) == 0
    for wrong, words in (
        (np.isnan(count), tr("with a null count")),
        (count < 0, tr("with a negative count")),
        (flat & ~(np.isnan(count) | (count < 0)), tr("without an area")),
    ):
        if wrong.any():
            job.warn(
                tr("{}: {} features {} were left out.").format(
                    job.label(name), number(wrong.sum()), words
                )
            )
    kept = (count >= 0) & ~flat
    if not kept.any():
        raise InputError(
            tr("{}: no usable feature is left; check geometry and counts.").format(job.label(name))
        )
    inner = shapely.point_on_surface(geometry[kept])
    return Counted(shapely.get_x(inner), shapely.get_y(inner), count[kept], geometry[kept])


def kept_inside(job, counted, boundary, name):
    """What lies inside the boundary; polygons by their inner point."""
    shapely.prepare(boundary)
    inside = shapely.intersects_xy(boundary, counted.x, counted.y)
    if not inside.all():
        job.warn(
            tr("{}: {} features outside the boundary were left out.").format(
                job.label(name), number((~inside).sum())
            )
        )
    if not inside.any():
        raise InputError(
            tr("{}: nothing lies inside the boundary; check both layers.").format(job.label(name))
        )
    polygons = None if counted.polygons is None else counted.polygons[inside]
    return Counted(counted.x[inside], counted.y[inside], counted.count[inside], polygons)


def hull_of(*several):
    """Convex hull of all the data: the study area when no boundary is given."""
    parts = []
    for counted in several:
        if counted is None:
            continue
        if counted.polygons is not None:
            parts.extend(counted.polygons)
        else:
            parts.append(shapely.multipoints(np.c_[counted.x, counted.y]))
    return shapely.convex_hull(shapely.geometrycollections(parts))


def settle_sizes(job, records, area):
    """Cell sizes as asked, or chosen from the records and the area."""
    asked = job.numbers("CELL_SIZES")
    if asked:
        if min(asked) <= 0:
            raise InputError(
                tr("{}: every size must be above 0; found {}.").format(
                    job.label("CELL_SIZES"), number(min(asked))
                )
            )
        return np.unique(asked) / job.working.metres
    if not area.area > 0:
        raise InputError(
            tr(
                "{}: all the data lie on one spot or line, so no size can be chosen; enter sizes, "
                "and a boundary."
            ).format(job.label("CELL_SIZES"))
        )
    return cell_size.sizes_for_zonings(
        records.x,
        records.y,
        records.count,
        area.area,
        np.random.default_rng(np.random.SeedSequence(job.seed(), spawn_key=(2,))),
        job.choice("SHAPE", SHAPES),
    )


def settle_pixel(job, area, sizes):
    """Side of an evaluated pixel."""
    cell = job.length("EVALUATION_CELL")
    if cell > 0:
        return cell
    left, bottom, right, top = area.bounds
    longer = max(right - left, top - bottom, float(sizes[0]))
    cell = cell_size.two_digits(longer / 300)
    job.inform(
        tr("Side of an evaluated pixel chosen: {} m").format(number(cell * job.working.metres))
    )
    return cell


def on_points(counted, sizes):
    """Polygons' counts on points that lie closer than the finest cells; points as they are."""
    if counted.polygons is None:
        return counted
    ground_area = float(shapely.area(counted.polygons).sum())
    spacing = max(float(sizes[0]) / 5, (ground_area / MOST_SAMPLES) ** 0.5)
    x, y, (count,), _ = spread.spread_evenly(counted.polygons, [counted.count], spacing)
    return Counted(x, y, count, counted.polygons)


def area_as_total(job, area, sizes, cell):
    """Samples of the study area, when there is no background."""
    if not area.area > 0:
        raise InputError(
            tr(
                "{}: the records lie on one spot or line and there is neither a background nor a "
                "boundary, so nothing to compare them with; give one of the two."
            ).format(job.label("RECORDS"))
        )
    if not job.given("BOUNDARY"):
        job.inform(
            tr("Without boundary and background the convex hull of the records is the area.")
        )
    spacing = max(min(float(sizes[0]) / 10, cell), (area.area / MOST_SAMPLES) ** 0.5)
    return spread.area_samples(area, spacing)


def evaluated_pixels(job, area, cell, *points):
    """The grid, and the pixels whose centre is in the area or that hold a point.

    Returns
    -------
    Grid, rows, columns
    """
    x = np.concatenate([one[0] for one in points])
    y = np.concatenate([one[1] for one in points])
    left, bottom, right, top = area.bounds
    bounds = min(left, x.min()), min(bottom, y.min()), max(right, x.max()), max(top, y.max())
    grid = covering(bounds, cell)
    job.check_cells("EVALUATION_CELL", cell, grid.rows * grid.columns, MOST_PIXELS)
    mask = np.zeros(grid.shape, bool)
    if area.area > 0:
        shapely.prepare(area)
        mask = shapely.contains_xy(area, *grid.centres())
    mask[pixels_of(grid, x, y)] = True
    return (grid, *np.nonzero(mask))


def pixels_of(grid, x, y):
    """Row and column of each point; a point on the outer edge belongs to the last pixel."""
    rows, columns, _ = grid.pixels(x, y)
    return np.clip(rows, 0, grid.rows - 1), np.clip(columns, 0, grid.columns - 1)


def check_work(job, grid, places, sizes):
    """Refuse what would not fit, and say which size would."""
    left, bottom, right, top = grid.bounds
    # A turned extent, and the slanted rows of hexagons, take up to about three times its cells.
    cells = 3 * ((right - left) / sizes[0] + 2) * ((top - bottom) / sizes[0] + 2)
    if cells > hexagons.MOST_CELLS:
        workable = sizes[0] * (cells / hexagons.MOST_CELLS) ** 0.5 * job.working.metres
        raise InputError(
            tr("{}: cells of {} m are too small for this extent; choose {} m or more.").format(
                job.label("CELL_SIZES"),
                number(sizes[0] * job.working.metres),
                number(cell_size.two_digits(workable * 1.05)),
            )
        )
    needed = lattice_variance.memory_needed(places, len(sizes), cells, job.given("BUDGET"))
    if needed > MOST_MEMORY:
        workable = grid.cell * (needed / MOST_MEMORY) ** 0.5 * job.working.metres
        raise InputError(
            tr(
                "{}: {} evaluated pixels would take about {} GB of memory; choose {} m or more."
            ).format(
                job.label("EVALUATION_CELL"),
                number(places),
                number(needed / 1e9),
                number(cell_size.two_digits(workable * 1.05)),
            )
        )
