"""Vector layers to arrays and back: with rasters.py the only place that reads or writes layers."""

from dataclasses import dataclass, field

import numpy as np
import shapely
from osgeo import gdal
from qgis.core import (
    QgsFeatureRequest,
    QgsGeometry,
    QgsProviderRegistry,
    QgsRectangle,
    QgsWkbTypes,
)
from qgis.PyQt.QtCore import Qt

from ..algorithms.numeric.errors import InputError
from .host import BIG_INTEGER, INTEGER, REAL, SKIP_VALIDITY_CHECKS, TEXT, is_null
from .reference_system import reproject
from .text import tr

# type ids of shapely: single and multiple
POINT_KINDS, POLYGON_KINDS = (0, 4), (3, 6)

# well-known binary of a point without height, least byte first
PLAIN_POINT = np.dtype([("order", "u1"), ("kind", "<u4"), ("x", "<f8"), ("y", "<f8")])


@dataclass(frozen=True)
class Records:
    """Point records in the working CRS.

    Attributes
    ----------
    x, y : (n,) float arrays
        Units of the working CRS.
    weight : (n,) float array
        1 where no weight field was chosen; never null or negative.
    values : dict of str to (n,) array
        The fields that were asked for; floats carry NaN and object arrays None for null.
    skipped : dict of str to int
        How many records were left out, by reason in words.
    """

    x: np.ndarray
    y: np.ndarray
    weight: np.ndarray
    values: dict = field(default_factory=dict)
    skipped: dict = field(default_factory=dict)

    def __len__(self):
        return len(self.x)


@dataclass(frozen=True)
class Polygons:
    """Polygon features in the working CRS.

    Attributes
    ----------
    geometry : (n,) object array of shapely geometries
        Polygons or multipolygons, as drawn: not yet repaired.
    values : dict of str to (n,) array
    ids : (n,) int64 array
        Feature ids of the source.
    skipped : dict of str to int
    """

    geometry: np.ndarray
    values: dict = field(default_factory=dict)
    ids: np.ndarray = None
    skipped: dict = field(default_factory=dict)

    def __len__(self):
        return len(self.geometry)


def read_table(layer, source, fields):
    """Geometries and fields of a source, by the fastest way that gives the same arrays.

    Parameters
    ----------
    layer : QgsVectorLayer or None
        The layer behind the source when nothing but its own filter narrows it; None otherwise.
    source : QgsProcessingFeatureSource
    fields : sequence of str

    Returns
    -------
    geometry : (n,) object array of shapely geometries, None where there is none
    values : dict of str to (n,) array
    ids : (n,) int64 array
    """
    wkb, values, ids = _read_binary(layer, source, fields)
    return _geometry_of(wkb), values, ids


def _read_binary(layer, source, fields):
    """As `read_table`, with geometry in well-known binary."""
    if layer is not None and _plain_file_layer(layer, fields):
        return _read_stream(layer, fields)
    return _read_features(source, fields)


def _geometry_of(wkb):
    return shapely.from_wkb(wkb, on_invalid="ignore") if len(wkb) else np.empty(0, object)


def _places_of(wkb):
    """Coordinates in a column of points, and the row of each; points without height go fastest."""
    filled = np.flatnonzero(np.not_equal(wkb, None))
    stored = wkb[filled].tolist()
    if set(map(len, stored)) == {PLAIN_POINT.itemsize}:
        points = np.frombuffer(b"".join(stored), PLAIN_POINT)
        if (points["order"] == 1).all() and (points["kind"] == 1).all():
            places = np.column_stack([points["x"], points["y"]])
            # a point of two not-a-numbers is how the format writes an empty one
            placed = ~np.isnan(places).all(axis=1)
            return places[placed], filled[placed]
    geometry = _geometry_of(wkb)
    check_kind(geometry, POINT_KINDS, tr("points"))
    return shapely.get_coordinates(geometry, return_index=True)


def _plain_file_layer(layer, fields):
    """Whether the raster library's own reader sees exactly what the host sees."""
    if layer.providerType() != "ogr" or not hasattr(gdal, "OpenEx"):
        return False
    if (
        layer.isEditable()
        or QgsWkbTypes.hasM(layer.wkbType())
        or QgsWkbTypes.isCurvedType(layer.wkbType())
    ):
        return False
    if layer.subsetString().lstrip().lower().startswith("select"):
        return False
    known = layer.dataProvider().fields()
    for name in fields:
        index = known.indexFromName(name)
        if index < 0 or known.at(index).type() not in (INTEGER, BIG_INTEGER, REAL, TEXT):
            return False
    encoding = (layer.dataProvider().encoding() or "UTF-8").upper()
    return encoding in ("UTF-8", "SYSTEM") or not fields


