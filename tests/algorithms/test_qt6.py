"""What the plugin takes from Qt, run with Qt 6: no host with Qt 6 is among Debian's packages.

Qt 6 is the package PyQt6 of the Python package registry.
"""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from qgis.PyQt.QtGui import QImage
from steadfield.plugin import pictures

SCRIPT = Path(__file__).resolve().parent / "qt6_run.py"
DRAWING = (
    '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 20 10" width="20mm" height="10mm">'
    '<rect width="12" height="6" fill="#7a3d10"/><circle cx="14" cy="5" r="4" fill="#2e7179" '
    'fill-opacity="0.5"/></svg>'
)


@pytest.fixture(scope="module")
def with_qt6():
    done = subprocess.run(
        [sys.executable, str(SCRIPT), DRAWING], capture_output=True, text=True, timeout=120
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout.splitlines()[-1])


def levels_of(png):
    image = QImage.fromData(png).convertToFormat(QImage.Format.Format_RGBA8888)
    bits = image.constBits()
    bits.setsize(image.byteCount() if hasattr(image, "byteCount") else image.sizeInBytes())
    return np.frombuffer(bits, np.uint8).reshape(image.height(), image.width(), 4).astype(int)


def test_qt_6_has_every_name_that_the_plugin_takes_from_qt(with_qt6):
    assert with_qt6["qt"].startswith("6.")
    assert with_qt6["seen"] > 40
    assert with_qt6["missing"] == []
    assert with_qt6["words"] == "12\u202f345 records"


def test_pictures_come_out_alike_with_qt_6_and_the_qt_of_the_host(with_qt6):
    made = levels_of(bytes.fromhex(with_qt6["drawing"]))
    expected = levels_of(pictures.drawing_to_png(DRAWING))
    assert made.shape == expected.shape == (118, 236, 4)
    # edges may be smoothed otherwise
    assert np.mean(np.abs(made - expected).max(axis=2) > 4) < 0.01
    levels = np.random.default_rng(1).integers(0, 256, (4, 20, 30)).astype(np.uint8)
    np.testing.assert_array_equal(
        levels_of(bytes.fromhex(with_qt6["levels"])), np.moveaxis(levels, 0, -1)
    )
