"""Arrays to vector layers: features are written only when everything is computed."""

import os
import shutil
import tempfile
from dataclasses import dataclass

import numpy as np
import shapely
from qgis.core import (
    QgsFeature,
    QgsFeatureSink,
    QgsField,
    QgsFields,
    QgsGeometry,
    QgsProcessingContext,
    QgsProcessingOutputLayerDefinition,
    QgsProcessingUtils,
    QgsProperty,
    QgsWkbTypes,
)

from .files import put_in_place
from .host import BIG_INTEGER, REAL, TEXT

FIELD_TYPES = {"int": BIG_INTEGER, "float": REAL, "text": TEXT}
GEOMETRIES = {
    "point": QgsWkbTypes.Type.Point,
    "line": QgsWkbTypes.Type.LineString,
    "polygon": QgsWkbTypes.Type.MultiPolygon,
    "none": QgsWkbTypes.Type.NoGeometry,
}
CHUNK = 20_000
# names under which files number their rows themselves: a field of that name cannot be handed on
ROW_NUMBERS = frozenset({"fid", "ogc_fid"})
# formats that keep a layer in one file
SINGLE_FILES = (".gpkg", ".geojson", ".fgb", ".csv")


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


def kept_columns(values, columns, ending):
    """The fields of an input, to stand beside a tool's own.

    Parameters
    ----------
    values : dict of str to (n,) array
        As `layers.read` gives them.
    columns : sequence of Column
        The tool's own, whose names they must not take; names differ by more than their case.
    ending : str
        Put behind a name that is taken, as often as it takes.

    Returns
    -------
    list of Column
        In the order of ``values``.
    """
    own = {column.name.lower() for column in columns}
    taken = own | {name.lower() for name in values}
    kept = []
    for name, column in values.items():
        free = name
        if name.lower() in own:
            while free.lower() in taken:
                free += ending
            taken.add(free.lower())
        kept.append(Column(free, kind_of(column), column))
    return kept


def kind_of(values):
    """The kind of field that holds an array as `layers.read` gives it: int, float or text."""
    if values.dtype.kind == "f":
        return "float"
    if values.dtype.kind in "iu":
        return "int"
    known = [value for value in values if value is not None]
    whole = known and all(isinstance(value, (int, np.integer)) for value in known)
    return "int" if whole else "text"


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


def asked_path(value, context):
    """The path or other destination that the value of a sink parameter asks for, as text."""
    if isinstance(value, QgsProcessingOutputLayerDefinition):
        value = value.sink.valueAsString(context.expressionContext())[0]
    return value if isinstance(value, str) else ""


class FileAside:
    """A vector file that is written in a folder of its own and appears when it is whole.

    Leaving the ``with`` block without `finish` leaves nothing behind, and spares a file that
    already carried the name.

    Parameters
    ----------
    path : str
        Where the file will be.
    wanted : QgsProcessingOutputLayerDefinition
        As the host was asked for it.
    """

    def __init__(self, path, wanted):
        self.path = path
        self._wanted = wanted
        self._folder = self._waiting = None

    @classmethod
    def asked_for(cls, value, context):
        """The file that the value of a sink parameter asks for; None for any other kind of sink."""
        if isinstance(value, str):
            value = QgsProcessingOutputLayerDefinition(value)
        if not isinstance(value, QgsProcessingOutputLayerDefinition) or value.useRemapping():
            return None
        path, known = value.sink.valueAsString(context.expressionContext())
        single = known and os.path.splitext(path)[1].lower() in SINGLE_FILES
        # what is no path, such as a table of a database, has no folder that is there
        return cls(path, value) if single and os.path.isdir(os.path.dirname(path)) else None

    def __enter__(self):
        folder, name = os.path.split(self.path)
        self._folder = tempfile.mkdtemp(prefix=".steadfield-", dir=folder)
        self._waiting = os.path.join(self._folder, name)
        return self

    def __exit__(self, *trouble):
        shutil.rmtree(self._folder, ignore_errors=True)

    def request(self):
        """What to ask the host for instead: the same file in the folder aside, not loaded."""
        aside = QgsProcessingOutputLayerDefinition(self._wanted)
        aside.sink = QgsProperty.fromValue(self._waiting)
        aside.destinationProject = None
        return aside

    def finish(self, definition, context):
        """Move the file to its place and let the host load it, as the sink would have done.

        Raises
        ------
        OSError
            The place cannot be taken.
        """
        put_in_place(self._waiting, self.path)
        project = self._wanted.destinationProject
        if project is not None:
            title = self._wanted.destinationName or definition.description()
            hint = QgsProcessingUtils.LayerHint.Vector
            details = QgsProcessingContext.LayerDetails(title, project, definition.name(), hint)
            context.addLayerToLoadOnCompletion(self.path, details)