def _read_stream(layer, fields):
    """Read a plain file layer through the Arrow stream of the raster library."""
    parts = QgsProviderRegistry.instance().decodeUri("ogr", layer.source())
    dataset = gdal.OpenEx(
        parts["path"], gdal.OF_VECTOR, open_options=parts.get("openOptions") or []
    )
    if dataset is None:
        raise InputError(tr("The layer {} cannot be opened.").format(layer.name()))
    by_name = parts.get("layerName")
    table = (
        dataset.GetLayerByName(by_name) if by_name else dataset.GetLayer(parts.get("layerId") or 0)
    )
    if layer.subsetString():
        table.SetAttributeFilter(layer.subsetString())
    definition = table.GetLayerDefn()
    names = [definition.GetFieldDefn(i).GetName() for i in range(definition.GetFieldCount())]
    table.SetIgnoredFields([name for name in names if name not in fields])
    geometry_name = table.GetGeometryColumn() or "wkb_geometry"
    # the host shows the column of ids as a field of the layer
    identifier = table.GetFIDColumn() or "OGC_FID"
    wkb, ids, columns = [], [], {name: [] for name in fields}
    for batch in table.GetArrowStreamAsNumPy(options=["INCLUDE_FID=YES"]):
        ids.append(np.asarray(batch[identifier], np.int64))
        wkb.append(_filled(batch[geometry_name], None))
        for name in fields:
            columns[name].append(_as_stream_values(batch[name]))
    values = {name: _joined(parts) for name, parts in columns.items()}
    return _joined(wkb), values, _joined(ids) if ids else np.empty(0, np.int64)


def _filled(array, missing):
    filled = np.asarray(array, object)
    if isinstance(array, np.ma.MaskedArray):
        filled = np.array(array.data, object)
        filled[np.ma.getmaskarray(array)] = missing
    return filled


def _as_stream_values(array):
    """One batch of a column: floats with NaN, whole numbers, or text with None."""
    mask = np.ma.getmaskarray(array)
    data = np.ma.getdata(array)
    if data.dtype.kind == "f":
        return np.where(mask, np.nan, data).astype(float)
    if data.dtype.kind in "iu":
        return _filled(array, None) if mask.any() else data.astype(np.int64)
    text = np.array(
        [value.decode() if isinstance(value, bytes) else value for value in data], object
    )
    text[mask] = None
    return text


def _joined(parts):
    """Batches of a column as one array; object when any batch needs it."""
    if not parts:
        return np.empty(0, object)
    if any(part.dtype == object for part in parts):
        parts = [part.astype(object) for part in parts]
    return np.concatenate(parts)


def _read_features(source, fields):
    """Read any source feature by feature."""
    layer_fields = source.fields()
    indexes = [layer_fields.indexFromName(name) for name in fields]
    for name, index in zip(fields, indexes):
        if index < 0:
            raise InputError(tr("There is no field {} in the layer.").format(name))
    request = QgsFeatureRequest().setSubsetOfAttributes(indexes)
    wkb, ids, rows = [], [], []
    for feature in source.getFeatures(request, SKIP_VALIDITY_CHECKS):
        wkb.append(_plain_wkb(feature.geometry()) if feature.hasGeometry() else None)
        ids.append(feature.id())
        rows.append([feature[index] for index in indexes])
    columns = list(zip(*rows)) if rows else [()] * len(fields)
    values = {
        name: _as_feature_values(column, layer_fields.at(index).type())
        for name, column, index in zip(fields, columns, indexes)
    }
    packed = np.empty(len(wkb), object)
    packed[:] = wkb
    return packed, values, np.array(ids, np.int64)


def _plain_wkb(geometry):
    """Well-known binary without M values or curves."""
    if QgsWkbTypes.hasM(geometry.wkbType()) or QgsWkbTypes.isCurvedType(geometry.wkbType()):
        plain = geometry.constGet().segmentize()
        plain.dropMValue()
        geometry = QgsGeometry(plain)
    return bytes(geometry.asWkb())


def _as_feature_values(column, kind):
    values = np.empty(len(column), object)
    values[:] = [None if is_null(value) else value for value in column]
    missing = np.array([value is None for value in values], bool)
    if kind == REAL:
        values[missing] = np.nan
        return values.astype(float)
    if kind in (INTEGER, BIG_INTEGER):
        return values if missing.any() else values.astype(np.int64)
    if kind != TEXT:
        for row in np.flatnonzero(~missing):
            values[row] = _as_text(values[row])
    return values


def _as_text(value):
    """Dates in ISO form, all else as Python writes it."""
    return value.toString(Qt.DateFormat.ISODate) if hasattr(value, "toString") else str(value)


def as_floats(values):
    """A column as floats, NaN for null and for what is not a number."""
    if values.dtype != object:
        return values.astype(float)
    result = np.full(len(values), np.nan)
    for row, value in enumerate(values):
        try:
            result[row] = np.nan if value is None else float(value)
        except (TypeError, ValueError):
            continue
    return result


