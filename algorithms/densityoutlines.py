"""Density outlines: polygons around the densest ground that holds a share of the total."""

import numpy as np
from qgis.core import QgsProcessingParameterRasterLayer

from ..plugin import alignment, looks
from ..plugin.outputs import Column
from ..plugin.rasters import label_polygons
from ..plugin.text import listed, number, percent, tr
from .adaptivedensity_study import MEMORY_SHARE, machine_memory
from .base import SteadfieldAlgorithm
from .densityoutlines_page import write_page
from .numeric.errors import InputError
from .numeric.outlines import density_levels, density_regions
from .numeric.progress import part

# density, ranks and one label raster for each share
BYTES_PER_PIXEL, BYTES_PER_LABEL = 60, 16


class DensityOutlines(SteadfieldAlgorithm):
    """Outline the smallest ground that holds given shares of a density."""

    ID = "densityoutlines"
    NAME = tr("Density outlines")
    GROUP = "density"
    QUESTION = "real"
    TAGS = (tr("contour"), tr("hotspot"), tr("concentration"), tr("highest-density region"))
    HELP = tr(
        "Draws polygons around the densest ground of a density raster: the smallest area that "
        "holds 50 % of everything, 90 %, or any other share. A contour at a round density says "
        "little; an outline that holds half of all records says what a service at hand would "
        "reach. Each polygon carries the exact share it holds, its area, its highest density and "
        "its rank; outlines of smaller shares lie inside those of larger ones, and holes stay "
        "holes."
    )

    def define(self):
        self.add(
            QgsProcessingParameterRasterLayer("DENSITY", tr("Density")),
            tr("Any raster of a density or of counts; values must not be negative."),
        )
        self.add_text(
            "SHARES",
            tr("Shares of the total (%)"),
            tr("One or more, apart by commas: 50, 90 outlines what holds half and nine tenths."),
            default="25, 50, 75, 95",
            optional=False,
        )
        self.add_points(
            "RECORDS",
            tr("Records"),
            tr("Point records to be counted inside each outline. Empty: none are counted."),
            optional=True,
        )
        self.add_number(
            "BAND",
            tr("Band"),
            tr("Which band of the raster is read."),
            default=1,
            least=1,
            whole=True,
            advanced=True,
        )
        self.add_number(
            "LEAST_AREA",
            tr("Least area (km²)"),
            tr("Smaller pieces are left out, and how much they hold is said. 0: all are kept."),
            default=0.0,
            least=0.0,
            advanced=True,
        )
        self.add_polygon_output(
            "OUTLINES",
            tr("Outlines"),
            tr("One polygon for each connected piece of each share, largest share first."),
        )
        self.add_report()
        self.add_numbers(
            PIECES=tr("Number of outlines"),
            AREA=tr("Area inside the outlines of the first share (km²)"),
        )

    def work(self, job):
        shares = asked_shares(job)
        layer, grid, density = read_density(job, len(shares))
        job.progress(0.15)
        with job.naming("DENSITY"):
            levels = density_levels(density, shares)
        regions = density_regions(density, levels, grid.cell, part(job.progress, 0.2, 0.5))
        inside = records_inside(job, grid, regions)
        kept = large_enough(job, levels, regions)
        polygons = polygons_of(regions, grid, part(job.progress, 0.5, 0.9))
        area = regions.area[kept & (regions.level == 0)].sum() * job.working.square_kilometres
        job.give("PIECES", int(kept.sum()))
        job.give("AREA", float(area))
        write_outlines(job, layer, grid, levels, regions, polygons, inside, kept)
        write_page(self, job, layer, grid, density, levels, regions, inside, kept)


def asked_shares(job):
    """The shares of SHARES, 0 to 1, in the order asked."""
    asked = job.numbers("SHARES")
    if not asked or not all(0 < share <= 100 for share in asked):
        raise InputError(
            tr("{}: percentages above 0 and up to 100 are expected; found {}.").format(
                job.label("SHARES"), listed(f"{share:g}" for share in asked) or tr("none")
            )
        )
    if max(asked) <= 1:
        job.warn(
            tr("{}: shares are percentages, so {} means that much of a hundred.").format(
                job.label("SHARES"), listed(f"{share:g}" for share in asked)
            )
        )
    return [share / 100 for share in dict.fromkeys(asked)]


