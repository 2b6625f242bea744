"""The package: what is in it, and that its modules say nothing a host version would refuse."""

import ast
import importlib
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent.parent
MODULES = sorted([*(ROOT / "plugin").glob("*.py"), *(ROOT / "algorithms").glob("*.py")])


@pytest.fixture(scope="module")
def tools():
    """The tools folder, importable for the time of these tests."""
    sys.path.insert(0, str(ROOT / "tools"))
    yield
    sys.path.remove(str(ROOT / "tools"))


@pytest.fixture(scope="module")
def broken_rules(tools):
    from host_rules import broken_rules

    return broken_rules


# Qt 6 keeps scoped enums only (PyQt 6 reference, "Differences Between PyQt6 and PyQt5")
@pytest.mark.parametrize(
    ("text", "named"),
    [
        ("from qgis.PyQt.QtCore import Qt\nside = Qt.AlignLeft", "Qt.AlignLeft"),
        ("from qgis.PyQt.QtCore import Qt\npaint(Qt.red)", "Qt.red"),
        ("from qgis.PyQt.QtGui import QImage\nQImage(1, 1, QImage.Format_ARGB32)", "QImage.Format"),
        ("from qgis.core import QgsWkbTypes\nif kind == QgsWkbTypes.Point:\n    pass", ".Point"),
        ("from qgis.core import QgsWkbTypes\nkind = QgsWkbTypes.Type.Point", None),
        ("from qgis.core import QgsRuleBasedRenderer as R\nR.Rule(None)", None),
        ("from qgis.core import Qgis\nversion = Qgis.QGIS_VERSION", None),
        ("dialog.exec_()", "exec_"),
        ("from qgis.PyQt.QtCore import QRegExp", "QRegExp"),
        ("from qgis.PyQt.QtCore import QVariant", "plugin/host.py"),
        ("from ..plugin.host import is_null", None),
    ],
)
def test_what_qt_6_would_refuse_is_named_and_what_both_accept_passes(broken_rules, text, named):
    found = broken_rules(text, "a module")
    if named is None:
        assert found == []
    else:
        assert len(found) == 1 and named in found[0]


def test_the_package_has_no_problem_and_holds_what_runs_and_nothing_else(tools, tmp_path):
    import package

    assert package.problems() == []
    built = package.build(tmp_path / "one")
    assert built.read_bytes() == package.build(tmp_path / "two").read_bytes()
    with zipfile.ZipFile(built) as zipped:
        names = zipped.namelist()
    assert {name.split("/")[0] for name in names} == {"steadfield"}
    assert {name.split("/")[1] for name in names} == {
        "__init__.py", "metadata.txt", "LICENSE", "README.md", "CHANGELOG.md",
        "plugin", "algorithms", "icons",
    }  # fmt: skip
    assert not [name for name in names if name.endswith((".so", ".dll", ".pyc", ".exe"))]


@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.stem)
def test_every_enum_of_a_module_exists_in_this_host(path):
    if path.name == "host.py":
        pytest.skip("chooses by version")
    tree = ast.parse(path.read_text(encoding="utf-8"))
    origin = {
        alias.asname or alias.name: (node.module, alias.name)
        for node in ast.walk(tree)
        if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("qgis.")
        for alias in node.names
    }
    for node in ast.walk(tree):
        chain = []
        while isinstance(node, ast.Attribute):
            chain.insert(0, node.attr)
            node = node.value
        if isinstance(node, ast.Name) and node.id in origin and chain:
            module, name = origin[node.id]
            value = getattr(importlib.import_module(module), name)
            for one in chain[:2] if chain[0][0].isupper() else chain[:1]:
                assert hasattr(value, one), f"{name}.{'.'.join(chain)}"
                value = getattr(value, one)
