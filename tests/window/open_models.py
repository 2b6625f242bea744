"""Inside the window: open every ready model in the model designer."""

import os
import sys
from pathlib import Path

sys.path.insert(0, os.environ["STEADFIELD_SCRIPTS"])

import steadfield
from inside import PICTURES, notes, start, wait
from processing.modeler.ModelerDialog import ModelerDialog
from qgis.core import QgsApplication
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


start(steps)
