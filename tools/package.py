"""Build the plugin zip and check it: ``python3 tools/package.py [folder]``."""

import ast
import configparser
import re
import sys
import zipfile
from pathlib import Path

from host_rules import broken_rules

ROOT = Path(__file__).resolve().parent.parent
PARTS = ["plugin", "algorithms", "icons"]
FILES = ["__init__.py", "metadata.txt", "LICENSE", "README.md", "CHANGELOG.md"]
ENDINGS = {".py", ".txt", ".md", ".svg", ".model3", ".html", ".css", ".png", ""}
LANGUAGES = re.compile(r"steadfield/plugin/i18n/steadfield_[\w@]+\.(ts|qm)")
NEEDED = [
    "name",
    "qgisMinimumVersion",
    "qgisMaximumVersion",
    "description",
    "about",
    "version",
    "author",
    "email",
    "repository",
    "tracker",
    "supportsQt6",
    "hasProcessingProvider",
    "icon",
]


def contents():
    """Files of the package, as pairs (path, name in the zip)."""
    chosen = [ROOT / name for name in FILES]
    for part in PARTS:
        chosen.extend(path for path in sorted((ROOT / part).rglob("*")) if path.is_file())
    return [
        (path, "steadfield/" + path.relative_to(ROOT).as_posix())
        for path in chosen
        if "__pycache__" not in path.parts
    ]


def problems():
    """What is wrong with the package, in words; empty when it may be released."""
    found = []
    metadata = configparser.ConfigParser()
    metadata.read(ROOT / "metadata.txt", encoding="utf-8")
    for key in NEEDED:
        if not metadata.get("general", key, fallback="").strip():
            found.append(f"metadata.txt has no {key}")
    if not re.fullmatch(r"\d+\.\d+\.\d+", metadata.get("general", "version", fallback="")):
        found.append("metadata.txt: the version is not of the form 1.2.3")
    if not (ROOT / metadata.get("general", "icon", fallback="none")).is_file():
        found.append("metadata.txt names an icon that is not there")
    for path, name in contents():
        if not path.exists():
            found.append(f"{name} is missing")
        elif LANGUAGES.fullmatch(name):
            # what is compiled comes with what it was compiled from
            if not path.with_suffix(".ts").exists():
                found.append(f"{name} comes without its source, the .ts file")
        elif path.suffix not in ENDINGS:
            found.append(f"{name} is of a kind that does not belong into the package")
        elif path.suffix == ".py":
            found.extend(_problems_of_module(path, name))
    return found


def _problems_of_module(path, name):
    text = path.read_text(encoding="utf-8")
    found = broken_rules(text, name)
    for node in ast.walk(ast.parse(text)):
        modules = []
        if isinstance(node, ast.Import):
            modules = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.level == 0:
            modules = [node.module]
        found.extend(
            f"{name} imports {module}; take it from qgis.PyQt"
            for module in modules
            if module.startswith(("PyQt5", "PyQt6"))
        )
        if "algorithms/numeric" in name:
            found.extend(
                f"{name} imports {module}: the core never meets the host"
                for module in modules
                if module.split(".")[0] in ("qgis", "osgeo", "processing", "matplotlib")
            )
    return found


def build(folder):
    """Write the zip; returns its path."""
    metadata = configparser.ConfigParser()
    metadata.read(ROOT / "metadata.txt", encoding="utf-8")
    folder.mkdir(parents=True, exist_ok=True)
    target = folder / f"steadfield-{metadata['general']['version']}.zip"
    with zipfile.ZipFile(target, "w", zipfile.ZIP_DEFLATED) as package:
        for path, name in contents():
            # a fixed date makes two builds of one state the same to the byte
            entry = zipfile.ZipInfo(name, (2020, 1, 1, 0, 0, 0))
            entry.compress_type = zipfile.ZIP_DEFLATED
            entry.external_attr = 0o644 << 16
            package.writestr(entry, path.read_bytes())
    return target


if __name__ == "__main__":
    wrong = problems()
    for line in wrong:
        print(line, file=sys.stderr)
    if wrong:
        sys.exit(1)
    print(build(Path(sys.argv[1]) if len(sys.argv) > 1 else ROOT / "build"))
