"""What a density ratio is worked out from: pooled records, bandwidth, grid and boundary."""

import math
from dataclasses import dataclass

import numpy as np
import shapely

from ..plugin.text import number, tr
from .adaptivedensity_study import MEMORY_SHARE, machine_memory
from .numeric import contrast, edges
from .numeric.errors import InputError
from .numeric.grid import covering
from .numeric.surface import round_down, round_up

WEIGHTS_MEAN = {
    "counts": tr("Numbers of people or events on that place"),
    "values": tr("Importance of a record"),
}
# the narrowest kernel the grid allows is then a quarter of the overall bandwidth
CELLS_PER_BANDWIDTH = 6
CHOSEN_PIXELS = 250_000
# bytes that a pixel of the padded lattice takes while labels are drawn
BYTES_PER_PIXEL = 300
# bandwidths beyond the points that a ratio without a boundary is shown
MARGIN = 1.0


@dataclass(frozen=True)
class Study:
    """Everything settled before the kernels are summed; lengths in units of the working CRS.

    Attributes
    ----------
    pooled : numeric.contrast.Pooled
    bandwidth : float
        Overall bandwidth.
    chosen : bool
        Whether the bandwidth was chosen by rule.
    boundary : shapely geometry or None
    grid : Grid
    mask : (rows, columns) array or None
    """

    pooled: contrast.Pooled
    bandwidth: float
    chosen: bool
    boundary: object
    grid: object
    mask: object


def prepare(job):
    """Read both layers and settle bandwidth and grid.

    Returns
    -------
    Study
    """
    records = job.records("RECORDS", weight="WEIGHT")
    background = job.records("BACKGROUND", weight="BACKGROUND_WEIGHT")
    boundary = job.boundary()
    groups = [
        inside_boundary(job, name, weight, found, boundary)
        for name, weight, found in (
            ("RECORDS", "WEIGHT", records),
            ("BACKGROUND", "BACKGROUND_WEIGHT", background),
        )
    ]
    if all(np.array_equal(one, other) for one, other in zip(*groups)):
        raise InputError(
            tr(
                "{}: the background is the records themselves, so the ratio is 1 everywhere; "
                "choose what the records come from, such as residents, or another weight."
            ).format(job.label("BACKGROUND"))
        )
    pooled = contrast.pool(*groups, weights_mean=meaning_of_weights(job, groups))
    bandwidth, chosen = overall_bandwidth(job, pooled)
    grid = output_grid(job, pooled, bandwidth, boundary)
    mask = None if boundary is None else edges.boundary_mask(boundary, grid)
    return Study(pooled, bandwidth, chosen, boundary, grid, mask)


def inside_boundary(job, name, weight, found, boundary):
    """x, y and weights of the points of a layer that count."""
    if not found.weight.sum() > 0:
        raise InputError(
            tr("{}: all weights are 0; choose another field or none.").format(job.label(weight))
        )
    if boundary is None:
        return found.x, found.y, found.weight
    shapely.prepare(boundary)
    inside = shapely.intersects_xy(boundary, found.x, found.y)
    outside = int(np.count_nonzero(~inside))
    if not found.weight[inside].sum() > 0:
        raise InputError(
            tr("{}: no point of {} lies inside; check that both show the same place.").format(
                job.label("BOUNDARY"), job.label(name)
            )
        )
    if outside:
        job.warn(
            tr("{}: {} points outside the boundary were left out.").format(
                job.label(name), number(outside)
            )
        )
    return found.x[inside], found.y[inside], found.weight[inside]


def meaning_of_weights(job, groups):
    """What weights mean: as asked, but values where they are not whole numbers."""
    asked = job.choice("WEIGHTS_MEAN", WEIGHTS_MEAN)
    whole = all(np.array_equal(weights, np.round(weights)) for _, _, weights in groups)
    if asked == "counts" and not whole:
        job.warn(
            tr("Weights are not whole numbers, so they are taken as the importance of each record.")
        )
        return "values"
    return asked


def overall_bandwidth(job, pooled):
    """The bandwidth asked for, or by rule from the pooled points; and whether it was chosen."""
    asked = job.length("BANDWIDTH")
    if asked > 0:
        return asked, False
    with job.naming("BANDWIDTH"):
        found = contrast.common_bandwidth(pooled)
    job.inform(
        tr("Bandwidth chosen from the pooled points: {} m").format(
            number(found * job.working.metres)
        )
    )
    return found, True


def output_grid(job, pooled, bandwidth, boundary):
    """The grid of the result: over the boundary, or over all points."""
    if boundary is not None:
        bounds = boundary.bounds
    else:
        reach = MARGIN * bandwidth
        bounds = (
            pooled.x.min() - reach,
            pooled.y.min() - reach,
            pooled.x.max() + reach,
            pooled.y.max() + reach,
        )
    metres = job.working.metres
    cell = job.length("CELL_SIZE")
    if cell == 0:
        area = (bounds[2] - bounds[0]) * (bounds[3] - bounds[1])
        wanted = max(bandwidth / CELLS_PER_BANDWIDTH, math.sqrt(area / CHOSEN_PIXELS))
        cell = round_down(min(wanted, bandwidth / 2) * metres) / metres
        job.inform(tr("Cell size chosen: {} m").format(number(cell * metres)))
    if cell > bandwidth / 1.5:
        raise InputError(
            tr("{}: {} m is too coarse for a bandwidth of {} m; choose {} m or less.").format(
                job.label("CELL_SIZE"),
                number(cell * metres),
                number(bandwidth * metres),
                number(round_down(bandwidth / 3 * metres)),
            )
        )
    grid = covering(bounds, cell)
    pad = job.real("TRIM") * 5 * bandwidth / cell
    needed = BYTES_PER_PIXEL * (grid.rows + pad) * (grid.columns + pad)
    available = MEMORY_SHARE * machine_memory()
    if needed > available:
        workable = round_up(cell * math.sqrt(needed / available) * metres)
        raise InputError(
            tr("{}: {} x {} pixels of {} m would not fit into memory; choose {} m or more.").format(
                job.label("CELL_SIZE"),
                number(grid.rows),
                number(grid.columns),
                number(cell * metres),
                number(workable),
            )
        )
    return grid
