"""Helpers for scripts that run inside the window: one step after the other, then leave."""

import json
import os
import subprocess
import traceback
from pathlib import Path

from qgis.PyQt.QtCore import QTimer
from qgis.PyQt.QtWidgets import QApplication

PICTURES = Path(os.environ["STEADFIELD_PICTURES"])
FOLDER = Path(os.environ["STEADFIELD_FOLDER"])
notes = {}


def picture(name):
    """Keep a screenshot."""
    QApplication.processEvents()
    subprocess.run(["import", "-window", "root", str(PICTURES / f"{name}.png")], check=False)


def wait(milliseconds):
    """Let the window work."""
    from qgis.PyQt.QtCore import QEventLoop

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


def leave():
    """Write the notes and end the program at once."""
    Path(os.environ["STEADFIELD_NOTES"]).write_text(json.dumps(notes), encoding="utf-8")
    os._exit(0)


def start(steps, after=4000):
    """Run the steps once the window stands."""

    def go():
        try:
            steps()
        except Exception:
            notes["traceback"] = traceback.format_exc()
            picture("failure")
        leave()

    QTimer.singleShot(after, go)
