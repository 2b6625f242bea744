"""Raw layers as accumulated ink."""

import numpy as np
import shapely
from qgis.core import (
    QgsProcessingFeatureSource,
    QgsProcessingParameterMultipleLayers,
    QgsProcessingParameterRasterLayer,
)

from ..plugin import alignment, layers, looks, rasters
from ..plugin.host import ANY_VECTOR
from ..plugin.reference_system import reproject
from ..plugin.text import listed, number, tr
from . import ink_pages
from .base import SteadfieldAlgorithm
from .inkblend import add_inks, add_legend, chosen_inks
from .numeric import ink, rawink
from .numeric.cell_size import two_digits
from .numeric.errors import InputError
from .numeric.grid import covering
from .numeric.progress import part

PIXELS_ACROSS = 800
# Pixels of all layers together; each takes about 20 bytes.
MOST_PIXELS = 120_000_000
CAUTIONS = [
    tr(
        "This picture shows where features lie, so it is as confidential as they are: a lone mark "
        "may be somebody's home. It is for comparison at the desk, not for release."
    ),
    tr(
        "Ink fills up: beyond the number of features named in the legend a pixel gets hardly "
        "darker. Stacked records look like fewer than they are."
    ),
]


class RawInk(SteadfieldAlgorithm):
    ID = "rawink"
    NAME = tr("Raw layers as accumulated ink")
    GROUP = "together"
    QUESTION = "real"
    HELP = tr(
        "Prints the points, lines or polygons of 1 to 6 layers themselves as see-through ink: "
        "where features overlap, the ink adds up. Set it beside the blended picture of densities "
        "to see what the smoothing made of the data. Not for release: it shows single records."
    )
    TAGS = (
        tr("points"),
        tr("overplotting"),
        tr("transparency"),
        tr("raw"),
        tr("blend"),
        tr("colour"),
        tr("overlay"),
    )

    def define(self):
        self.add(
            QgsProcessingParameterMultipleLayers("LAYERS", tr("Layers"), ANY_VECTOR),
            tr("1 to 6 layers of points, lines or polygons, in any CRS; their filters hold."),
        )
        self.add_names()
        self.add_length(
            "CELL_SIZE",
            tr("Cell size"),
            tr("Side of a pixel. Empty: about an 800th of the longer side of the extent."),
        )
        self.add_number(
            "INK_PER_FEATURE",
            tr("Ink of one feature"),
            tr("From 0 to 1; 0: so that the fullest hundredth of a layer's pixels is nearly full."),
            default=0,
            least=0,
            most=1,
            advanced=True,
        )
        self.add(
            QgsProcessingParameterRasterLayer("GRID", tr("Grid to follow"), optional=True),
            tr("A raster, such as a blended picture, whose CRS, extent and cell size are taken."),
            advanced=True,
        )
        add_inks(self)
        self.add_text("TITLE", tr("Title of the legend"), tr("Empty: the names of the layers."))
        self.add_raster("PICTURE", tr("Picture"), tr("Red, green, blue and opacity."))
        add_legend(self)
        self.add_report()
        self.add_numbers(CELL_SIZE_USED=tr("Cell size used (m)"))

    def work(self, job):
        sources = chosen_sources(job)
        names = job.layer_names("LAYERS")
        inks = chosen_inks(job, names)
        settle_crs(job, sources)
        features = [
            read_features(job, source, name, part(job.progress, *stretch))
            for source, name, stretch in zip(sources, names, stretches(0.0, 0.3, len(sources)))
        ]
        grid = picture_grid(job, features)
        counts = []
        for geometry, (start, _) in zip(features, stretches(0.3, 0.6, len(sources))):
            job.progress(start)
            counts.append(count_features(geometry, grid))
        strengths, full = strengths_of(job, counts, names)
        preview = ink_pages.Preview(grid)

        def levels_of(window):
            levels = ink.rgba([strength[window.place] for strength in strengths], inks)
            preview.take(window, levels)
            return levels

        writing = part(job.progress, 0.6, 0.95)
        windows = alignment.windows(grid)
        job.write_picture("PICTURE", grid, windows, levels_of, looks.picture, writing)
        svg = ink_pages.legend_of(
            inks,
            names,
            [tr("nearly full: {} on a pixel").format(number(most)) for most in full],
            job.words("TITLE") or listed(names),
            tr("Each feature lays one coat of see-through ink on pixels of {} m.").format(
                number(grid.cell * job.working.metres)
            ),
        )
        job.write_drawing("LEGEND", svg)
        job.give("CELL_SIZE_USED", grid.cell * job.working.metres)
        if job.wanted("REPORT"):
            report = ink_pages.raw_report(preview, svg, inks, names, counts, full)
            job.write_report(report, [ink_pages.RAW_METHOD, *ink_pages.MIXING], CAUTIONS)


