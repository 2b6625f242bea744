"""Run in a process of its own: what the plugin takes from Qt, with Qt 6 in place of the host's Qt.

Prints one JSON object: the version of Qt, names that it has not, and pictures as hexadecimal PNG.
"""

import ast
import importlib
import json
import sys
import types
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent.parent
# the branch for old hosts says what these were before
OLD_ONLY = {"QVariant.Type"}


def pretend_host():
    """Offer PyQt6 under the name by which the host offers its Qt."""
    host = types.ModuleType("qgis")
    host.PyQt = types.ModuleType("qgis.PyQt")
    sys.modules.update({"qgis": host, "qgis.PyQt": host.PyQt})
    for name in ("QtCore", "QtGui", "QtSvg", "QtWidgets"):
        sys.modules[f"qgis.PyQt.{name}"] = importlib.import_module(f"PyQt6.{name}")


def missing_names(path):
    """Names that a module takes from Qt, or from a class of Qt, and that Qt 6 has not."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    known = {}
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("qgis.PyQt."):
            module = sys.modules[node.module]
            for alias in node.names:
                if not hasattr(module, alias.name):
                    yield f"{path.name}: {alias.name}"
                known[alias.asname or alias.name] = getattr(module, alias.name, None)
    for node in ast.walk(tree):
        if isinstance(node, ast.Attribute):
            words = ast.unparse(node)
            first, *others = words.split(".")
            found = known.get(first)
            if found is None or any(words.startswith(old) for old in OLD_ONLY):
                continue
            for word in others:
                found = getattr(found, word, None)
            if found is None:
                yield f"{path.name}: {words}"


def main():
    pretend_host()
    sys.path.insert(0, str(ROOT / "tests"))
    import conftest

    conftest.import_checkout()
    from PyQt6.QtCore import QT_VERSION_STR
    from PyQt6.QtGui import QGuiApplication
    from steadfield.plugin import pictures
    from steadfield.plugin.text import number, tr

    application = QGuiApplication([])
    modules = [*ROOT.glob("plugin/*.py"), *ROOT.glob("algorithms/*.py"), ROOT / "__init__.py"]
    levels = np.random.default_rng(1).integers(0, 256, (4, 20, 30)).astype(np.uint8)
    said = {
        "qt": QT_VERSION_STR,
        "seen": len(modules),
        "missing": [words for path in modules for words in missing_names(path)],
        "words": tr("{} records").format(number(12345.0)),
        "drawing": pictures.drawing_to_png(sys.argv[1]).hex(),
        "levels": pictures.levels_to_png(levels).hex(),
    }
    print(json.dumps(said))
    del application


if __name__ == "__main__":
    main()
