"""Disclosure-safe density surface: no peak and no hole points at one address."""

from dataclasses import dataclass

import numpy as np
import shapely

from ..plugin import looks
from ..plugin.rasters import Band
from ..plugin.report import Report
from ..plugin.text import number, tr
from .base import SteadfieldAlgorithm
from .numeric import bandwidth as rules_of_thumb
from .numeric import edges
from .numeric.disclosure import Rules, contributor_codes
from .numeric.errors import InputError
from .numeric.grid import covering
from .numeric.progress import part
from .numeric.safe_surface import FAINT, hidden_groups, kernel_widths, safe_surface

MOST_PIXELS = 4_000_000
# bandwidths beyond a group that a surface without a boundary reaches
MARGIN = 3.0


@dataclass(frozen=True)
class Study:
    """What the surface is made from; lengths in units of the working CRS."""

    x: np.ndarray
    y: np.ndarray
    weights: object
    contributors: object
    boundary: object
    least: int
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
                "by the normal-scale rule, rounded."
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
        study = prepare(job)
        mask = None
        if study.boundary is not None:
            mask = edges.boundary_mask(study.boundary, study.grid)
        found = safe_surface(
            study.x, study.y, study.least, study.bandwidth, study.grid, np.random.default_rng(0),
            study.weights, study.contributors, mask, part(job.progress, 0.15, 0.95),
        )  # fmt: skip
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
    return Study(x, y, weights, contributors, boundary, least, width, grid)


def bandwidth_of(job, x, y, weights):
    """The bandwidth asked for, or by rule with two digits, which tells little of the records."""
    asked = job.length("BANDWIDTH")
    if asked > 0:
        return asked
    metres = rules_of_thumb.normal_scale(x, y, weights) * job.working.metres
    chosen = float(f"{metres:.1e}")
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


def write_page(algorithm, job, study, found, density):
    """Write REPORT, for the custodian's file."""
    if not job.wanted("REPORT"):
        return
    report = Report(
        algorithm.displayName(),
        tr("Can anyone be picked out, alone or combined with what is already published?"),
        tr(
            "At least {} effective contributors stand behind every pixel with a density above 0, "
            "and the attack on the finished raster found {} of {} addresses that lie by "
            "themselves, where chance alone would find {}."
        ).format(
            number(found.least_effective),
            number(found.attack.found),
            number(found.attack.addresses),
            number(found.attack.by_chance),
        ),
        confidential=True,
    )
    report.plot(
        tr("What is released"),
        lambda figure: draw_density(figure, study, density),
        tr("Records per km²; colours follow the square root. Published figures only."),
        size=(8.0, 6.0),
    )
    metres = job.working.metres
    yes, no = tr("yes"), tr("no")
    report.table(
        tr("Figures"),
        [tr("figure"), tr("value"), tr("may be published")],
        [
            (tr("Least bandwidth (m)"), number(study.bandwidth * metres), yes),
            (tr("Cell size (m)"), number(study.grid.cell * metres), yes),
            (
                tr("Fewest effective contributors behind a pixel"),
                number(found.least_effective),
                yes,
            ),
            (tr("Pixels refused"), number(found.refused), yes),
            (tr("Groups of contributors"), number(len(found.groups.x)), no),
            (tr("Widest kernel (m)"), number(found.bandwidths.max() * metres), no),
            (tr("Addresses by themselves"), number(found.attack.addresses), no),
            (tr("Found by the attack"), number(found.attack.found), no),
            (tr("Found by chance on average"), number(found.attack.by_chance), no),
        ],
    )
    job.write_report(
        report,
        [
            tr(
                "Records are divided into groups of neighbours with at least {} effective "
                "contributors each (microaggregation: Domingo-Ferrer & Mateo-Sanz 2002, IEEE "
                "Trans. Knowl. Data Eng. 14:189; effective size: Kish 1965). A Gaussian kernel "
                "stands near the mean place of each group's contributors; its bandwidth is the "
                "least bandwidth or, where that is wider, the group's radius, within which the "
                "least-count-th nearest contributor lies, in steps of the square root of 2. "
                "Places are moved by up to 2 / contributors of the radius, because the mean of a "
                "village and one lonely farm points at the farm."
            ).format(study.least),
            tr(
                "Below {} of the peak the density is set to 0: the error of the surface lies "
                "there. At the boundary kernels are made up for what they lose (Jones 1993)."
            ).format(f"{FAINT:g}"),
            tr(
                "Attack: peaks and holes of the raster and of its Richardson-Lucy deconvolution at "
                "several bandwidths, compared with true addresses that lie by themselves; chance "
                "by moving the peaks about."
            ),
        ],
        [
            tr("Thresholds are set by the data's owner and by law, not by this tool."),
            tr("This page is for the custodian's file. Publish only what is marked “yes”."),
            tr("The surface adds up to the number of records; check whether that may be known."),
            tr(
                "Surfaces of other periods or subsets of the same records can be subtracted; do "
                "not release several whose difference rests on few contributors."
            ),
        ],
    )


def draw_density(figure, study, density):
    """The released raster."""
    from matplotlib.colors import LinearSegmentedColormap, PowerNorm

    axes = figure.add_subplot()
    grid = study.grid
    colours = LinearSegmentedColormap.from_list("sequence", looks.SEQUENCE)
    colours.set_bad(looks.MISSING)
    step = max(1, int(max(grid.shape) / 900))
    drawn = axes.imshow(
        np.ma.masked_invalid(density[::step, ::step]),
        extent=(grid.left, grid.right, grid.bottom, grid.top),
        cmap=colours,
        norm=PowerNorm(0.5),
        interpolation="nearest",
    )
    if study.boundary is not None:
        for one in shapely.get_parts(study.boundary):
            axes.plot(*shapely.get_coordinates(one.exterior).T, color="#3b3f46", linewidth=0.8)
    axes.set_aspect("equal")
    axes.set_axis_off()
    figure.colorbar(drawn, ax=axes, shrink=0.6, label=tr("per km²"))
