"""Arrays to vector layers: features are written only when everything is computed."""

from dataclasses import dataclass

import numpy as np
import shapely
from qgis.core import (
    QgsFeature,
    QgsFeatureSink,
    QgsField,
    QgsFields,
    QgsGeometry,
    QgsWkbTypes,
)

from .host import BIG_INTEGER, REAL, TEXT

FIELD_TYPES = {"int": BIG_INTEGER, "float": REAL, "text": TEXT}
GEOMETRIES = {
    "point": QgsWkbTypes.Type.Point,
    "line": QgsWkbTypes.Type.LineString,
    "polygon": QgsWkbTypes.Type.MultiPolygon,
    "none": QgsWkbTypes.Type.NoGeometry,
}
CHUNK = 20_000


@dataclass(frozen=True)
class Column:
    """A field to write.

    Attributes
    ----------
    name : str
        Plain name, lower case.
    kind : str
        ``int``, ``float`` or ``text``.
    values : (n,) sequence
        NaN or None becomes null.
    alias : str
        What a reader sees, with the unit.
    """

    name: str
    kind: str
    values: object
    alias: str = ""


def fields_of(columns):
    """The host's field list for columns; aliases come with the look, for which no format warns."""
    fields = QgsFields()
    for column in columns:
        fields.append(QgsField(column.name, FIELD_TYPES[column.kind]))
    return fields


def _plain(values, kind):
    """Python values of a column, None for null."""
    array = np.asarray(values)
    if kind == "text":
        return [None if value is None else str(value) for value in array.tolist()]
    convert = int if kind == "int" else float
    return [None if value is None or value != value else convert(value) for value in array.tolist()]


def features_of(fields, columns, geometry):
    """Yield the host's features for columns and shapely geometries.

    Parameters
    ----------
    fields : QgsFields
    columns : sequence of Column
        All of the same length.
    geometry : (n,) array of shapely geometries or None
        None: a table without geometry.
    """
    rows = list(zip(*[_plain(column.values, column.kind) for column in columns]))
    binary = [None] * len(rows) if geometry is None else shapely.to_wkb(geometry)
    for row, wkb in zip(rows, binary):
        feature = QgsFeature(fields)
        feature.setAttributes(list(row))
        if wkb is not None:
            shape = QgsGeometry()
            shape.fromWkb(wkb)
            feature.setGeometry(shape)
        yield feature


def as_multipolygons(geometry):
    """Polygons and multipolygons as multipolygons, so that one layer holds both."""
    geometry = np.atleast_1d(np.asarray(geometry, object))
    parts, owners = shapely.get_parts(geometry, return_index=True)
    whole = np.empty(len(geometry), object)
    whole[~shapely.is_missing(geometry)] = shapely.MultiPolygon()
    if len(parts):
        shapely.multipolygons(parts, indices=owners, out=whole)
    return whole


def fill_sink(sink, fields, columns, geometry, progress):
    """Write features to a sink in chunks.

    Returns
    -------
    bool
        Whether the sink took all of them.
    """
    chunk, written = [], 0
    total = max(len(columns[0].values) if columns else 0, 1)
    for feature in features_of(fields, columns, geometry):
        chunk.append(feature)
        if len(chunk) == CHUNK:
            if not sink.addFeatures(chunk, QgsFeatureSink.Flag.FastInsert):
                return False
            written += len(chunk)
            chunk = []
            progress(written / total)
    return not chunk or sink.addFeatures(chunk, QgsFeatureSink.Flag.FastInsert)
