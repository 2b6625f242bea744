"""Inside the window: the toolbox, runs from dialogs and their looks, unloading, loading again."""

import os
import sys

sys.path.insert(0, os.environ["STEADFIELD_SCRIPTS"])

from inside import (
    FOLDER,
    bar_texts,
    log_panel,
    notes,
    picture,
    run_in_dialog,
    start,
    wait,
    write_records,
)
from processing.gui.ProviderActions import ProviderContextMenuActions
from qgis.core import QgsApplication, QgsProject
from qgis.PyQt.QtWidgets import QDockWidget
from qgis.utils import iface, loadPlugin, plugins, startPlugin, unloadPlugin


def toolbox_rows():
    """The plugin's rows of the toolbox: groups and their tools."""
    dock = iface.mainWindow().findChild(QDockWidget, "ProcessingToolbox")
    dock.show()
    dock.raise_()
    tree = dock.algorithmTree
    model = tree.model()
    found = []
    for row in range(model.rowCount()):
        index = model.index(row, 0)
        if str(index.data()) == "Steadfield":
            tree.expandRecursively(index)
            tree.scrollTo(index, tree.ScrollHint.PositionAtTop)
            groups = [model.index(group, 0, index) for group in range(model.rowCount(index))]
            found.append(
                {
                    str(group.data()): [
                        str(model.index(tool, 0, group).data())
                        for tool in range(model.rowCount(group))
                    ]
                    for group in groups
                }
            )
    return found


def seen():
    """What a plugin could leave behind in the window."""
    return {
        "providers": sorted(one.id() for one in QgsApplication.processingRegistry().providers()),
        "toolbox": toolbox_rows(),
        "bar": bar_texts(),
        "menu entries": sorted(str(one.name) for one in ProviderContextMenuActions.actions),
        "docks": sorted(one.objectName() for one in iface.mainWindow().findChildren(QDockWidget)),
        "modules": sorted(
            name for name in sys.modules if name == "steadfield" or name.startswith("steadfield.")
        ),
    }


def rasters():
    return {
        one.name(): (one.renderer().type(), list(one.renderer().usesBands()))
        for one in QgsProject.instance().mapLayers().values()
        if hasattr(one.renderer(), "usesBands")
    }


def run_and_look(layer):
    density = {
        "RECORDS": layer.id(),
        "DENSITY": str(FOLDER / "density with a space.tif"),
        "REPORT": str(FOLDER / "density.html"),
    }
    notes["density ran"] = run_in_dialog("steadfield:adaptivedensity", density, "dialog")
    wait(1500)
    iface.layerTreeView().expandAll()
    picture("result")
    variance = {
        "RECORDS": layer.id(),
        "REPLICATES": 20,
        "SEED": 3,
        "VARIANCE": str(FOLDER / "variance.tif"),
        "TABLE": "TEMPORARY_OUTPUT",
    }
    notes["variance ran"] = run_in_dialog("steadfield:gridvariance", variance)
    wait(1500)
    picture("verdict")
    notes["rasters"] = rasters()


def steps():
    layer = write_records(FOLDER / "records.gpkg")
    notes["loaded"] = "steadfield" in plugins
    notes["first"] = seen()
    wait(500)
    picture("toolbox")
    run_and_look(layer)
    notes["unloaded"] = unloadPlugin("steadfield")
    wait(300)
    notes["without"] = seen()
    notes["again"] = loadPlugin("steadfield") and startPlugin("steadfield")
    wait(300)
    notes["second"] = seen()
    unloadPlugin("steadfield")
    notes["log"] = log_panel()


start(steps)
