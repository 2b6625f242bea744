"""Small layers as they come in practice: good ones, and the same data in every bad state."""

import numpy as np
import shapely
from osgeo import gdal, ogr
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsCoordinateTransform,
    QgsFeature,
    QgsField,
    QgsGeometry,
    QgsProject,
    QgsVectorFileWriter,
    QgsVectorLayer,
)
from steadfield.plugin.outputs import FIELD_TYPES

PLACE = "+proj=laea +lat_0=52 +lon_0=10 +datum=WGS84"
# the centre in whole degrees that working_crs chooses for these data is that of PLANE
PLANE = f"{PLACE} +units=m +no_defs"
FEET = f"{PLACE} +units=ft +no_defs"
# shifted by a whole number of every cell size used, so that the cells cover the same ground
SHIFT = 60_000_000
FAR = f"{PLACE} +x_0={SHIFT} +y_0={SHIFT} +units=m +no_defs"
DEGREES = "EPSG:4326"
FEET_IN_METRE = 1 / 0.3048

RECORDS, BAD_WEIGHTS, LEFT_OUT = 200, 10, 10
STRANGE_NAME = "Stürze – Überblick 数 a"
STRANGE_FIELD = "Größe in %"


class Table:
    """Features before they become a layer: shapely geometries, or None, and columns."""

    def __init__(self, geometry, columns):
        self.geometry = np.empty(len(geometry), object)
        self.geometry[:] = geometry
        self.columns = {name: list(values) for name, values in columns.items()}

    def rows(self, chosen):
        """A table of some of the rows."""
        columns = {name: [values[row] for row in chosen] for name, values in self.columns.items()}
        return Table(self.geometry[np.asarray(chosen, int)], columns)

    def with_geometry(self, geometry):
        """A table of other geometries and the same columns."""
        return Table(geometry, self.columns)

    def with_column(self, name, values):
        """A table with a column set."""
        return Table(self.geometry, {**self.columns, name: values})

    def with_extra(self, geometry):
        """A table with further features among the others; their values are those of the first."""
        extra = [0] * len(geometry)
        first = len(self.geometry) // 3
        order = [*range(first), *extra, *range(first, len(self.geometry))]
        table = self.rows(order)
        table.geometry[first : first + len(geometry)] = geometry
        return table