def read_density(job, shares):
    """The raster in a CRS that keeps areas; settles the working CRS.

    Returns
    -------
    aligned : plugin.alignment.Aligned
    grid : Grid
    density : (rows, columns) float array
        NaN for no data.
    """
    layer = job.raster("DENSITY")
    with job.naming("DENSITY"):
        working, grid = alignment.common_grid(layer, job.context.transformContext())
    job.take_working_crs(working)
    needed = (BYTES_PER_PIXEL + BYTES_PER_LABEL * shares) * float(grid.rows) * grid.columns
    if needed > MEMORY_SHARE * machine_memory():
        coarser = (needed / (MEMORY_SHARE * machine_memory())) ** 0.5 * grid.cell * working.metres
        raise InputError(
            tr(
                "{}: {} x {} pixels would not fit into memory; average the raster to cells of {} "
                "m or more first."
            ).format(
                job.label("DENSITY"), number(grid.rows), number(grid.columns), number(coarser, 2)
            )
        )
    with job.naming("DENSITY"):
        aligned = alignment.align(layer, grid, working.crs, job.whole("BAND"))
    job.inform(tr("{}: {}").format(layer.name(), aligned.how))
    density = np.empty(grid.shape)
    for window in alignment.windows(grid):
        job.progress(0.15 * window.row / grid.rows)
        density[window.place] = aligned.read(window)
    return aligned, grid, density


def records_inside(job, grid, regions):
    """Records in each region, (n,) int array; None where none are counted."""
    if not job.given("RECORDS"):
        return None
    records = job.records("RECORDS")
    rows, columns, on_grid = grid.pixels(records.x, records.y)
    counts = np.zeros(len(regions.share), np.int64)
    for labels in regions.labels:
        found = np.bincount(labels[rows[on_grid], columns[on_grid]], minlength=counts.size + 1)
        counts += found[1:]
    return counts


def large_enough(job, levels, regions):
    """Which regions reach LEAST_AREA, (n,) bool array; what the others hold is said."""
    least = job.real("LEAST_AREA") / job.working.square_kilometres
    kept = regions.area >= least
    if not kept.any():
        raise InputError(
            tr("{}: no outline is that large; the largest has {} km².").format(
                job.label("LEAST_AREA"), number(regions.area.max() * job.working.square_kilometres)
            )
        )
    for position, level in enumerate(levels):
        dropped = ~kept & (regions.level == position)
        if dropped.any():
            job.warn(
                tr("{} pieces of the {} outline were left out; they hold {} of the total.").format(
                    number(int(dropped.sum())),
                    percent(level.share, 0),
                    percent(regions.share[dropped].sum(), 2),
                )
            )
    return kept


def polygons_of(regions, grid, progress):
    """A multipolygon along pixel edges for each region, (n,) object array."""
    polygons = np.empty(len(regions.share), object)
    for position, labels in enumerate(regions.labels):
        own = np.flatnonzero(regions.level == position)
        first = own[0]
        local = np.where(labels > 0, labels - first, 0)
        polygons[own] = label_polygons(local, grid)
        progress((position + 1) / len(regions.labels))
    return polygons


def write_outlines(job, layer, grid, levels, regions, polygons, inside, kept):
    """Write OUTLINES, the largest share first so that the densest lies on top."""
    unit = f" ({layer.unit})" if layer.unit else ""
    level = regions.level[kept]
    area = regions.area[kept] * job.working.square_kilometres
    held = np.array([one.held for one in levels])
    asked = np.array([one.share for one in levels])
    threshold = np.array([one.threshold for one in levels])
    columns = [
        Column("share", "float", 100 * asked[level], tr("Share asked for (%)")),
        Column("share_held", "float", 100 * held[level], tr("Share held by all its pieces (%)")),
        Column("piece_share", "float", 100 * regions.share[kept], tr("Share held by this one (%)")),
        Column("rank", "int", regions.rank[kept], tr("Rank among the pieces of the share")),
        Column("area_km2", "float", area, tr("Area (km²)")),
        Column("peak", "float", regions.peak[kept], tr("Highest density") + unit),
        Column("least", "float", threshold[level], tr("Density at the edge") + unit),
        Column("peak_x", "float", grid.x_centres()[regions.peak_column[kept]], tr("Peak, x")),
        Column("peak_y", "float", grid.y_centres()[regions.peak_row[kept]], tr("Peak, y")),
    ]
    if inside is not None:
        columns.append(Column("records", "int", inside[kept], tr("Records inside")))
    job.write_layer("OUTLINES", columns, polygons[kept], "polygon", outline_look(asked))
    job.inform(
        tr("{} outlines; {}").format(
            number(int(kept.sum())),
            listed(
                tr("{} hold {}").format(percent(one.share, 0), percent(one.held, 2))
                for one in levels
            ),
        )
    )


def outline_look(asked):
    """Look: the smaller the share, the darker."""
    order = np.sort(np.unique(asked))[::-1]
    shades = looks.SEQUENCE[1:]
    classes = [
        (
            float(100 * share),
            shades[round(place * (len(shades) - 1) / max(len(order) - 1, 1))],
            tr("densest ground with {} of the total").format(percent(share, 0)),
        )
        for place, share in enumerate(order)
    ]
    return looks.categories("share", classes)
