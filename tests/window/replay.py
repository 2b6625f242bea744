"""Inside the window: run from the dialog, then the same from the history and as a command."""

import os
import sys
from pathlib import Path

sys.path.insert(0, os.environ["STEADFIELD_SCRIPTS"])

from inside import FOLDER, notes, run_in_dialog, start, write_records
from qgis.core import QgsApplication, QgsProcessingContext
from qgis.gui import QgsGui
from qgis.PyQt.QtCore import QLocale


def last_of_history():
    """The Python command of the newest entry of the toolbox's history."""
    if hasattr(QgsGui, "historyProviderRegistry"):
        entries = QgsGui.historyProviderRegistry().queryEntries()
        return max(entries, key=lambda entry: entry.id).entry["python_command"]
    from processing.core.ProcessingLog import ProcessingLog

    return ProcessingLog.getLogEntries()[-1].text


def steps():
    path = FOLDER / "records.gpkg"
    write_records(path)
    notes["locale"] = [QLocale().name(), QLocale().toString(1.5, "f", 1)]
    target = FOLDER / "from the dialog.tif"
    parameters = {
        "RECORDS": f"{path}|layername=records",
        "COUNT": "cases",
        "CELL_SIZES": "412.5, 900",
        "REPLICATES": 20,
        "THRESHOLD": 40.25,
        "BUDGET": 0.35,
        "EVALUATION_CELL": 75.5,
        "SEED": 3,
        "VARIANCE": str(target),
        "TABLE": str(FOLDER / "table.gpkg"),
        "REPORT": str(FOLDER / "from the dialog.html"),
    }
    notes["ran"] = run_in_dialog("steadfield:gridvariance", parameters, "dialog in German")
    target.rename(FOLDER / "first.tif")

    import processing

    notes["entry"] = last_of_history()
    call = notes["entry"].replace("processing.run(", "again(")
    replayed = []

    def again(algorithm, entered):
        replayed.append(run_in_dialog(algorithm, entered))

    exec(call, {"again": again})
    notes["replayed"] = replayed
    target.rename(FOLDER / "replayed.tif")

    algorithm = QgsApplication.processingRegistry().createAlgorithmById("steadfield:gridvariance")
    context = QgsProcessingContext()
    notes["python"] = algorithm.asPythonCommand(parameters, context)
    exec(notes["python"], {"processing": processing})
    target.rename(FOLDER / "from python.tif")
    if hasattr(algorithm, "asQgisProcessCommand"):
        notes["command"] = algorithm.asQgisProcessCommand(parameters, context)[0]
    notes["files"] = sorted(one.name for one in Path(FOLDER).glob("*.tif"))
    notes["parameters"] = parameters


start(steps)