def points(count=RECORDS, seed=11, reach=3000.0):
    """Two clusters over an even pattern; ten pairs of neighbouring rows have equal values."""
    generator = np.random.default_rng(seed)
    even = generator.uniform(-reach, reach, (count // 2, 2))
    dense = generator.normal(0, reach / 8, (count // 4, 2)) + reach / 4
    other = generator.normal(0, reach / 6, (count - len(even) - len(dense), 2)) - reach / 3
    places = np.concatenate([even, dense, other])
    columns = {
        "weight": generator.integers(1, 5, count),
        "part": generator.integers(0, 2, count),
        "household": np.arange(count) // 2,
        "month": generator.integers(1, 13, count),
        "kind": generator.integers(1, 3, count),
        "total": np.full(count, 50),
    }
    for values in columns.values():
        values[1:20:2] = values[0:20:2]
    columns = {name: values.tolist() for name, values in columns.items()}
    columns["kind"] = ["north" if value == 1 else "south" for value in columns["kind"]]
    return Table(shapely.points(places), columns)


def units(across=8, side=700.0, seed=12):
    """Base units that tile a square, with counts, totals and official zones."""
    generator = np.random.default_rng(seed)
    edges = (np.arange(across) - across / 2) * side
    west, south = (axis.ravel() for axis in np.meshgrid(edges, edges))
    count = len(west)
    total = generator.integers(80, 200, count)
    columns = {
        "total": total.tolist(),
        "cases": generator.binomial(total, 0.2).tolist(),
        "others": generator.binomial(total, 0.3).tolist(),
        "ward": [int(x > 0) + 2 * int(y > 0) for x, y in zip(west, south)],
    }
    return Table(shapely.box(west, south, west + side, south + side), columns)


def zones(fine):
    """The official zones of the units, with exact totals."""
    ward = np.array(fine.columns["ward"])
    total = np.array(fine.columns["total"])
    keys = np.unique(ward)
    geometry = [shapely.union_all(fine.geometry[ward == key]) for key in keys]
    return Table(geometry, {"total": [int(total[ward == key].sum()) for key in keys]})


def moved(table, crs):
    """A table with its coordinates in another CRS than PLANE."""
    if crs == PLANE:
        return table
    if crs == FEET:
        return table.with_geometry(shapely.transform(table.geometry, lambda at: at * FEET_IN_METRE))
    if crs == FAR:
        return table.with_geometry(shapely.transform(table.geometry, lambda at: at + SHIFT))
    move = QgsCoordinateTransform(reference(PLANE), reference(crs), QgsProject.instance())

    def transform(coordinates):
        return np.array([move.transform(x, y) for x, y in coordinates]).reshape(-1, 2)

    return table.with_geometry(shapely.transform(table.geometry, transform))


def reference(crs):
    """A CRS from a code, a definition or nothing."""
    if crs is None:
        return QgsCoordinateReferenceSystem()
    if crs.startswith("+"):
        return QgsCoordinateReferenceSystem.fromProj(crs)
    return QgsCoordinateReferenceSystem(crs)


def layer_of(table, kind, crs=PLANE, raised=False, name="made for a test"):
    """A memory layer; ``raised`` gives every vertex a height and a measure."""
    layer = QgsVectorLayer(f"{kind}{'ZM' if raised else ''}", name, "memory")
    layer.setCrs(reference(crs))
    fields = [QgsField(key, _type(values)) for key, values in table.columns.items()]
    layer.dataProvider().addAttributes(fields)
    layer.updateFields()
    features = []
    for row, shape in enumerate(table.geometry):
        feature = QgsFeature(layer.fields())
        if shape is not None:
            geometry = QgsGeometry()
            geometry.fromWkb(shapely.to_wkb(shape))
            if raised:
                geometry.get().addZValue(100.0 + row)
                geometry.get().addMValue(7.0 * row)
            feature.setGeometry(geometry)
        feature.setAttributes([values[row] for values in table.columns.values()])
        features.append(feature)
    assert layer.dataProvider().addFeatures(features)[0]
    layer.updateExtents()
    return layer


def _type(values):
    known = [value for value in values if value is not None]
    if any(isinstance(value, str) for value in known):
        return FIELD_TYPES["text"]
    whole = all(float(value).is_integer() for value in known)
    return FIELD_TYPES["int" if whole else "float"]


def saved(layer, folder, name):
    """Write a layer to a GeoPackage; returns its path, which the host opens by itself."""
    options = QgsVectorFileWriter.SaveVectorOptions()
    options.driverName = "GPKG"
    options.layerName = name
    path = str(folder / f"{name}.gpkg")
    context = QgsProject.instance().transformContext()
    refused = QgsVectorFileWriter.writeAsVectorFormatV3(layer, path, context, options)
    assert refused[0] == QgsVectorFileWriter.WriterError.NoError, refused
    return path


def surfaces(side=40, seed=13):
    """Three density surfaces with hills that lie partly on one another, (3, side, side)."""
    generator = np.random.default_rng(seed)
    at = (np.arange(side) + 0.5) / side
    x, y = np.meshgrid(at, at)
    found = []
    for _ in range(3):
        centre = generator.uniform(0.35, 0.65, 2)
        found.append(100 * np.exp(-((x - centre[0]) ** 2 + (y - centre[1]) ** 2) / 0.03) + 1)
    return np.array(found)


def raster(path, values, crs=PLANE, cell=150.0, no_data=None, corner=(-3000.0, 3000.0)):
    """Write one band; lengths in metres are turned into the unit of the CRS."""
    rows, columns = values.shape
    dataset = gdal.GetDriverByName("GTiff").Create(
        str(path), columns, rows, 1, gdal.GDT_Float32, options=["SPARSE_OK=TRUE", "BIGTIFF=YES"]
    )
    left, top = corner
    if crs == FEET:
        left, top, cell = left * FEET_IN_METRE, top * FEET_IN_METRE, cell * FEET_IN_METRE
    elif crs == FAR:
        left, top = left + SHIFT, top + SHIFT
    elif crs == DEGREES:
        left, top, cell = 9.96, 52.03, 0.0015
    dataset.SetGeoTransform((left, cell, 0, top, 0, -cell))
    if crs is not None:
        dataset.SetProjection(reference(crs).toWkt())
    if no_data is not None:
        dataset.GetRasterBand(1).SetNoDataValue(no_data)
    dataset.GetRasterBand(1).WriteArray(values)
    dataset.GetRasterBand(1).SetUnitType("per km²")
    dataset = None
    return str(path)


def empty_raster(path, rows, columns, cell):
    """A raster of so many pixels that takes no room in the file."""
    dataset = gdal.GetDriverByName("GTiff").Create(
        str(path), columns, rows, 1, gdal.GDT_Float32, options=["SPARSE_OK=TRUE", "BIGTIFF=YES"]
    )
    dataset.SetGeoTransform((-cell * columns / 2, cell, 0, cell * rows / 2, 0, -cell))
    dataset.SetProjection(reference(PLANE).toWkt())
    dataset = None
    return str(path)


def numbers_of(path):
    """What a vector output holds that does not hang on the unit of its coordinates.

    Returns
    -------
    int, dict of str to list
        Number of features, and the values of each field in order.
    """
    source = ogr.Open(path)
    table = source.GetLayer(0)
    definition = table.GetLayerDefn()
    names = [definition.GetFieldDefn(i).GetName() for i in range(definition.GetFieldCount())]
    rows = [[feature.GetField(name) for name in names] for feature in table]
    return len(rows), {name: [row[i] for row in rows] for i, name in enumerate(names)}
