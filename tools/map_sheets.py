"""Maps drawn by the host: a sheet with title, map, legend, inset and scale bar as PNG."""

from osgeo import gdal
from qgis.core import (
    QgsFillSymbol,
    QgsLayoutExporter,
    QgsLayoutItemLabel,
    QgsLayoutItemLegend,
    QgsLayoutItemMap,
    QgsLayoutItemMapOverview,
    QgsLayoutItemPicture,
    QgsLayoutItemScaleBar,
    QgsLayoutPoint,
    QgsLayoutSize,
    QgsLegendStyle,
    QgsMapLayerLegendUtils,
    QgsPrintLayout,
    QgsRasterLayer,
    QgsRectangle,
    QgsUnitTypes,
)
from qgis.PyQt.QtGui import QColor, QFont

LEGEND_PARTS = [
    QgsLegendStyle.Style.Group,
    QgsLegendStyle.Style.Subgroup,
    QgsLegendStyle.Style.SymbolLabel,
]
MILLIMETRES = QgsUnitTypes.LayoutUnit.LayoutMillimeters
WIDTH, HEIGHT, LEGEND_WIDTH, TITLE_HEIGHT = 245, 150, 77, 14
INSET_HEIGHT = 56
LEFT_OF_LEGEND = WIDTH - LEGEND_WIDTH - 3


def _place(item, layout, x, y, width, height):
    layout.addLayoutItem(item)
    item.attemptMove(QgsLayoutPoint(x, y, MILLIMETRES))
    item.attemptResize(QgsLayoutSize(width, height, MILLIMETRES))


def map_sheet(
    project, layers, title, path, extent, legend_of=None, dpi=120, inset=None, beside=None
):
    """Draw layers, the first on top, as one sheet.

    Parameters
    ----------
    project : QgsProject
        Holds the layers; its CRS is the map's.
    layers : sequence of QgsMapLayer
    title : str
    path : str
        PNG file to write.
    extent : QgsRectangle
    legend_of : sequence of QgsMapLayer or None
        Layers in the legend; all by default.
    dpi : int
    inset : QgsRectangle or None
        Ground that is drawn again, larger, under the legend.
    beside : str or None
        SVG or PNG that is drawn under the legend instead, such as a legend of its own.

    Raises
    ------
    RuntimeError
        The sheet could not be written.
    """
    layout = QgsPrintLayout(project)
    layout.initializeDefaults()
    layout.pageCollection().page(0).setPageSize(QgsLayoutSize(WIDTH, HEIGHT, MILLIMETRES))
    heading = QgsLayoutItemLabel(layout)
    heading.setText(title)
    heading.setFont(QFont("Noto Sans", 14))
    _place(heading, layout, 5, 4, WIDTH - 10, TITLE_HEIGHT - 4)
    drawn = QgsLayoutItemMap(layout)
    map_width, map_height = WIDTH - LEGEND_WIDTH - 10, HEIGHT - TITLE_HEIGHT - 5
    _place(drawn, layout, 5, TITLE_HEIGHT, map_width, map_height)
    drawn.setCrs(project.crs())
    drawn.setLayers(list(layers))
    drawn.setKeepLayerSet(True)
    drawn.setExtent(_shaped(extent, map_width / map_height))
    drawn.setFrameEnabled(True)
    drawn.setFrameStrokeColor(QColor("#b9b2a0"))
    _add_legend(layout, drawn, legend_of or layers)
    _add_scale(layout, drawn, extent.width())
    if inset is not None:
        _add_inset(layout, drawn, inset)
    if beside is not None:
        picture = QgsLayoutItemPicture(layout)
        picture.setPicturePath(beside)
        top = TITLE_HEIGHT + 12
        _place(picture, layout, LEFT_OF_LEGEND, top, LEGEND_WIDTH - 3, HEIGHT - 20 - top)
    settings = QgsLayoutExporter.ImageExportSettings()
    settings.dpi = dpi
    # the host tries to note the map's place inside the PNG, which that format cannot hold
    gdal.PushErrorHandler("CPLQuietErrorHandler")
    written = QgsLayoutExporter(layout).exportToImage(path, settings)
    gdal.PopErrorHandler()
    if written != QgsLayoutExporter.ExportResult.Success:
        raise RuntimeError(f"the map {path} was not written ({written})")


def _shaped(extent, wanted):
    """An extent grown to the shape of the map's frame, with a small margin."""
    width, height = extent.width() * 1.04, extent.height() * 1.04
    if width / height < wanted:
        width = height * wanted
    else:
        height = width / wanted
    centre = extent.center()
    return QgsRectangle(
        centre.x() - width / 2, centre.y() - height / 2,
        centre.x() + width / 2, centre.y() + height / 2,
    )  # fmt: skip


def _add_legend(layout, drawn, layers):
    legend = QgsLayoutItemLegend(layout)
    legend.setLinkedMap(drawn)
    legend.setAutoUpdateModel(False)
    tree = legend.model().rootGroup()
    tree.removeAllChildren()
    for layer in layers:
        node = tree.addLayer(layer)
        if isinstance(layer, QgsRasterLayer):
            # the first entry names the band, which the title of the layer says better
            entries = len(legend.model().layerLegendNodes(node))
            QgsMapLayerLegendUtils.setLegendNodeOrder(node, list(range(1, entries)))
            legend.model().refreshLayerLegend(node)
    for part in LEGEND_PARTS:
        legend.setStyleFont(part, QFont("Noto Sans", 8))
    legend.setSymbolWidth(5)
    legend.setSymbolHeight(3.5)
    legend.setResizeToContents(True)
    _place(legend, layout, LEFT_OF_LEGEND, TITLE_HEIGHT, LEGEND_WIDTH, 100)
    legend.adjustBoxSize()


def _add_inset(layout, drawn, ground):
    inset = QgsLayoutItemMap(layout)
    width, top = LEGEND_WIDTH - 3, HEIGHT - 20 - INSET_HEIGHT
    _place(inset, layout, LEFT_OF_LEGEND, top, width, INSET_HEIGHT)
    inset.setCrs(drawn.crs())
    inset.setLayers(drawn.layers())
    inset.setKeepLayerSet(True)
    inset.setExtent(_shaped(ground, width / INSET_HEIGHT))
    inset.setFrameEnabled(True)
    inset.setFrameStrokeColor(QColor("#3b3f46"))
    overview = QgsLayoutItemMapOverview("inset", drawn)
    drawn.overviews().addOverview(overview)
    overview.setLinkedMap(inset)
    frame = QgsFillSymbol.createSimple(
        {"color": "transparent", "outline_color": "#3b3f46", "outline_width": "0.3"}
    )
    overview.setFrameSymbol(frame)


def _add_scale(layout, drawn, width):
    scale = QgsLayoutItemScaleBar(layout)
    scale.setLinkedMap(drawn)
    scale.setStyle("Line Ticks Up")
    scale.setUnits(QgsUnitTypes.DistanceUnit.DistanceKilometers)
    scale.setUnitLabel("km")
    scale.setNumberOfSegments(1)
    scale.setNumberOfSegmentsLeft(0)
    scale.setUnitsPerSegment(_round_length(width / 6000))
    scale.update()
    _place(scale, layout, WIDTH - LEGEND_WIDTH - 2, HEIGHT - 18, LEGEND_WIDTH, 12)


def _round_length(value):
    """The nearest of 1, 2 or 5 times a power of ten below a value."""
    power = 1.0
    while power > value:
        power /= 10
    while power * 10 <= value:
        power *= 10
    return max(step * power for step in (1, 2, 5) if step * power <= value)
