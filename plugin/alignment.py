"""Rasters that differ in CRS, cell size, extent and type, read on one grid, window by window."""

import math
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np
from osgeo import gdal
from qgis.core import QgsCoordinateTransform, QgsCsException, QgsRectangle

from ..algorithms.numeric.errors import InputError
from ..algorithms.numeric.grid import Grid, covering
from .reference_system import working_crs
from .text import listed, number, tr

WINDOW_ROWS, WINDOW_COLUMNS = 256, 8192
MOST_CACHE = 256 * 2**20
# A finer raster is averaged from this ratio of cell sizes on; bilinear weights would skip pixels.
AVERAGE_FROM = 1.5


@dataclass(frozen=True)
class Window:
    """A part of a grid."""

    row: int
    column: int
    rows: int
    columns: int

    @property
    def place(self):
        """Slices of an array of the whole grid."""
        return (
            slice(self.row, self.row + self.rows),
            slice(self.column, self.column + self.columns),
        )


@dataclass(frozen=True)
class Aligned:
    """A raster layer as it is read on the common grid.

    Attributes
    ----------
    name : str
        Name of the layer.
    unit : str
        Unit of its band, empty where none is noted.
    how : str
        What was done to align it, in words.
    dataset : gdal.Dataset
        Its first band lies on the grid.
    no_data : float or None
    masked : bool
        The dataset has a mask of its own.
    """

    name: str
    unit: str
    how: str
    dataset: gdal.Dataset
    no_data: float = None
    masked: bool = False

    def read(self, window):
        """Values of a window as (rows, columns) float32, NaN for no data.

        Raises
        ------
        InputError
            The raster cannot be read there.
        """
        band = self.dataset.GetRasterBand(1)
        place = (window.column, window.row, window.columns, window.rows)
        values = _tried(band.ReadAsArray, *place, buf_type=gdal.GDT_Float32)
        if values is None:
            raise InputError(
                tr("The raster {} cannot be read: {}").format(self.name, gdal.GetLastErrorMsg())
            )
        if self.no_data is not None and self.no_data == self.no_data:
            values[values == np.float32(self.no_data)] = np.nan
        if self.masked:
            values[band.GetMaskBand().ReadAsArray(*place) == 0] = np.nan
        return values


def _tried(function, *arguments, **options):
    """Result of a call to the raster library, None where it fails.

    Whether it raises or returns None depends on its version and on other plugins.
    """
    try:
        return function(*arguments, **options)
    except RuntimeError:
        return None


@contextmanager
def bounded_cache():
    """Keep the raster library from filling a share of the machine's memory with pixels read once.

    Windows follow the rows of tiles, so that no tile is wanted again later.
    """
    before = gdal.GetCacheMax()
    gdal.SetCacheMax(min(before, MOST_CACHE))
    try:
        yield
    finally:
        gdal.SetCacheMax(before)


def windows(grid):
    """Windows that cover a grid from north to south, of at most 256 x 8192 pixels."""
    return [
        Window(
            row,
            column,
            min(WINDOW_ROWS, grid.rows - row),
            min(WINDOW_COLUMNS, grid.columns - column),
        )
        for row in range(0, grid.rows, WINDOW_ROWS)
        for column in range(0, grid.columns, WINDOW_COLUMNS)
    ]


def common_grid(layer, transform_context, cell=0.0):
    """The working CRS and the grid on which layers are put together.

    Parameters
    ----------
    layer : QgsRasterLayer
        The layer whose grid is taken, in its own CRS where that keeps areas.
    transform_context : QgsCoordinateTransformContext
    cell : float
        Cell size in metres; 0: as in the layer.

    Returns
    -------
    working : WorkingCrs
    grid : Grid
    """
    dataset = _open(layer)
    working = working_crs(layer.crs(), QgsRectangle(layer.extent()), transform_context)
    left, width, turn, top, other_turn, height = dataset.GetGeoTransform()
    straight = not turn and not other_turn and width > 0 and height < 0
    square = straight and math.isclose(width, -height, rel_tol=1e-6)
    if working.crs == layer.crs() and straight:
        grid = Grid(left, top, width, dataset.RasterYSize, dataset.RasterXSize)
        bounds = (left, top + height * dataset.RasterYSize, grid.right, top)
    else:
        placed = _tried(gdal.AutoCreateWarpedVRT, dataset, layer.crs().toWkt(), working.crs.toWkt())
        if placed is None:
            raise InputError(
                tr("The raster {} cannot be placed in the CRS {}.").format(
                    layer.name(), working.crs.userFriendlyIdentifier()
                )
            )
        left, width, _, top, _, height = placed.GetGeoTransform()
        bounds = (left, top + height * placed.RasterYSize, left + width * placed.RasterXSize, top)
        square = False
    if cell > 0:
        return working, covering(bounds, cell / working.metres)
    return working, grid if square else covering(bounds, min(width, -height))


def _open(layer):
    if layer.providerType() != "gdal":
        raise InputError(
            tr("The raster {} comes from a service ({}); save it as a file first.").format(
                layer.name(), layer.providerType()
            )
        )
    dataset = _tried(gdal.Open, layer.source())
    if dataset is None:
        raise InputError(tr("The raster {} cannot be opened.").format(layer.name()))
    return dataset