def check_kind(geometry, kinds, words):
    """Refuse geometry of another kind than a parameter takes; the host lets any layer through."""
    found = shapely.get_type_id(geometry[~shapely.is_empty(geometry)])
    if not np.isin(found, (-1, *kinds)).all():
        raise InputError(
            tr("{} are expected; the layer holds other geometry. Choose another layer.").format(
                words
            )
        )


def finite_extent(source):
    """Extent of a source without the coordinates that are not finite."""
    extent = source.sourceExtent()
    sides = extent.xMinimum(), extent.yMinimum(), extent.xMaximum(), extent.yMaximum()
    if np.isfinite(sides).all():
        return extent
    wkb, _, _ = _read_features(source, [])
    places = shapely.get_coordinates(shapely.from_wkb(wkb, on_invalid="ignore"))
    places = places[np.isfinite(places).all(axis=1)]
    return QgsRectangle(*places.min(axis=0), *places.max(axis=0)) if len(places) else extent


def read_records(layer, source, target, transform_context, weight=None, fields=()):
    """Point records in the working CRS, with a count of every kind that was left out.

    A feature of several points counts as so many records, each with the feature's values.

    Parameters
    ----------
    layer, source : see `read_table`
    target : QgsCoordinateReferenceSystem
        The working CRS.
    transform_context : QgsCoordinateTransformContext
    weight : str or None
        Field of weights; null and negative weights leave the record out.
    fields : sequence of str
        Further fields to carry.

    Returns
    -------
    Records
    """
    wanted = list(dict.fromkeys([*fields, *([weight] if weight else [])]))
    wkb, values, _ = _read_binary(layer, source, wanted)
    places, feature = _places_of(wkb)
    filled = np.zeros(len(wkb), bool)
    filled[feature] = True
    skipped = {tr("without geometry"): int(len(wkb) - filled.sum())}
    finite = np.isfinite(places).all(axis=1)
    skipped[tr("with coordinates that are not finite")] = int((~finite).sum())
    places, feature = places[finite], feature[finite]
    moved = reproject(places, source.sourceCrs(), target, transform_context)
    placed = np.isfinite(moved).all(axis=1)
    skipped[tr("that cannot be placed in the working CRS")] = int((~placed).sum())
    moved, feature = moved[placed], feature[placed]
    weights = np.ones(len(feature))
    if weight:
        weights = as_floats(values[weight])[feature]
        null, negative = ~np.isfinite(weights), weights < 0
        skipped[tr("with a null weight")] = int(null.sum())
        skipped[tr("with a negative weight")] = int(negative.sum())
        kept = ~(null | negative)
        moved, feature, weights = moved[kept], feature[kept], weights[kept]
    carried = {name: values[name][feature] for name in fields}
    counted = {reason: count for reason, count in skipped.items() if count}
    return Records(moved[:, 0].copy(), moved[:, 1].copy(), weights, carried, counted)


def read_polygons(layer, source, target, transform_context, fields=()):
    """Polygon features in the working CRS, with a count of every kind that was left out.

    Parameters
    ----------
    layer, source, target, transform_context : see `read_records`
    fields : sequence of str

    Returns
    -------
    Polygons
    """
    geometry, values, ids = read_table(layer, source, list(fields))
    check_kind(geometry, POLYGON_KINDS, tr("polygons"))
    geometry = shapely.force_2d(geometry) if len(geometry) else geometry
    filled = ~(shapely.is_missing(geometry) | shapely.is_empty(geometry))
    skipped = {tr("without geometry"): int((~filled).sum())}
    geometry, ids = geometry[filled], ids[filled]
    values = {name: column[filled] for name, column in values.items()}
    coordinates, feature = shapely.get_coordinates(geometry, return_index=True)
    moved = reproject(coordinates, source.sourceCrs(), target, transform_context)
    lost = np.unique(feature[~np.isfinite(moved).all(axis=1)])
    if len(lost):
        skipped[tr("that cannot be placed in the working CRS")] = len(lost)
        moved[~np.isfinite(moved)] = 0.0
    geometry = shapely.set_coordinates(geometry.copy(), moved)
    kept = np.setdiff1d(np.arange(len(geometry)), lost)
    return Polygons(
        geometry[kept],
        {name: column[kept] for name, column in values.items()},
        ids[kept],
        {reason: count for reason, count in skipped.items() if count},
    )


def union_of(polygons):
    """One valid polygon or multipolygon from all polygons of a layer.

    Raises
    ------
    InputError
        There is no polygon, or none with an area.
    """
    union = shapely.union_all(shapely.make_valid(polygons.geometry))
    areas = [part for part in shapely.get_parts(union) if part.area > 0]
    if not areas:
        raise InputError(tr("The boundary holds no polygon with an area; choose another layer."))
    return shapely.union_all(areas)
