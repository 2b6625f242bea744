"""Inside the window: a needed package is too old; note what the user sees, and use the host."""

import os
import sys

sys.path.insert(0, os.environ["STEADFIELD_SCRIPTS"])

from inside import FOLDER, bar_texts, log_panel, notes, picture, start, wait, write_records
from qgis.core import QgsApplication
from qgis.utils import plugins, unloadPlugin


def steps():
    layer = write_records(FOLDER / "records.gpkg")
    wait(500)
    picture("old package")
    notes["loaded"] = "steadfield" in plugins
    notes["bar"] = bar_texts()
    notes["providers"] = sorted(one.id() for one in QgsApplication.processingRegistry().providers())
    import processing

    buffers = processing.run(
        "native:buffer", {"INPUT": layer, "DISTANCE": 10.0, "OUTPUT": "memory:"}
    )
    notes["buffers"] = buffers["OUTPUT"].featureCount()
    notes["unloaded"] = unloadPlugin("steadfield")
    notes["log"] = log_panel()


start(steps)
