"""Inside the window: find the toolbox, run an algorithm from its dialog, unload."""

import os
import random
import sys

sys.path.insert(0, os.environ["STEADFIELD_SCRIPTS"])

from inside import FOLDER, notes, picture, start, wait, wait_until
from qgis.core import (
    QgsApplication,
    QgsFeature,
    QgsGeometry,
    QgsPointXY,
    QgsProject,
    QgsVectorLayer,
)
from qgis.PyQt.QtWidgets import QDockWidget
from qgis.utils import iface, plugins, unloadPlugin


def records():
    """A layer of two clusters, on the map."""
    layer = QgsVectorLayer("Point?crs=EPSG:3035", "records", "memory")
    draw = random.Random(4)
    features = []
    for centre in ((4_300_000, 3_400_000), (4_303_000, 3_401_000)):
        for _ in range(300):
            feature = QgsFeature()
            place = QgsPointXY(centre[0] + draw.gauss(0, 500), centre[1] + draw.gauss(0, 300))
            feature.setGeometry(QgsGeometry.fromPointXY(place))
            features.append(feature)
    layer.dataProvider().addFeatures(features)
    layer.updateExtents()
    QgsProject.instance().addMapLayer(layer)
    iface.mapCanvas().setExtent(layer.extent().buffered(500))
    return layer


def show_toolbox():
    for dock in iface.mainWindow().findChildren(QDockWidget):
        if dock.objectName() == "ProcessingToolbox":
            dock.show()
            dock.raise_()
            search = dock.findChild(type(dock.searchBox))
            search.setText("steadfield")
            dock.searchBox.setText("")
            notes["toolbox"] = True
            tree = dock.algorithmTree
            model = tree.model()
            for row in range(model.rowCount()):
                index = model.index(row, 0)
                if "Steadfield" in str(index.data()):
                    tree.expandRecursively(index)
                    tree.scrollTo(index, tree.ScrollHint.PositionAtTop)


def steps():
    notes["loaded"] = "steadfield" in plugins
    provider = QgsApplication.processingRegistry().providerById("steadfield")
    notes["algorithms"] = sorted(a.name() for a in provider.algorithms()) if provider else []
    layer = records()
    show_toolbox()
    wait(1500)
    picture("toolbox")

    import processing

    target = str(FOLDER / "density with a space.tif")
    dialog = processing.createAlgorithmDialog(
        "steadfield:adaptivedensity",
        {"RECORDS": layer, "DENSITY": target, "REPORT": str(FOLDER / "report.html")},
    )
    dialog.resize(900, 800)
    dialog.show()
    wait(1500)
    picture("dialog")
    dialog.runButton().click()
    notes["ran"] = wait_until(lambda: any(
        one.name() != "records" for one in QgsProject.instance().mapLayers().values()
    ))  # fmt: skip
    wait(1500)
    dialog.close()
    wait(1500)
    picture("result")
    for one in QgsProject.instance().mapLayers().values():
        if one.name() != "records":
            notes["result"] = one.name()
            notes["renderer"] = one.renderer().type()
    unloadPlugin("steadfield")
    notes["provider after unloading"] = (
        QgsApplication.processingRegistry().providerById("steadfield") is not None
    )
    notes["modules kept"] = "steadfield" in plugins


start(steps)
