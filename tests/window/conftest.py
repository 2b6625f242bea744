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
# the wrapper of Debian 12 hands on an option that this program does not know
PROCESS = shutil.which("qgis_process.bin") or shutil.which("qgis_process")
SETTINGS = """[PythonPlugins]
steadfield=true

[UI]
allowScriptExecution=true

[qgis]
checkVersion=false
enableMacros=0

[locale]
overrideFlag=true
userLocale={locale}
globalLocale={locale}
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
def profile(package, tmp_path):
    """A fresh profile with the plugin in it; a space is in the name of its folder."""
    profiles = tmp_path / "a profile folder"
    home = profiles / "profiles" / "default"
    plugins = home / "python" / "plugins"
    plugins.mkdir(parents=True)
    with zipfile.ZipFile(package) as zipped:
        zipped.extractall(plugins)
    (home / "QGIS").mkdir()
    write_settings(profiles, "en_US")
    return profiles


def write_settings(profiles, locale):
    """Enable the plugin and choose the language and the number format."""
    target = profiles / "profiles" / "default" / "QGIS" / "QGIS3.ini"
    target.write_text(SETTINGS.format(locale=locale), encoding="utf-8")


@pytest.fixture
def desktop(profile, tmp_path):
    """Run a script inside the real window; returns what the script noted."""
    if HOST is None or shutil.which("Xvfb") is None:
        pytest.skip("needs the desktop and Xvfb")
    pictures = Path(os.environ.get("STEADFIELD_PICTURES", ROOT / "build" / "window"))
    pictures.mkdir(parents=True, exist_ok=True)

    def start(script, locale="en_US", first_of_path=None, **settings):
        write_settings(profile, locale)
        search = [path for path in sys.path if "site-packages" in path]
        if first_of_path is not None:
            search.insert(0, str(first_of_path))
        notes = tmp_path / "notes.json"
        environment = {
            **os.environ,
            "QT_QPA_PLATFORM": "xcb",
            "PYTHONPATH": os.pathsep.join(search),
            "STEADFIELD_NOTES": str(notes),
            "STEADFIELD_PICTURES": str(pictures),
            "STEADFIELD_FOLDER": str(tmp_path),
            "STEADFIELD_SCRIPTS": str(Path(__file__).parent),
            "HOME": str(tmp_path),
            "LIBGL_ALWAYS_SOFTWARE": "1",
            **settings,
        }
        code = [HOST, "--noversioncheck", "--nologo", "--profiles-path", str(profile)]
        code += ["--code", str(Path(__file__).parent / script)]
        command = ["xvfb-run", "-a", "-s", "-screen 0 1400x900x24", *code]
        ran = subprocess.run(
            command, env=environment, capture_output=True, text=True, timeout=150, check=False
        )
        assert notes.exists(), f"{ran.returncode}: {ran.stdout[-3000:]}{ran.stderr[-3000:]}"
        return json.loads(notes.read_text(encoding="utf-8"))

    return start


@pytest.fixture
def headless(profile, tmp_path):
    """Environment of the command line of the host with the fresh profile."""
    if PROCESS is None:
        pytest.skip("needs the command line of the host")
    return {
        **os.environ,
        "QT_QPA_PLATFORM": "offscreen",
        "PYTHONPATH": os.pathsep.join(path for path in sys.path if "site-packages" in path),
        "QGIS_CUSTOM_CONFIG_PATH": str(profile),
        "HOME": str(tmp_path),
        "LC_ALL": "C.UTF-8",
    }


@pytest.fixture
def command_line(headless):
    """Run the command line of the host with the same profile; returns what it said."""

    def run(*words):
        ran = subprocess.run(
            [PROCESS, *words],
            env=headless,
            capture_output=True,
            text=True,
            timeout=100,
            check=False,
        )
        assert ran.returncode == 0, ran.stdout[-2000:] + ran.stderr[-2000:]
        return ran.stdout

    return run
