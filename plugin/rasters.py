"""Arrays to rasters and back; warping, tiling and formats are the raster library's."""

import os
import traceback
from dataclasses import dataclass

import numpy as np
import shapely
from osgeo import gdal, ogr, osr

from ..algorithms.numeric.errors import InputError
from ..algorithms.numeric.grid import Grid
from ..algorithms.numeric.progress import part
from .files import whole_file
from .text import tr

NO_DATA = -9999.0
ROWS_AT_ONCE = 256


@dataclass(frozen=True)
class Band:
    """One band to write.

    Attributes
    ----------
    name : str
        What a reader sees as the band's name.
    values : (rows, columns) array
        NaN becomes no data.
    unit : str
        Shown by the host; empty for a share or a code.
    """

    name: str
    values: np.ndarray
    unit: str = ""


# of a picture in GeoTIFF: what its bands are, and quick compression
PICTURE_OPTIONS = ("PHOTOMETRIC=RGB", "ALPHA=YES", "PREDICTOR=2", "ZLEVEL=2")


def write_raster(path, grid, crs, bands, progress, no_data=NO_DATA, kind=gdal.GDT_Float32):
    """Write bands to a raster file that appears only when it is whole.

    Parameters
    ----------
    path : str
        Where to; the ending chooses the format, GeoTIFF by default.
    grid : Grid
    crs : QgsCoordinateReferenceSystem
    bands : sequence of Band
    progress : callable
    no_data : float or None
    kind : int
        Data type of the raster library.

    Raises
    ------
    InputError
        The file cannot be written.
    """

    def fill(dataset):
        for position, band in enumerate(bands):
            told = part(progress, position / len(bands), (position + 1) / len(bands))
            _fill_band(dataset.GetRasterBand(position + 1), band, no_data, told)

    _write_whole(path, grid, crs, len(bands), kind, (), fill)


def write_picture(path, grid, crs, windows, levels_of, progress):
    """Write a picture of red, green, blue and opacity, window by window.

    Parameters
    ----------
    path : str
        Where to; appears only when it is whole.
    grid : Grid
    crs : QgsCoordinateReferenceSystem
    windows : sequence of plugin.alignment.Window
    levels_of : callable
        Takes a window and returns its (4, rows, columns) uint8 levels.
    progress : callable

    Raises
    ------
    InputError
        The file cannot be written.
    """

    def fill(dataset):
        _name_colours(dataset)
        for position, window in enumerate(windows):
            levels = np.ascontiguousarray(levels_of(window))
            place = (window.column, window.row, window.columns, window.rows)
            if dataset.WriteRaster(*place, levels.tobytes()) != 0:
                raise OSError(gdal.GetLastErrorMsg())
            progress((position + 1) / len(windows))

    _write_whole(path, grid, crs, 4, gdal.GDT_Byte, PICTURE_OPTIONS, fill)


def _write_whole(path, grid, crs, count, kind, options, fill):
    """Create a raster beside its place, have it filled, and put it there when it is whole."""
    driver = _driver_for(path)
    try:
        with whole_file(path, (".aux.xml",)) as waiting:
            dataset = _created(driver, waiting, grid, crs, count, kind, options)
            try:
                fill(dataset)
                if dataset.FlushCache() not in (None, 0):
                    raise OSError(gdal.GetLastErrorMsg())
            except BaseException as error:
                # the library closes a file with its last reference, and frames of the error hold
                # some
                traceback.clear_frames(error.__traceback__)
                raise
            finally:
                # not every system lets an open file be moved or removed
                del dataset
    except (RuntimeError, OSError) as error:
        raise InputError(
            tr("The raster {} cannot be written: {}").format(
                os.path.basename(path), getattr(error, "strerror", None) or error
            )
        ) from error


def _created(driver, path, grid, crs, count, kind, options):
    """A new dataset on a grid; the options are those of GeoTIFF."""
    if driver.GetDescription() != "GTiff":
        options = []
    else:
        options = ["COMPRESS=DEFLATE", "BIGTIFF=IF_SAFER", "NUM_THREADS=2", *options]
        if grid.rows >= 256 and grid.columns >= 256:
            options.append("TILED=YES")
    dataset = driver.Create(path, grid.columns, grid.rows, count, kind, options=options)
    if dataset is None:
        raise OSError(gdal.GetLastErrorMsg() or tr("the format refused"))
    dataset.SetGeoTransform(_transform_of(grid))
    dataset.SetProjection(crs.toWkt())
    return dataset


def _transform_of(grid):
    return grid.left, grid.cell, 0, grid.top, 0, -grid.cell


def _fill_band(target, band, no_data, progress):
    """Name a band and write its values, some rows at a time."""
    target.SetDescription(band.name)
    if band.unit:
        target.SetUnitType(band.unit)
    if no_data is not None:
        target.SetNoDataValue(no_data)
    for start in range(0, len(band.values), ROWS_AT_ONCE):
        values = np.asarray(band.values[start : start + ROWS_AT_ONCE])
        if no_data is not None and values.dtype.kind == "f":
            values = np.where(np.isnan(values), no_data, values)
        if target.WriteArray(values, 0, start) != 0:
            raise OSError(gdal.GetLastErrorMsg())
        progress((start + len(values)) / len(band.values))


