"""Small rasters for tests, written with the raster library."""

import numpy as np
from osgeo import gdal, osr


def save_raster(
    path,
    values,
    left,
    top,
    cell,
    crs=3035,
    no_data=None,
    kind=gdal.GDT_Float32,
    unit="",
    options=(),
):
    """Write bands to a GeoTIFF and return its path.

    Parameters
    ----------
    path : pathlib.Path
    values : (rows, columns) or (bands, rows, columns) array
    left, top, cell : float
        Outer corner and cell size.
    crs : int
        EPSG code.
    """
    bands = np.atleast_3d(np.asarray(values).T).T
    count, rows, columns = bands.shape
    dataset = gdal.GetDriverByName("GTiff").Create(
        str(path), columns, rows, count, kind, options=list(options)
    )
    dataset.SetGeoTransform((left, cell, 0, top, 0, -cell))
    reference = osr.SpatialReference()
    reference.ImportFromEPSG(crs)
    dataset.SetProjection(reference.ExportToWkt())
    for position, band in enumerate(bands, start=1):
        target = dataset.GetRasterBand(position)
        if no_data is not None:
            target.SetNoDataValue(no_data)
            band = np.where(np.isnan(band), no_data, band)
        target.SetUnitType(unit)
        target.WriteArray(band)
    del target, dataset
    # a path, not a layer: a raster layer that outlives the host in a traceback crashes at exit
    return str(path)


def read_bands(path):
    """All bands of a raster, (bands, rows, columns)."""
    dataset = gdal.Open(path)
    values = dataset.ReadAsArray()
    return values.reshape(dataset.RasterCount, dataset.RasterYSize, dataset.RasterXSize)
