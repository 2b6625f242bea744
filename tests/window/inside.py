"""Steps for scripts that run inside the window: one step after the other, then leave."""

import json
import os
import random
import subprocess
import traceback
from pathlib import Path

from qgis.core import (
    QgsFeature,
    QgsGeometry,
    QgsPointXY,
    QgsProject,
    QgsVectorFileWriter,
    QgsVectorLayer,
)
from qgis.PyQt.QtCore import QEventLoop, QTimer
from qgis.PyQt.QtWidgets import QApplication, QDockWidget, QTabWidget, QTextEdit
from qgis.utils import iface

PICTURES = Path(os.environ["STEADFIELD_PICTURES"])
FOLDER = Path(os.environ["STEADFIELD_FOLDER"])
notes = {}


def picture(name):
    """Keep a screenshot."""
    QApplication.processEvents()
    subprocess.run(["import", "-window", "root", str(PICTURES / f"{name}.png")], check=False)


def wait(milliseconds):
    """Let the window work."""
    loop = QEventLoop()
    QTimer.singleShot(milliseconds, loop.quit)
    loop.exec() if hasattr(loop, "exec") else loop.exec_()


def wait_until(condition, seconds=60):
    """Let the window work until a condition holds; tells whether it did."""
    for _ in range(seconds * 10):
        if condition():
            return True
        wait(100)
    return False


def write_records(path):
    """Write a GeoPackage of two clusters of records and open it on the map."""
    made = QgsVectorLayer("Point?crs=EPSG:3035&field=cases:integer", "records", "memory")
    draw = random.Random(4)
    features = []
    for centre in ((4_300_000, 3_400_000), (4_303_000, 3_401_000)):
        for _ in range(300):
            feature = QgsFeature(made.fields())
            place = QgsPointXY(centre[0] + draw.gauss(0, 500), centre[1] + draw.gauss(0, 300))
            feature.setGeometry(QgsGeometry.fromPointXY(place))
            feature["cases"] = draw.randint(1, 3)
            features.append(feature)
    made.dataProvider().addFeatures(features)
    options = QgsVectorFileWriter.SaveVectorOptions()
    options.layerName = "records"
    QgsVectorFileWriter.writeAsVectorFormatV3(
        made, str(path), QgsProject.instance().transformContext(), options
    )
    layer = QgsVectorLayer(f"{path}|layername=records", "records", "ogr")
    QgsProject.instance().addMapLayer(layer)
    iface.mapCanvas().setExtent(layer.extent().buffered(500))
    return layer


def run_in_dialog(algorithm, parameters, name=None):
    """Run an algorithm from its dialog, as a user does; tells whether it ended without an error.

    A picture of the dialog is kept under ``name``.
    """
    import processing

    dialog = processing.createAlgorithmDialog(algorithm, parameters)
    dialog.setGeometry(200, 0, 1000, 900)
    dialog.show()
    wait(700)
    if name:
        picture(name)
    ended = []
    dialog.algorithmFinished.connect(lambda success, results: ended.append(success))
    dialog.runButton().click()
    wait_until(lambda: ended)
    wait(500)
    said = [one.toPlainText() for one in dialog.findChildren(QTextEdit)]
    notes.setdefault("dialog logs", []).append(said)
    dialog.close()
    return ended == [True]


def log_panel():
    """What stands in the tabs of the log panel, by the tab's title."""
    panel = iface.mainWindow().findChild(QDockWidget, "MessageLog")
    tabs = panel.findChild(QTabWidget)
    return {
        tabs.tabText(index): tabs.widget(index).toPlainText()
        for index in range(tabs.count())
        if hasattr(tabs.widget(index), "toPlainText")
    }


def bar_texts():
    """Sentences in the message bar of the window."""
    return [item.text() for item in iface.messageBar().items()]


def leave():
    """Write the notes and end the program at once."""
    Path(os.environ["STEADFIELD_NOTES"]).write_text(json.dumps(notes), encoding="utf-8")
    os._exit(0)


def start(steps, after=4000):
    """Run the steps once the window stands."""

    def go():
        iface.mainWindow().setGeometry(0, 0, 1400, 900)
        try:
            steps()
        except Exception:
            notes["traceback"] = traceback.format_exc()
            picture("failure")
        leave()

    QTimer.singleShot(after, go)
