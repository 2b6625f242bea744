"""Disclosure-safe density surface: no peak and no hole points at one address."""

from dataclasses import dataclass, replace

import numpy as np
import shapely

from ..plugin import looks
from ..plugin.rasters import Band
from ..plugin.text import number, tr
from .base import SteadfieldAlgorithm
from .numeric import bandwidth as rules_of_thumb
from .numeric import edges
from .numeric.cell_size import two_digits
from .numeric.disclosure import Rules, contributor_codes
from .numeric.errors import InputError
from .numeric.grid import covering
from .numeric.microaggregation import Groups
from .numeric.progress import part
from .numeric.safe_surface import (
    STEP,
    PointsAtAddressesError,
    hidden_groups,
    kernel_widths,
    safe_surface,
)
from .safesurface_page import write_page

MOST_PIXELS = 4_000_000
# bandwidths beyond a group that a surface without a boundary reaches
MARGIN = 3.0
# how often a bandwidth that was left to the tool is widened before the run is refused
MOST_WIDENINGS = 3


@dataclass(frozen=True)
class Study:
    """What the surface is made from; lengths in units of the working CRS."""

    x: np.ndarray
    y: np.ndarray
    weights: object
    contributors: object
    boundary: object
    least: int
    groups: Groups
    bandwidth: float
    grid: object


class SafeSurface(SteadfieldAlgorithm):
    """Smooth confidential records into a surface that may be shown."""

    ID = "safesurface"
    NAME = tr("Disclosure-safe density surface")
    GROUP = "release"
    QUESTION = "safe"
    TAGS = (tr("disclosure"), tr("confidential"), tr("privacy"), tr("kernel"), tr("heat map"))
    HELP = tr(
        "Smooths confidential records into a density surface behind every pixel of which stand "
        "enough contributors. A kernel on a single address has its peak there however wide it is; "
        "so every kernel stands near the mean place of a group of neighbouring contributors and "
        "reaches over the whole group. The finished raster is then attacked by peak search and "
        "deconvolution, and the run is refused if these find more single addresses than chance "
        "would. That is a test, not a proof. The surface does not protect from what somebody knows "
        "already, nor from several surfaces compared; it adds up to the number of records. "
        "Thresholds are set by the data's owner and by law, not by this tool."
    )

    def define(self):
        self.add_points("RECORDS", tr("Records"), tr("One point for each confidential record."))
        self.add_field(
            "CONTRIBUTOR",
            tr("Contributor"),
            "RECORDS",
            tr(
                "Who is protected, such as the person or the household. Empty: every record is a "
                "contributor of its own. Records with none are left out."
            ),
            numeric=False,
        )
        self.add_field(
            "WEIGHT",
            tr("Weight"),
            "RECORDS",
            tr("What a record contributes. Empty: 1 each."),
            advanced=True,
        )
        self.add_boundary()
        self.add_number(
            "LEAST_COUNT",
            tr("Least count"),
            tr("Fewest effective contributors behind a pixel. In use: 3, 5, 10 and more."),
            default=10,
            least=1,
            whole=True,
        )
        self.add_length(
            "BANDWIDTH",
            tr("Least bandwidth"),
            tr(
                "No kernel is narrower; where records are few it is as wide as their group. Empty: "
                "by the normal-scale rule, rounded, and wider where the surface would point at "
                "single addresses."
            ),
        )
        self.add_length(
            "CELL_SIZE",
            tr("Cell size"),
            tr("Side of a pixel, at most the bandwidth. Empty: a third of it."),
        )
        self.add_working_crs()
        self.add_raster("DENSITY", tr("Density"), tr("Records (or weight) per km², for release."))
        self.add_report()
        self.add_numbers(
            BANDWIDTH_USED=tr("Least bandwidth used (m)"),
            CELL_SIZE_USED=tr("Cell size used (m)"),
            LEAST_EFFECTIVE=tr("Fewest effective contributors behind a pixel"),
            PIXELS_REFUSED=tr("Pixels without a value because too few stand behind them"),
            GROUPS=tr("Groups of contributors (confidential)"),
            ADDRESSES_ALONE=tr("Addresses that lie by themselves (confidential)"),
            ADDRESSES_FOUND=tr("Of these, found by the attack (confidential)"),
        )

    def work(self, job):
        study, found = withstand(job, prepare(job))
        density = found.density * 1e6 / job.working.metres**2
        unit = tr("per km²")
        look = looks.ramp(1, looks.root_stops(float(np.nanmax(density))), unit)
        job.write_raster("DENSITY", study.grid, [Band("density", density, unit)], look)
        job.give("BANDWIDTH_USED", study.bandwidth * job.working.metres)
        job.give("CELL_SIZE_USED", study.grid.cell * job.working.metres)
        job.give("LEAST_EFFECTIVE", found.least_effective)
        job.give("PIXELS_REFUSED", found.refused)
        job.give("GROUPS", len(found.groups.x))
        job.give("ADDRESSES_ALONE", found.attack.addresses)
        job.give("ADDRESSES_FOUND", found.attack.found)
        write_page(self, job, study, found, density)


