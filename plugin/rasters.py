"""Arrays to rasters and back; warping, tiling and formats are the raster library's."""

import os
import uuid
from dataclasses import dataclass

import numpy as np
from osgeo import gdal

from ..algorithms.numeric.errors import InputError
from ..algorithms.numeric.grid import Grid
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


def _options(driver, columns, rows):
    if driver.GetDescription() != "GTiff":
        return []
    options = ["COMPRESS=DEFLATE", "BIGTIFF=IF_SAFER", "NUM_THREADS=2"]
    if rows >= 256 and columns >= 256:
        options.append("TILED=YES")
    return options


def partial_path(path):
    """A name beside the final one that a half-written file carries."""
    folder, name = os.path.split(path)
    stem, ending = os.path.splitext(name)
    return os.path.join(folder, f".{stem}-{uuid.uuid4().hex[:8]}{ending}")


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
    driver = _driver_for(path)
    waiting = partial_path(path)
    try:
        _write_bands(driver, waiting, grid, crs, bands, progress, no_data, kind)
        os.replace(waiting, path)
    except (RuntimeError, OSError) as error:
        raise InputError(
            tr("The raster {} cannot be written: {}").format(os.path.basename(path), error)
        ) from error
    finally:
        for left_over in (waiting, waiting + ".aux.xml"):
            if os.path.exists(left_over):
                os.remove(left_over)


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


def _write_bands(driver, path, grid, crs, bands, progress, no_data, kind):
    options = _options(driver, grid.columns, grid.rows)
    dataset = driver.Create(path, grid.columns, grid.rows, len(bands), kind, options=options)
    if dataset is None:
        raise OSError(gdal.GetLastErrorMsg() or tr("the format refused"))
    dataset.SetGeoTransform((grid.left, grid.cell, 0, grid.top, 0, -grid.cell))
    dataset.SetProjection(crs.toWkt())
    starts = range(0, grid.rows, ROWS_AT_ONCE)
    for position, band in enumerate(bands, start=1):
        target = dataset.GetRasterBand(position)
        target.SetDescription(band.name)
        if band.unit:
            target.SetUnitType(band.unit)
        if no_data is not None:
            target.SetNoDataValue(no_data)
        for start in starts:
            values = np.asarray(band.values[start : start + ROWS_AT_ONCE])
            if no_data is not None and values.dtype.kind == "f":
                values = np.where(np.isnan(values), no_data, values)
            if target.WriteArray(values, 0, start) != 0:
                raise OSError(gdal.GetLastErrorMsg())
            progress((position - 1 + (start + len(values)) / grid.rows) / len(bands))
    if dataset.FlushCache() not in (None, 0):
        raise OSError(gdal.GetLastErrorMsg())


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
