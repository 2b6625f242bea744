"""Several styled layers in one GeoPackage that appears only when it is whole."""

from dataclasses import dataclass

import numpy as np
import shapely
from qgis.core import QgsVectorFileWriter, QgsVectorLayer, QgsWkbTypes

from ..algorithms.numeric.errors import InputError
from ..algorithms.numeric.progress import part
from .files import whole_file
from .outputs import as_multipolygons, fields_of, fill_sink
from .text import tr

KINDS = {
    "point": QgsWkbTypes.Type.Point,
    "line": QgsWkbTypes.Type.MultiLineString,
    "polygon": QgsWkbTypes.Type.MultiPolygon,
}


@dataclass(frozen=True)
class Table:
    """One layer of a GeoPackage.

    Attributes
    ----------
    name : str
        Name of the table, lower case.
    title : str
        What a reader sees.
    columns : sequence of plugin.outputs.Column
    geometry : (n,) array of shapely geometries
    kind : str
        ``point``, ``line`` or ``polygon``.
    look : callable or None
        See plugin.looks.
    """

    name: str
    title: str
    columns: tuple
    geometry: object
    kind: str
    look: object = None


def write_geopackage(path, crs, tables, transform_context, progress):
    """Write tables as the layers of a GeoPackage, with styles and field aliases as its defaults.

    Parameters
    ----------
    path : str
        A file of this name is replaced once the new one is whole.
    crs : QgsCoordinateReferenceSystem
    tables : sequence of Table
    transform_context : QgsCoordinateTransformContext
    progress : callable

    Raises
    ------
    InputError
        A layer cannot be written.
    """
    with whole_file(path, ("-wal", "-shm", "-journal")) as waiting:
        ends = np.cumsum([0] + [len(table.geometry) for table in tables])
        ends = 0.9 * ends / max(ends[-1], 1)
        for number, table in enumerate(tables):
            told = part(progress, ends[number], ends[number + 1])
            told(0.0)
            _write_table(waiting, crs, table, number == 0, transform_context, told)
        for number, table in enumerate(tables):
            _save_style(waiting, table)
            progress(0.9 + 0.1 * (number + 1) / len(tables))


def _write_table(path, crs, table, first, transform_context, progress):
    options = QgsVectorFileWriter.SaveVectorOptions()
    options.driverName = "GPKG"
    options.fileEncoding = "UTF-8"
    options.layerName = table.name
    options.layerOptions = [f"IDENTIFIER={table.title}", "GEOMETRY_NAME=geom"]
    if not first:
        options.actionOnExistingFile = (
            QgsVectorFileWriter.ActionOnExistingFile.CreateOrOverwriteLayer
        )
    fields = fields_of(table.columns)
    writer = QgsVectorFileWriter.create(
        path, fields, KINDS[table.kind], crs, transform_context, options
    )
    geometry = table.geometry
    if table.kind == "polygon":
        geometry = as_multipolygons(geometry)
    elif table.kind == "line":
        geometry = [shapely.multilinestrings(shapely.get_parts(one)) for one in geometry]
    refused = writer.hasError() != QgsVectorFileWriter.WriterError.NoError
    taken = not refused and fill_sink(writer, fields, table.columns, geometry, progress)
    trouble = writer.errorMessage()
    del writer
    if not taken:
        raise InputError(tr("The layer {} cannot be written: {}").format(table.title, trouble))


def _save_style(path, table):
    layer = QgsVectorLayer(f"{path}|layername={table.name}", table.title, "ogr")
    for column in table.columns:
        if column.alias:
            layer.setFieldAlias(layer.fields().indexFromName(column.name), column.alias)
    if table.look is not None:
        table.look(layer)
    trouble = layer.saveStyleToDatabase(table.name, "", True, "")
    if trouble:
        raise InputError(tr("The style of {} cannot be saved: {}").format(table.title, trouble))
