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
from qgis.PyQt.QtCore import Qt
from qgis.PyQt.QtWidgets import QGraphicsView


def boxes(scene):
    """Components of a diagram: (description, left, top, right, bottom)."""
    found = []
    for item in scene.items():
        if isinstance(item, QgsModelComponentGraphicItem):
            place = item.mapRectToScene(item.itemRect())
            words = item.component().description()
            found.append([words, place.left(), place.top(), place.right(), place.bottom()])
    return found


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
    run_from_dialog()


start(steps)
