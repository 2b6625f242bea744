"""Inside the window: a picture of the dialog of every algorithm that is named, or of all."""

import os
import sys

sys.path.insert(0, os.environ["STEADFIELD_SCRIPTS"])

from inside import notes, picture, start, wait
from qgis.core import QgsApplication
from qgis.PyQt.QtWidgets import QScrollArea


def steps():
    import processing

    provider = QgsApplication.processingRegistry().providerById("steadfield")
    named = os.environ.get("STEADFIELD_DIALOGS", "").split()
    for algorithm in provider.algorithms():
        if named and algorithm.name() not in named:
            continue
        dialog = processing.createAlgorithmDialog(algorithm.id(), {})
        dialog.setGeometry(0, 0, 1400, 900)
        dialog.show()
        wait(600)
        picture(f"dialog {algorithm.name()}")
        for area in dialog.findChildren(QScrollArea):
            bar = area.verticalScrollBar()
            if bar.maximum() > 0:
                bar.setValue(bar.maximum())
                wait(200)
                picture(f"dialog {algorithm.name()} below")
                break
        notes[algorithm.name()] = dialog.windowTitle()
        dialog.close()


start(steps)