def stretches(start, stop, count):
    """Equal stretches of the progress, as (start, stop) of each."""
    edges = np.linspace(start, stop, count + 1)
    return list(zip(edges[:-1], edges[1:]))


def chosen_sources(job):
    """The layers as feature sources, 1 to 6 of them."""
    found = job.layer_list("LAYERS")
    if not 1 <= len(found) <= ink.MOST_LAYERS:
        raise InputError(
            tr("{}: 1 to {} layers are wanted; found {}.").format(
                job.label("LAYERS"), ink.MOST_LAYERS, len(found)
            )
        )
    sources = []
    for layer in found:
        if layer.featureCount() == 0:
            raise InputError(
                tr("{}: the layer {} has no features.").format(job.label("LAYERS"), layer.name())
            )
        sources.append(QgsProcessingFeatureSource(layer, job.context))
    return sources


def settle_crs(job, sources):
    """Work in the CRS of the grid to follow, or in the one that suits the first layer."""
    if not job.given("GRID"):
        job.settle_working_crs(sources[0], "LAYERS", sources[0].sourceName())
        return
    working, _ = alignment.common_grid(job.raster("GRID"), job.context.transformContext())
    job.take_working_crs(working)


def read_features(job, source, name, progress):
    """Geometries of a layer in the working CRS; what cannot be drawn is counted in a warning."""
    progress(0.0)
    geometry, _, _ = layers.read_table(None, source, [])
    filled = ~(shapely.is_missing(geometry) | shapely.is_empty(geometry))
    geometry = shapely.force_2d(geometry[filled])
    coordinates, feature = shapely.get_coordinates(geometry, return_index=True)
    moved = reproject(
        coordinates, source.sourceCrs(), job.working.crs, job.context.transformContext()
    )
    lost = np.unique(feature[~np.isfinite(moved).all(axis=1)])
    skipped = {
        tr("without geometry"): int((~filled).sum()),
        tr("that cannot be placed in the working CRS"): len(lost),
    }
    for reason, count in skipped.items():
        if count:
            job.warn(tr("{}: {} features {} were left out.").format(name, number(count), reason))
    moved[~np.isfinite(moved)] = 0.0
    geometry = np.delete(shapely.set_coordinates(geometry, moved), lost)
    if len(geometry) == 0:
        raise InputError(tr("{}: {}: no usable feature is left.").format(job.label("LAYERS"), name))
    progress(1.0)
    return geometry


def picture_grid(job, features):
    """The grid of the picture: the raster's to follow, or one that covers all features."""
    cell = job.metres("CELL_SIZE")
    if job.given("GRID"):
        _, grid = alignment.common_grid(job.raster("GRID"), job.context.transformContext(), cell)
    else:
        bounds = shapely.total_bounds(np.concatenate(features))
        longer = max(bounds[2] - bounds[0], bounds[3] - bounds[1]) or 100.0 / job.working.metres
        size = cell / job.working.metres or two_digits(longer / PIXELS_ACROSS)
        grid = covering(bounds, size, margin=size)
    pixels = grid.rows * grid.columns * len(features)
    if pixels > MOST_PIXELS:
        workable = grid.cell * (pixels / MOST_PIXELS) ** 0.5 * job.working.metres
        raise InputError(
            tr("{}: {} layers of {} x {} pixels are too many to hold; choose {} m or more.").format(
                job.label("CELL_SIZE"),
                len(features),
                number(grid.rows),
                number(grid.columns),
                number(two_digits(workable * 1.05)),
            )
        )
    return grid


def count_features(geometry, grid):
    """How many features lie on each pixel, (rows, columns) float32."""
    points = np.isin(shapely.get_type_id(geometry), (0, 4))
    places = shapely.get_coordinates(geometry[points])
    counts = rawink.count_points(places[:, 0], places[:, 1], grid).astype(np.float32)
    if not points.all():
        counts += rasters.count_on_pixels(geometry[~points], grid)
    return counts


def strengths_of(job, counts, names):
    """Strength of each layer, and how many features nearly fill a pixel of it."""
    strengths, full = [], []
    for one, name in zip(counts, names):
        with job.naming("LAYERS", name):
            chosen, most = rawink.ink_per_feature(one)
        asked = job.real("INK_PER_FEATURE")
        if asked:
            chosen, most = asked, rawink.features_to_fill(asked)
        job.inform(tr("{}: {} on a pixel nearly fill it.").format(name, number(most)))
        strengths.append(rawink.accumulate(one, chosen))
        full.append(most)
    return strengths, full
