"""The real desktop window on a virtual screen, with the packaged plugin in a fresh profile."""

import json
import os
import shutil
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent.parent
HOST = shutil.which("qgis.bin") or shutil.which("qgis")
SETTINGS = """[PythonPlugins]
steadfield=true

[UI]
allowScriptExecution=true

[qgis]
checkVersion=false
enableMacros=0

[%General]
locale\\overrideFlag=true
locale\\userLocale=en_US
"""


@pytest.fixture(scope="session")
def package(tmp_path_factory):
    """The plugin zip, built and checked by its own command."""
    folder = tmp_path_factory.mktemp("package")
    command = [sys.executable, str(ROOT / "tools" / "package.py"), str(folder)]
    built = subprocess.run(command, capture_output=True, text=True, check=False)
    assert built.returncode == 0, built.stderr
    return Path(built.stdout.strip())


@pytest.fixture
def desktop(package, tmp_path):
    """Run a script inside the real window of a fresh profile; returns what the script noted.

    The folder of the profile has a space in its name.
    """
    if HOST is None or shutil.which("Xvfb") is None:
        pytest.skip("needs the desktop and Xvfb")
    profiles = tmp_path / "a profile folder"
    home = profiles / "profiles" / "default"
    plugins = home / "python" / "plugins"
    plugins.mkdir(parents=True)
    with zipfile.ZipFile(package) as zipped:
        zipped.extractall(plugins)
    (home / "QGIS").mkdir()
    (home / "QGIS" / "QGIS3.ini").write_text(SETTINGS, encoding="utf-8")
    pictures = Path(os.environ.get("STEADFIELD_PICTURES", ROOT / "build" / "window"))
    pictures.mkdir(parents=True, exist_ok=True)

    def start(script, **settings):
        notes = tmp_path / "notes.json"
        environment = {
            **os.environ,
            "QT_QPA_PLATFORM": "xcb",
            "PYTHONPATH": os.pathsep.join(path for path in sys.path if "site-packages" in path),
            "STEADFIELD_NOTES": str(notes),
            "STEADFIELD_PICTURES": str(pictures),
            "STEADFIELD_FOLDER": str(tmp_path),
            "STEADFIELD_SCRIPTS": str(Path(__file__).parent),
            "HOME": str(tmp_path),
            "LIBGL_ALWAYS_SOFTWARE": "1",
            **settings,
        }
        code = [HOST, "--noversioncheck", "--nologo", "--profiles-path", str(profiles)]
        code += ["--code", str(Path(__file__).parent / script)]
        command = ["xvfb-run", "-a", "-s", "-screen 0 1400x900x24", *code]
        ran = subprocess.run(
            command, env=environment, capture_output=True, text=True, timeout=150, check=False
        )
        assert notes.exists(), f"{ran.returncode}: {ran.stdout[-3000:]}{ran.stderr[-3000:]}"
        return json.loads(notes.read_text(encoding="utf-8"))

    return start