def _name_colours(dataset):
    parts = (
        (tr("red"), gdal.GCI_RedBand),
        (tr("green"), gdal.GCI_GreenBand),
        (tr("blue"), gdal.GCI_BlueBand),
        (tr("opacity"), gdal.GCI_AlphaBand),
    )
    for position, (name, colour) in enumerate(parts, start=1):
        band = dataset.GetRasterBand(position)
        band.SetDescription(name)
        band.SetColorInterpretation(colour)


def label_polygons(labels, grid):
    """Outlines of labelled pixels.

    Parameters
    ----------
    labels : (rows, columns) int array
        0: no polygon; pixels of one label may lie apart.
    grid : Grid

    Returns
    -------
    (labels.max(),) object array of shapely multipolygons
        In the order of the labels 1, 2, ...; along pixel edges.
    """
    rows, columns = labels.shape
    raster = gdal.GetDriverByName("MEM").Create("", columns, rows, 1, gdal.GDT_Int32)
    raster.SetGeoTransform(_transform_of(grid))
    band = raster.GetRasterBand(1)
    band.WriteArray(labels.astype(np.int32))
    source = _features_in_memory()
    table = source.CreateLayer("labels")
    table.CreateField(ogr.FieldDefn("label", ogr.OFTInteger))
    gdal.Polygonize(band, band, table, 0)
    parts = [[] for _ in range(int(labels.max(initial=0)))]
    for feature in table:
        wkb = bytes(feature.GetGeometryRef().ExportToWkb())
        parts[feature.GetField(0) - 1].append(shapely.from_wkb(wkb))
    outlines = np.empty(len(parts), object)
    outlines[:] = [shapely.multipolygons(found) for found in parts]
    return outlines


def _features_in_memory():
    """A vector data set in memory; newer raster libraries keep it with their rasters."""
    return (ogr.GetDriverByName("Memory") or ogr.GetDriverByName("MEM")).CreateDataSource("")


def count_on_pixels(geometry, grid):
    """How many lines or polygons lie on each pixel.

    Parameters
    ----------
    geometry : (n,) array of shapely lines or polygons
    grid : Grid

    Returns
    -------
    (rows, columns) float32 array
        Lines count on every pixel they cross, polygons on those whose centre they hold; a
        feature counts once on a pixel.
    """
    raster = gdal.GetDriverByName("MEM").Create("", grid.columns, grid.rows, 1, gdal.GDT_Float32)
    raster.SetGeoTransform(_transform_of(grid))
    lines = np.isin(shapely.get_type_id(geometry), (1, 2, 5))
    plane = osr.SpatialReference()
    plane.SetLocalCS("plane")
    raster.SetProjection(plane.ExportToWkt())
    for chosen, options in ((lines, ["ALL_TOUCHED=TRUE"]), (~lines, [])):
        if not chosen.any():
            continue
        source = _features_in_memory()
        table = source.CreateLayer("features", plane)
        for wkb in shapely.to_wkb(geometry[chosen]):
            feature = ogr.Feature(table.GetLayerDefn())
            feature.SetGeometry(ogr.CreateGeometryFromWkb(wkb))
            table.CreateFeature(feature)
        gdal.RasterizeLayer(
            raster, [1], table, burn_values=[1], options=["MERGE_ALG=ADD", *options]
        )
    return raster.ReadAsArray()


def _driver_for(path):
    ending = os.path.splitext(path)[1].lower().lstrip(".")
    for index in range(gdal.GetDriverCount()):
        driver = gdal.GetDriver(index)
        endings = (driver.GetMetadataItem("DMD_EXTENSIONS") or "").split()
        if ending in endings and driver.GetMetadataItem("DCAP_CREATE") == "YES":
            return driver
    if ending in ("", "tif", "tiff"):
        return gdal.GetDriverByName("GTiff")
    raise InputError(
        tr("Rasters of the kind .{} cannot be written; choose a name that ends in .tif.").format(
            ending
        )
    )


def read_raster(source, band=1):
    """One band of a raster as an array and its grid.

    Parameters
    ----------
    source : str
        What the raster library opens.
    band : int
        From 1.

    Returns
    -------
    values : (rows, columns) float array
        NaN for no data.
    grid : Grid
    unit : str
        Empty where none is noted.

    Raises
    ------
    InputError
        The raster cannot be read, is turned, or its pixels are not square.
    """
    dataset = gdal.Open(source)
    if dataset is None:
        raise InputError(tr("The raster {} cannot be read.").format(os.path.basename(source)))
    left, width, turn, top, other_turn, height = dataset.GetGeoTransform()
    if turn or other_turn or not np.isclose(width, -height, rtol=1e-6):
        raise InputError(
            tr("The raster needs square, north-up pixels; found {} x {}. Warp it first.").format(
                width, -height
            )
        )
    layer = dataset.GetRasterBand(band)
    values = layer.ReadAsArray().astype(float)
    no_data = layer.GetNoDataValue()
    if no_data is not None:
        values[values == np.asarray(no_data, layer.ReadAsArray(0, 0, 1, 1).dtype)] = np.nan
    grid = Grid(left, top, width, dataset.RasterYSize, dataset.RasterXSize)
    return values, grid, layer.GetUnitType()
