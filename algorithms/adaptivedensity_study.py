"""What an adaptive density surface is worked out from: records, bandwidths, grid and boundary."""

import os
from dataclasses import dataclass

import numpy as np
import shapely

from ..plugin.text import number, percent, tr
from .numeric import bandwidth, edges, surface
from .numeric.adaptation import adapt_bandwidths
from .numeric.errors import InputError
from .numeric.grid import Grid, covering
from .numeric.progress import part

KERNELS = {"gaussian": tr("Gaussian"), "quartic": tr("Quartic (ends at 2.83 bandwidths)")}
EDGES = {
    "none": tr("None"),
    "record": tr("By record (keeps the total)"),
    "place": tr("By place (keeps an even pattern even up to the border)"),
}
# share of the machine's memory that a run may take
MEMORY_SHARE = 0.5
# bytes a pixel that the finished surfaces and their output take
BYTES_PER_PIXEL = 96
# a boundary for the pilot needs no more pixels than this
PILOT_PIXELS = 1_000_000
# bandwidths beyond a record that a surface without a boundary reaches
MARGIN = 3.0


@dataclass(frozen=True)
class Study:
    """Everything settled before the kernels are summed; lengths in units of the working CRS.

    Attributes
    ----------
    x, y, weight, bandwidths : (n,) arrays
    pilot : float
        Overall bandwidth.
    chosen : bool
        Whether the overall bandwidth was chosen by rule.
    adaptation : numeric.adaptation.Adaptation
    kernel, edge : str
        Keys of KERNELS and EDGES.
    boundary : shapely geometry or None
    grid : Grid
    """

    x: np.ndarray
    y: np.ndarray
    weight: np.ndarray
    bandwidths: np.ndarray
    pilot: float
    chosen: bool
    adaptation: object
    kernel: str
    edge: str
    boundary: object
    grid: Grid


def prepare(job):
    """Read the records and settle bandwidths and grid.

    Returns
    -------
    Study
    """
    records = job.records("RECORDS", weight="WEIGHT")
    boundary = job.boundary()
    edge = "none" if boundary is None else job.choice("EDGE", EDGES)
    x, y, weight = inside_boundary(job, records, boundary, edge)
    if not weight.sum() > 0:
        raise InputError(
            tr("{}: all weights are 0; choose another field or none.").format(job.label("WEIGHT"))
        )
    pilot, chosen = overall_bandwidth(job, x, y, weight)
    mask, grid = pilot_mask(boundary if edge != "none" else None, pilot)
    found = adapt_bandwidths(
        x,
        y,
        weight,
        pilot,
        job.real("ADAPT"),
        job.real("TRIM"),
        job.whole("LEAST_RECORDS"),
        mask,
        grid,
        progress=part(job.progress, 0.1, 0.35),
    )
    if found.raised:
        job.inform(
            tr("Bandwidths raised to reach {} other records: {}").format(
                number(job.whole("LEAST_RECORDS")), number(found.raised)
            )
        )
    grid = output_grid(job, x, y, found.bandwidths, boundary)
    bandwidths = no_narrower_than_a_pixel(job, found.bandwidths, grid)
    kernel = job.choice("KERNEL", KERNELS)
    return Study(
        x, y, weight, bandwidths, pilot, chosen, found, kernel, edge, boundary, grid
    )  # fmt: skip


def inside_boundary(job, records, boundary, edge):
    """Records that count: with an edge correction those inside the boundary only."""
    x, y, weight = records.x, records.y, records.weight
    if boundary is None:
        return x, y, weight
    shapely.prepare(boundary)
    inside = shapely.intersects_xy(boundary, x, y)
    outside = int(np.count_nonzero(~inside))
    if not inside.any():
        raise InputError(
            tr("{}: no record lies inside; check that both layers show the same place.").format(
                job.label("BOUNDARY")
            )
        )
    if not outside:
        return x, y, weight
    if edge == "none":
        job.inform(
            tr("{} records outside the boundary count where their kernels reach in.").format(
                number(outside)
            )
        )
        return x, y, weight
    job.warn(tr("{} records outside the boundary were left out.").format(number(outside)))
    return x[inside], y[inside], weight[inside]


def overall_bandwidth(job, x, y, weight):
    """The bandwidth asked for, or by the normal-scale rule; and whether it was chosen."""
    asked = job.length("BANDWIDTH")
    if asked > 0:
        return asked, False
    with job.naming("BANDWIDTH"):
        found = bandwidth.normal_scale(x, y, weight)
    job.inform(
        tr("Bandwidth chosen by the normal-scale rule: {} m").format(
            number(found * job.working.metres)
        )
    )
    return found, True


def pilot_mask(boundary, pilot):
    """Boundary on a grid that is fine enough for the pilot density, and that grid."""
    if boundary is None:
        return None, None
    left, bottom, right, top = boundary.bounds
    coarsest = ((right - left) * (top - bottom) / PILOT_PIXELS) ** 0.5
    grid = covering(boundary.bounds, max(pilot / 4, min(coarsest, pilot)))
    return edges.boundary_mask(boundary, grid), grid


def output_grid(job, x, y, bandwidths, boundary):
    """The grid of the result: over the boundary, or over the records and their kernels."""
    if boundary is not None:
        bounds = boundary.bounds
    else:
        reach = MARGIN * bandwidths
        bounds = (
            float((x - reach).min()),
            float((y - reach).min()),
            float((x + reach).max()),
            float((y + reach).max()),
        )
    metres = job.working.metres
    narrowest, widest = float(bandwidths.min()), float(bandwidths.max())
    cell = job.length("CELL_SIZE")
    if cell == 0:
        cell = surface.automatic_cell(
            tuple(edge * metres for edge in bounds), narrowest * metres
        ) / metres  # fmt: skip
        job.inform(tr("Cell size chosen: {} m").format(number(cell * metres)))
    grid = covering(bounds, cell)
    available = MEMORY_SHARE * machine_memory()
    if memory_of(grid, max(narrowest, cell), max(widest, cell), len(x)) > available:
        while memory_of(covering(bounds, cell), max(narrowest, cell), widest, len(x)) > available:
            cell *= 1.05
        workable = surface.round_up(cell * metres)
        raise InputError(
            tr("{}: {} x {} pixels of {} m would not fit into memory; choose {} m or more.").format(
                job.label("CELL_SIZE"),
                number(grid.rows),
                number(grid.columns),
                number(grid.cell * metres),
                number(workable),
            )
        )
    return grid


def memory_of(grid, narrowest, widest, records):
    """Bytes that the whole run takes at the most."""
    pixels = float(grid.rows) * grid.columns
    return surface.memory_needed(grid, narrowest, widest, records) + BYTES_PER_PIXEL * pixels


def machine_memory():
    """Memory of this machine in bytes; 8 GB where the system does not say."""
    try:
        return float(os.sysconf("SC_PAGE_SIZE")) * os.sysconf("SC_PHYS_PAGES")
    except (AttributeError, ValueError, OSError):
        return 8e9


def no_narrower_than_a_pixel(job, bandwidths, grid):
    """Bandwidths of at least a pixel: a narrower kernel would fall between pixel centres."""
    narrow = int(np.count_nonzero(bandwidths < grid.cell))
    if not narrow:
        return bandwidths
    job.warn(
        tr(
            "{} records ({}) asked for a bandwidth narrower than a pixel; it was raised to {} m. "
            "Smaller cells would show more."
        ).format(
            number(narrow),
            percent(narrow / len(bandwidths)),
            number(grid.cell * job.working.metres),
        )
    )
    return np.maximum(bandwidths, grid.cell)
