"""How outputs open: styled, with field aliases, and in an order that hides no result."""

import os
import weakref
from itertools import count

from qgis.core import (
    QgsMapLayer,
    QgsProcessingLayerPostProcessorInterface,
    QgsRasterLayer,
    QgsVectorLayer,
    QgsWkbTypes,
)

DATA_ENDINGS = (".tif", ".tiff", ".img", ".gpkg", ".shp", ".geojson", ".fgb", ".csv", ".sqlite")
SHAPEFILE_NAME = 10

# from below, over tables and rasters
GEOMETRIES = (
    QgsWkbTypes.GeometryType.PolygonGeometry,
    QgsWkbTypes.GeometryType.LineGeometry,
    QgsWkbTypes.GeometryType.PointGeometry,
)

_kept = {}
_steps = count()


class _Opener(QgsProcessingLayerPostProcessorInterface):
    """Styles a layer when the host has loaded it, and puts it in its place in the layer tree."""

    def __init__(self, target, apply, place_of, unfolded):
        super().__init__()
        self._target = target
        self._apply = apply
        self._place_of = place_of
        self._unfolded = unfolded

    def postProcessLayer(self, layer, context, feedback):
        self._apply(layer)
        layer.triggerRepaint()
        if context.project() is not None:
            _Run.of(context).arrange(layer, self._place_of(layer), self._unfolded)
        _kept.pop(self._target, None)


class _Run:
    """The layers that one run has opened so far; the host adds them in the order of their paths."""

    _latest = None

    def __init__(self, context):
        self._context = weakref.ref(context)
        self._places = {}
        self._unfolded = set()

    @classmethod
    def of(cls, context):
        """The run of a context; all layers of one run are opened before those of the next."""
        if cls._latest is None or cls._latest._context() is not context:
            cls._latest = cls(context)
        return cls._latest

    def arrange(self, layer, place, unfolded):
        """Let the layers of the run that stand in one group lie as their places say."""
        self._places[layer.id()] = place
        if unfolded:
            self._unfolded.add(layer.id())
        node = self._context().project().layerTreeRoot().findLayer(layer.id())
        if node is None:
            return
        group = node.parent()
        shown = [one for one in group.children() if _layer_id(one) in self._places]
        wanted = sorted(shown, key=lambda one: self._places[_layer_id(one)], reverse=True)
        if shown != wanted:
            first = group.children().index(shown[0])
            for offset, one in enumerate(wanted):
                group.insertChildNode(first + offset, one.clone())
            for one in shown:
                group.removeChildNode(one)
        for one in group.children():
            if _layer_id(one) in self._unfolded:
                # the window made the legend before the look and takes notice of a change only
                one.setExpanded(False)
                one.setExpanded(True)


def _layer_id(node):
    return node.layerId() if hasattr(node, "layerId") else None


def _drawn(layer):
    """Tables lowest in the tree, then rasters, polygons, lines, and points on top."""
    if not isinstance(layer, QgsVectorLayer):
        return 1
    kind = layer.geometryType()
    return 2 + GEOMETRIES.index(kind) if kind in GEOMETRIES else 0


def next_step():
    """A number that is greater for a later step of a model, for `open_with`."""
    return next(_steps)


def open_with(target, apply, place_of, context, unfolded=False):
    """Let the host, if it loads an output at the end of the run, open it in a certain way.

    Parameters
    ----------
    target : str
        Path or id of the output.
    apply : callable
        Takes the loaded layer.
    place_of : callable
        Takes the loaded layer; of the layers of the run the one with the greater place lies above.
    context : QgsProcessingContext
    unfolded : bool
        Whether the legend is shown.
    """
    if context.willLoadLayerOnCompletion(target):
        # the host keeps no reference of its own
        _kept[target] = _Opener(target, apply, place_of, unfolded)
        context.layerToLoadOnCompletionDetails(target).setPostProcessor(_kept[target])


def _shares_its_style_file(target):
    """Whether another data set beside the target would open with the target's style file."""
    stem, ending = os.path.splitext(target)
    return any(os.path.exists(stem + other) for other in DATA_ENDINGS if other != ending.lower())


def _name_fields(layer, aliases):
    fields = layer.fields() if aliases else None
    for name, alias in aliases.items():
        index = fields.indexFromName(name)
        if index < 0:
            index = fields.indexFromName(name[:SHAPEFILE_NAME])
        if index >= 0:
            layer.setFieldAlias(index, alias)


def style_output(target, kind, look, aliases, place, context):
    """Make an output open with its look and field aliases, whichever way it is opened.

    A file of one layer gets a style file beside it, which the host reads by itself; a layer that
    the host loads when the run ends is styled then.

    Parameters
    ----------
    target : str
        Path or id of the output.
    kind : str
        ``raster`` or ``vector``.
    look : callable or None
    aliases : dict of str to str
    place : tuple of int
        Among outputs with the same kind of geometry the greater lies above.
    context : QgsProcessingContext
    """

    def apply(layer):
        _name_fields(layer, aliases)
        if look is not None:
            look(layer)

    if os.path.isfile(target):
        if look is not None or aliases:
            _style_file(target, kind, apply, bool(aliases))
    else:
        # no table of a database is opened here: other outputs may yet go into the same file
        held = context.getMapLayer(target)
        if held is not None:
            _name_fields(held, aliases)
    open_with(target, apply, lambda layer: (_drawn(layer), *place), context, unfolded=True)


def _style_file(target, kind, apply, with_fields):
    """Write the style of a file of one layer beside it."""
    raster = kind == "raster"
    layer = (QgsRasterLayer if raster else QgsVectorLayer)(
        target, "output", "gdal" if raster else "ogr"
    )
    if layer.isValid():
        apply(layer)
        kinds = QgsMapLayer.StyleCategory.Symbology
        if not raster and layer.labelsEnabled():
            kinds |= QgsMapLayer.StyleCategory.Labeling
        if with_fields:
            kinds |= QgsMapLayer.StyleCategory.Fields
        if not _shares_its_style_file(target):
            layer.saveNamedStyle(os.path.splitext(target)[0] + ".qml", kinds)
    del layer
    # opening a raster made the host note statistics of its values beside the file
    if os.path.exists(target + ".aux.xml"):
        os.remove(target + ".aux.xml")