def align(layer, grid, crs, band=1):
    """A raster layer as read on a grid; nothing is read yet.

    A layer that lies on the grid already is read as it is. Any other is warped by the raster
    library while it is read: by area-weighted averages where its cells are much finer than the
    grid's, bilinearly otherwise.

    Parameters
    ----------
    layer : QgsRasterLayer
    grid : Grid
    crs : QgsCoordinateReferenceSystem
        Of the grid.
    band : int
        From 1.

    Returns
    -------
    Aligned

    Raises
    ------
    InputError
        The layer comes from a service, cannot be opened, has no CRS, lacks the band or lies
        elsewhere.
    """
    source = _open(layer)
    if not 1 <= band <= source.RasterCount:
        raise InputError(
            tr("The raster {} has {} bands; there is no band {}.").format(
                layer.name(), source.RasterCount, band
            )
        )
    if not layer.crs().isValid():
        raise InputError(
            tr("The raster {} has no CRS; set its CRS, then run again.").format(layer.name())
        )
    unit = source.GetRasterBand(band).GetUnitType() or ""
    source = _one_band(source, layer, band)
    if layer.crs() == crs and _lies_on(source, grid):
        first = source.GetRasterBand(1)
        return Aligned(
            layer.name(),
            unit,
            tr("on the grid already"),
            source,
            first.GetNoDataValue(),
            first.GetMaskFlags() & gdal.GMF_PER_DATASET != 0,
        )
    ratio = grid.cell / _cell_on(source, layer, crs)
    average = ratio > AVERAGE_FROM
    warped = _tried(
        gdal.Warp,
        "",
        source,
        format="VRT",
        srcSRS=layer.crs().toWkt(),
        dstSRS=crs.toWkt(),
        outputBounds=grid.bounds,
        width=grid.columns,
        height=grid.rows,
        resampleAlg="average" if average else "bilinear",
        dstNodata=math.nan,
        outputType=gdal.GDT_Float32,
        # an overview may have been made by dropping pixels
        overviewLevel="NONE",
        multithread=True,
    )
    if warped is None:
        raise InputError(
            tr("The raster {} cannot be brought to the common grid: {}").format(
                layer.name(), gdal.GetLastErrorMsg()
            )
        )
    how = tr("averaged") if average else tr("interpolated bilinearly")
    words = tr("{} from cells {} times as large").format(how, number(1 / ratio, 2))
    return Aligned(layer.name(), unit, words, warped)


def _one_band(source, layer, band):
    """The dataset with just one band, in true values, with the no data set in the project."""
    first = source.GetRasterBand(band)
    options = {}
    if source.RasterCount > 1:
        options["bandList"] = [band]
    if first.GetScale() not in (None, 1.0) or first.GetOffset() not in (None, 0.0):
        options.update(unscale=True, outputType=gdal.GDT_Float32)
    ranges = layer.dataProvider().userNoDataValues(band)
    if ranges:
        single = len(ranges) == 1 and ranges[0].min() == ranges[0].max()
        if not single or first.GetNoDataValue() is not None or "outputType" in options:
            raise InputError(
                tr(
                    "The raster {} has further no-data values set in the project; save it as a "
                    "new file first."
                ).format(layer.name())
            )
        options["noData"] = ranges[0].min()
    if not options:
        return source
    plain = _tried(gdal.Translate, "", source, format="VRT", **options)
    if plain is None:
        raise InputError(tr("The raster {} cannot be read.").format(layer.name()))
    return plain


def _lies_on(dataset, grid):
    left, width, turn, top, other_turn, height = dataset.GetGeoTransform()
    if turn or other_turn or (dataset.RasterYSize, dataset.RasterXSize) != grid.shape:
        return False
    far = np.abs([left - grid.left, top - grid.top]).max() / grid.cell
    sizes = np.abs([width - grid.cell, -height - grid.cell]).max() / grid.cell
    return far < 1e-3 and sizes * max(grid.shape) < 1e-3


def _cell_on(source, layer, crs):
    """Cell size of a raster in another CRS, by the raster library's own proposal."""
    placed = _tried(gdal.AutoCreateWarpedVRT, source, layer.crs().toWkt(), crs.toWkt())
    if placed is None:
        raise InputError(
            tr("The raster {} cannot be placed in the common CRS; it may lie elsewhere.").format(
                layer.name()
            )
        )
    transform = placed.GetGeoTransform()
    return math.sqrt(abs(transform[1] * transform[5]))


def check_overlap(layers, grid, crs, transform_context):
    """Refuse layers that lie beside the common grid.

    Parameters
    ----------
    layers : sequence of QgsRasterLayer
    grid : Grid
    crs : QgsCoordinateReferenceSystem
    transform_context : QgsCoordinateTransformContext
    """
    left, bottom, right, top = grid.bounds
    common = QgsRectangle(left, bottom, right, top)
    beside = []
    for layer in layers:
        try:
            extent = QgsCoordinateTransform(
                layer.crs(), crs, transform_context
            ).transformBoundingBox(layer.extent())
        except QgsCsException:
            continue
        if not extent.intersects(common):
            beside.append(layer.name())
    if beside:
        raise InputError(
            tr(
                "{} and the grid of the first layer have no ground in common; choose layers of "
                "one area, or another grid."
            ).format(listed(beside))
        )
