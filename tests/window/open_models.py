"""Inside the window: open every ready model in the model designer, run one from its dialog."""

import os
import random
import sys
from pathlib import Path

sys.path.insert(0, os.environ["STEADFIELD_SCRIPTS"])

import steadfield
from inside import FOLDER, PICTURES, notes, start, wait, wait_until
from processing.modeler.ModelerDialog import ModelerDialog
from qgis.core import (
    QgsApplication,
    QgsFeature,
    QgsGeometry,
    QgsPointXY,
    QgsProject,
    QgsVectorLayer,
)
from qgis.gui import QgsModelComponentGraphicItem
from qgis.PyQt.QtCore import Qt, QTimer
from qgis.PyQt.QtWidgets import QApplication, QDockWidget, QGraphicsView
from qgis.utils import iface


def boxes(scene):
    """Components of a diagram: (description, left, top, right, bottom)."""
    found = []
    for item in scene.items():
        if isinstance(item, QgsModelComponentGraphicItem):
            place = item.mapRectToScene(item.itemRect())
            words = item.component().description()
            found.append([words, place.left(), place.top(), place.right(), place.bottom()])
    return found


ENTRY = "Open a copy in the model designer"


def row_of(model, words, parent):
    """Index of a row of the toolbox below another, by its words."""
    rows = (model.index(row, 0, parent) for row in range(model.rowCount(parent)))
    return next(index for index in rows if str(index.data()) == words)


def right_click(*path):
    """Open the menu of a row of the toolbox and click on the entry if it is there.

    Returns the entries of the menu.
    """
    dock = iface.mainWindow().findChild(QDockWidget, "ProcessingToolbox")
    dock.show()
    dock.raise_()
    tree = dock.algorithmTree
    index = tree.rootIndex()
    for words in path:
        index = row_of(tree.model(), words, index)
        tree.expand(index)
    tree.scrollTo(index)
    tree.setCurrentIndex(index)
    wait(300)
    entries = []

    def choose():
        menu = QApplication.activePopupWidget()
        entries.extend(action.text().replace("&", "") for action in menu.actions())
        chosen = [action for action in menu.actions() if action.text().replace("&", "") == ENTRY]
        menu.close()
        for action in chosen:
            action.trigger()

    QTimer.singleShot(500, choose)
    dock.showPopupMenu(tree.visualRect(index).center())
    wait(500)
    return entries


def copies():
    """Open a copy by the menu of the toolbox; note what its designer holds and the menus."""
    model = QgsApplication.processingRegistry().algorithmById("steadfield:cleanrelease")
    before = len(ModelerDialog.dlgs)
    notes["menu of a model"] = right_click("Steadfield", "Ready models", model.displayName())
    notes["menu of a tool"] = right_click("Steadfield", "Records", "Check point records")
    opened = ModelerDialog.dlgs[before:]
    notes["copies"] = []
    for dialog in opened:
        copy = dialog.model()
        notes["copies"].append(
            {
                "name": copy.displayName(),
                "file": copy.sourceFilePath(),
                "steps": sorted(copy.childAlgorithms()),
                "steps of the model": sorted(model.childAlgorithms()),
                "valid": copy.validate()[0],
            }
        )
        dialog.grab().save(str(PICTURES / "model copy.png"))
        dialog.setDirty(False)
        dialog.close()


def points(name, east):
    """A layer of points around a place, on the map."""
    layer = QgsVectorLayer("Point?crs=EPSG:3035", name, "memory")
    draw = random.Random(name)
    features = []
    for _ in range(200):
        feature = QgsFeature()
        place = QgsPointXY(4e6 + east + draw.gauss(0, 500), 3e6 + draw.gauss(0, 500))
        feature.setGeometry(QgsGeometry.fromPointXY(place))
        features.append(feature)
    layer.dataProvider().addFeatures(features)
    layer.updateExtents()
    QgsProject.instance().addMapLayer(layer)
    return layer.id()


def run_from_dialog():
    """Three layers of the project become zones, in a thread of their own as in daily work."""
    import processing

    given = {f"LAYER_{key}": points(f"hill {key}", 300 * at) for at, key in enumerate("ABC")}
    legend = FOLDER / "legend.svg"
    dialog = processing.createAlgorithmDialog(
        "steadfield:threelayerstogether", {**given, "SEED": 1, "blend:Legend": str(legend)}
    )
    dialog.resize(900, 800)
    dialog.show()
    wait(1000)
    dialog.grab().save(str(PICTURES / "model dialog.png"))
    dialog.runButton().click()
    notes["ran"] = wait_until(lambda: len(QgsProject.instance().mapLayers()) > 3)
    wait(500)
    dialog.close()
    notes["loaded"] = {
        one.name(): one.renderer().type() for one in QgsProject.instance().mapLayers().values()
    }
    notes["legend"] = legend.read_text(encoding="utf-8")


def steps():
    provider = QgsApplication.processingRegistry().providerById("steadfield")
    notes["offered"] = sorted(one.name() for one in provider.algorithms())
    notes["opened"] = {}
    folder = Path(steadfield.__file__).parent / "plugin" / "models"
    for path in sorted(folder.glob("*.model3")):
        dialog = ModelerDialog()
        dialog.loadModel(str(path))
        dialog.setGeometry(0, 0, 1400, 860)
        dialog.show()
        wait(500)
        views = [one for one in dialog.findChildren(QGraphicsView) if one.scene().items()]
        scene = views[0].scene()
        views[0].fitInView(scene.itemsBoundingRect(), Qt.AspectRatioMode.KeepAspectRatio)
        wait(500)
        dialog.grab().save(str(PICTURES / f"model {path.stem}.png"))
        notes["opened"][path.stem] = boxes(scene)
        dialog.setDirty(False)
        dialog.close()
    copies()
    run_from_dialog()


start(steps)
