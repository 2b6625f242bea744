"""Adaptive density surface: records per square kilometre, with its error and its support."""

import numpy as np

from ..plugin import looks
from ..plugin.rasters import Band
from ..plugin.text import number, percent, tr
from .adaptivedensity_page import write_page
from .adaptivedensity_study import EDGES, KERNELS, prepare
from .base import SteadfieldAlgorithm
from .numeric import edges
from .numeric.estimate import estimate, without_noise
from .numeric.progress import part

NOISE = {
    "keep": tr("Leave as it is"),
    "drop": tr("No value"),
    "mark": tr("Grey, in a second band"),
}
# code of a pixel whose error is above the limit, in the band that is shown
MARKED = -1.0


class AdaptiveDensity(SteadfieldAlgorithm):
    """Smooth records into a surface, narrowly where they crowd and widely where they are few."""

    ID = "adaptivedensity"
    NAME = tr("Adaptive density surface")
    GROUP = "density"
    QUESTION = "real"
    TAGS = (tr("kernel"), tr("density"), tr("heat map"), tr("hotspot"), tr("concentration"))
    HELP = tr(
        "Spreads every record over the ground around it and sums up: narrowly where records crowd, "
        "so that sharp concentrations stay sharp, and widely where they are few, so that single "
        "records do not look like concentrations. Beside the density come its standard error and "
        "the effective number of records behind each pixel, and edges are corrected at the "
        "boundary. Densities are per square kilometre."
    )

    def define(self):
        self.add_weighted_records()
        self.add_boundary(
            tr("Polygons of the study area, with holes and islands; outside there is no value.")
        )
        self._add_smoothing()
        self._add_noise()
        self.add_working_crs()
        self.add_raster("DENSITY", tr("Density"), tr("Records (or weight) per km²."))
        self.add_raster(
            "ERROR",
            tr("Relative standard error"),
            tr(
                "Standard error of the density over the density: 0.3 is give or take 30 %, in two "
                "of three cases."
            ),
            optional=True,
        )
        self.add_raster(
            "SUPPORT",
            tr("Effective records"),
            tr("Number of equally counting records that would be as steady as those that count."),
            optional=True,
        )
        self.add_report()
        self.add_numbers(
            BANDWIDTH_USED=tr("Overall bandwidth used (m)"),
            CELL_SIZE_USED=tr("Cell size used (m)"),
            TOTAL=tr("Total held by the surface"),
            PEAK=tr("Highest density (per km²)"),
        )

    def _add_smoothing(self):
        self.add_length(
            "BANDWIDTH",
            tr("Bandwidth"),
            tr(
                "Standard deviation of the kernel at a record of middling density. Empty: by the "
                "normal-scale rule; see Bandwidth advice for others."
            ),
        )
        self.add_adaptation()
        self.add_length(
            "CELL_SIZE",
            tr("Cell size"),
            tr(
                "Side of a pixel. Empty: half of the narrowest bandwidth, at most 4 million pixels."
            ),
        )
        self.add_choice(
            "KERNEL",
            tr("Kernel"),
            KERNELS,
            tr("Both smooth alike at one bandwidth."),
            advanced=True,
        )
        self.add_choice(
            "EDGE",
            tr("Edge correction"),
            EDGES,
            tr("Makes up for what kernels lose beyond the boundary; needs a boundary."),
            default=list(EDGES).index("place"),
            advanced=True,
        )
        self.add_number(
            "LEAST_RECORDS",
            tr("Least records"),
            tr("No bandwidth is left shorter than the way to so many other records. 0: no floor."),
            default=0,
            least=0,
            whole=True,
            advanced=True,
        )
        self.add_trim()

    def _add_noise(self):
        self.add_choice(
            "NOISE",
            tr("Pixels that are mostly noise"),
            NOISE,
            tr("What to do with pixels whose relative standard error is above the limit."),
            advanced=True,
        )
        self.add_number(
            "MOST_ERROR",
            tr("Largest relative standard error"),
            tr(
                "0.3 asks for about 11 effective records with one bandwidth for all, 0.5 for 4; "
                "for up to twice as many where bandwidths adapt."
            ),
            default=0.3,
            least=0.01,
            most=1.0,
            advanced=True,
        )

    def work(self, job):
        study = prepare(job)
        mask = None
        if study.boundary is not None:
            mask = edges.boundary_mask(study.boundary, study.grid, part(job.progress, 0.35, 0.4))
        found = estimate(
            study.x,
            study.y,
            study.weight,
            study.bandwidths,
            study.grid,
            study.kernel,
            mask,
            study.edge,
            study.adaptation.inflation,
            part(job.progress, 0.4, 0.85),
        )
        steady = without_noise(found, job.real("MOST_ERROR"))
        per_km2 = 1e6 / job.working.metres**2
        peak = give_numbers(job, study, found, per_km2)
        write_density(job, study, found, steady, per_km2, peak)
        kept = steady if job.choice("NOISE", NOISE) == "drop" else found
        write_companions(job, study, kept)
        write_page(self, job, study, found, steady, per_km2)


def give_numbers(job, study, found, per_km2):
    """Number outputs, and the main ones in the log; returns the highest density per km²."""
    peak = float(found.density[found.inside].max(initial=0.0)) * per_km2
    job.give("BANDWIDTH_USED", study.pilot * job.working.metres)
    job.give("CELL_SIZE_USED", study.grid.cell * job.working.metres)
    job.give("TOTAL", found.mass)
    job.give("PEAK", peak)
    job.inform(
        tr("Highest density: {} per km². Total held: {} of {}.").format(
            number(peak), number(found.mass), number(float(study.weight.sum()))
        )
    )
    return peak


def write_density(job, study, found, steady, per_km2, peak):
    """Write DENSITY, with what is mostly noise left, dropped or marked."""
    noise = job.choice("NOISE", NOISE)
    density = np.where(found.inside, found.density * per_km2, np.nan)
    unit = tr("per km²")
    stops = looks.root_stops(peak)
    bands, look = [Band("density", density, unit)], looks.ramp(1, stops, unit)
    if noise == "drop":
        bands = [Band("density", np.where(steady.inside, density, np.nan), unit)]
    elif noise == "mark":
        marked = np.where(steady.inside | ~found.inside, density, MARKED)
        bands.append(Band("density_marked", marked, unit))
        words = tr("standard error above {}").format(percent(job.real("MOST_ERROR"), 0))
        look = looks.ramp_with_code(2, stops, unit, MARKED, looks.NOISE, words)
    job.write_raster("DENSITY", study.grid, bands, look)


def write_companions(job, study, found):
    """Write ERROR and SUPPORT where they are wanted."""
    if job.wanted("ERROR"):
        error = np.where(found.inside, found.relative_error, np.nan)
        job.write_raster(
            "ERROR",
            study.grid,
            [Band("relative_standard_error", error, tr("of the density"))],
            looks.ramp(1, looks.spread(looks.SEQUENCE, 0.0, 1.0), tr("of the density")),
        )
    if job.wanted("SUPPORT"):
        support = np.where(found.inside, found.effective, np.nan)
        job.write_raster(
            "SUPPORT",
            study.grid,
            [Band("effective_records", support, tr("records"))],
            looks.ramp(1, looks.root_stops(float(np.nanmax(support, initial=1.0))), tr("records")),
        )