def withstand(job, study):
    """Make the surface; a bandwidth that the tool chose is widened until the attack fails.

    Returns
    -------
    study : Study
        With the bandwidth and the grid that were used.
    found : numeric.safe_surface.SafeSurface
    """
    chosen = job.length("BANDWIDTH") == 0
    start, end = 0.15, 0.55 if chosen else 0.95
    for widenings in range(MOST_WIDENINGS + 1):
        try:
            return study, attacked_surface(study, part(job.progress, start, end))
        except PointsAtAddressesError:
            if not chosen or widenings == MOST_WIDENINGS:
                raise
        start, end = end, (end + 0.95) / 2
        width = two_digits(study.bandwidth * STEP * job.working.metres) / job.working.metres
        job.inform(
            tr("The surface points at single addresses; the least bandwidth becomes {} m.").format(
                number(width * job.working.metres)
            )
        )
        grid = grid_of(job, width, study.groups, study.boundary)
        study = replace(study, bandwidth=width, grid=grid)


def attacked_surface(study, progress):
    """The surface, once the attack on it has failed."""
    mask = None
    if study.boundary is not None:
        mask = edges.boundary_mask(study.boundary, study.grid)
    return safe_surface(
        study.x, study.y, study.least, study.bandwidth, study.grid, np.random.default_rng(0),
        study.weights, study.contributors, mask, progress,
    )  # fmt: skip


def prepare(job):
    """Read the records and settle bandwidth and grid."""
    name = job.field("CONTRIBUTOR")
    found = job.records("RECORDS", weight="WEIGHT", fields=[name] if name else [])
    boundary = job.boundary()
    kept = np.ones(len(found), bool)
    if boundary is not None:
        shapely.prepare(boundary)
        kept = shapely.intersects_xy(boundary, found.x, found.y)
        if not kept.all():
            job.warn(
                tr("{} records outside the boundary were left out.").format(number((~kept).sum()))
            )
    contributors = None
    if name:
        codes = contributor_codes(found.values[name])
        unknown = kept & (codes < 0)
        if unknown.any():
            job.warn(
                tr("{}: {} records name no contributor and were left out.").format(
                    job.label("CONTRIBUTOR"), number(unknown.sum())
                )
            )
        kept &= codes >= 0
        contributors = codes[kept]
    if not kept.any():
        raise InputError(
            tr("{}: no usable record is left; check boundary and contributor.").format(
                job.label("RECORDS")
            )
        )
    x, y = found.x[kept], found.y[kept]
    weights = found.weight[kept] if job.field("WEIGHT") else None
    least = Rules(job.whole("LEAST_COUNT")).least_count
    # tells at once when there are too few, before anything is measured on them
    groups = hidden_groups(x, y, least, weights, contributors, part(job.progress, 0.1, 0.15))
    width = bandwidth_of(job, x, y, weights)
    grid = grid_of(job, width, groups, boundary)
    return Study(x, y, weights, contributors, boundary, least, groups, width, grid)


def bandwidth_of(job, x, y, weights):
    """The bandwidth asked for, or by rule with two digits, which tells little of the records."""
    asked = job.length("BANDWIDTH")
    if asked > 0:
        return asked
    metres = rules_of_thumb.normal_scale(x, y, weights) * job.working.metres
    chosen = two_digits(metres)
    job.inform(tr("Least bandwidth chosen: {} m").format(number(chosen)))
    return chosen / job.working.metres


def grid_of(job, width, groups, boundary):
    """The grid over the boundary, or over the groups and their kernels."""
    cell = job.length("CELL_SIZE")
    metres = job.working.metres
    if cell > width:
        raise InputError(
            tr("{}: {} m is more than the least bandwidth of {} m; choose smaller pixels.").format(
                job.label("CELL_SIZE"), number(cell * metres), number(width * metres)
            )
        )
    if boundary is not None:
        bounds = boundary.bounds
    else:
        reach = MARGIN * kernel_widths(width, groups)
        bounds = (
            float((groups.x - reach).min()),
            float((groups.y - reach).min()),
            float((groups.x + reach).max()),
            float((groups.y + reach).max()),
        )
    extent = (bounds[2] - bounds[0]) * (bounds[3] - bounds[1])
    fitting = np.sqrt(extent / MOST_PIXELS)
    if cell == 0:
        cell = max(width / 3, fitting)
        cell = float(f"{cell * metres:.1e}") / metres
        job.inform(tr("Cell size chosen: {} m").format(number(cell * metres)))
    elif cell < 0.5 * fitting:
        raise InputError(
            tr("{}: {} million pixels would not fit; choose {} m or more.").format(
                job.label("CELL_SIZE"),
                number(extent / cell**2 / 1e6),
                number(np.ceil(fitting * metres)),
            )
        )
    return covering(bounds, cell)
