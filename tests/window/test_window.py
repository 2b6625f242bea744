import shlex
import shutil
import subprocess

import numpy as np
import pytest

pytestmark = pytest.mark.window


def test_the_packaged_plugin_loads_runs_from_its_dialog_and_leaves_nothing_behind(desktop):
    from steadfield.plugin.provider import ALGORITHMS

    notes = desktop("load_run_unload.py")
    assert "traceback" not in notes, notes["traceback"]
    assert notes["loaded"] is True
    first, without, second = notes["first"], notes["without"], notes["second"]
    assert "steadfield" in first["providers"]
    (groups,) = first["toolbox"]
    assert {"Records", "Density", "Layers together", "Zoning variance", "Safe release"} < set(
        groups
    )
    assert sum(len(tools) for tools in groups.values()) > len(ALGORITHMS)

    assert notes["density ran"] is True and notes["variance ran"] is True, notes["dialog logs"]
    assert notes["rasters"]["Density"] == ["singlebandpseudocolor", [1]]
    # the sixth band is the verdict: does a place hold above or below whatever the cut
    assert notes["rasters"]["Zoning variance"] == ["paletted", [6]]

    assert notes["unloaded"] is True and notes["again"] is True
    assert without["providers"] == [one for one in first["providers"] if one != "steadfield"]
    assert without["toolbox"] == [] and without["modules"] == []
    assert second["providers"] == first["providers"] and second["toolbox"] == first["toolbox"]
    # the host itself may say something, about a font for one
    assert without["bar"] == second["bar"] == first["bar"]
    assert not any("needed" in sentence for sentence in first["bar"])
    added = [one for one in first["menu entries"] if one not in without["menu entries"]]
    assert added == ["Open a copy in the model designer"]
    assert second["menu entries"] == first["menu entries"]
    assert without["docks"] == second["docks"] == first["docks"]
    for title, words in notes["log"].items():
        assert "Traceback" not in words and "Python error" not in title, words


def test_a_package_that_is_too_old_is_named_in_the_window_and_the_host_goes_on(desktop, tmp_path):
    old = tmp_path / "old packages"
    (old / "shapely").mkdir(parents=True)
    (old / "shapely" / "__init__.py").write_text("__version__ = '1.8.5'\n", encoding="utf-8")
    described = old / "Shapely-1.8.5.dist-info"
    described.mkdir()
    (described / "METADATA").write_text(
        "Metadata-Version: 2.1\nName: Shapely\nVersion: 1.8.5\n", encoding="utf-8"
    )
    notes = desktop("old_package.py", first_of_path=old)
    assert "traceback" not in notes, notes["traceback"]
    (sentence,) = [sentence for sentence in notes["bar"] if "shapely" in sentence]
    for part in ("shapely", "2.0", "1.8.5", "pip install"):
        assert part in sentence
    assert notes["loaded"] is True and notes["unloaded"] is True
    assert "steadfield" not in notes["providers"] and "native" in notes["providers"]
    assert notes["buffers"] == 600
    assert sentence in notes["log"]["Steadfield"]
    for title, words in notes["log"].items():
        assert "Traceback" not in words and "Python error" not in title, words


@pytest.fixture
def german(tmp_path):
    """Settings of a system with decimal commas; a locale of the machine's own is not needed."""
    settings = {"LANG": "de_DE.UTF-8", "LC_ALL": "de_DE.UTF-8"}
    if shutil.which("localedef"):
        made = tmp_path / "locales"
        made.mkdir()
        command = ["localedef", "-i", "de_DE", "-f", "UTF-8", str(made / "de_DE.UTF-8")]
        if subprocess.run(command, capture_output=True, check=False).returncode == 0:
            settings["LOCPATH"] = str(made)
    return settings


def bands(path):
    from osgeo import gdal

    return gdal.Open(str(path)).ReadAsArray()


def test_history_commands_and_decimal_commas_give_the_same_result_as_the_english_command_line(
    desktop, command_line, german, tmp_path
):
    notes = desktop("replay.py", locale="de_DE", **german)
    assert "traceback" not in notes, notes["traceback"]
    assert notes["locale"] == ["de_DE", "1,5"]
    assert notes["ran"] is True and notes["replayed"] == [True], notes["dialog logs"]

    english = {
        **notes["parameters"],
        "VARIANCE": str(tmp_path / "english.tif"),
        "TABLE": str(tmp_path / "english.gpkg"),
        "REPORT": str(tmp_path / "english.html"),
    }
    words = [f"--{name}={value}" for name, value in english.items()]
    command_line("run", "steadfield:gridvariance", *words)
    wanted = bands(tmp_path / "english.tif")
    assert wanted.shape[0] == 7 and np.isfinite(wanted).all() and np.ptp(wanted[0]) > 0
    for name in ("first", "replayed", "from python"):
        np.testing.assert_array_equal(bands(tmp_path / f"{name}.tif"), wanted, err_msg=name)
    if "command" in notes:
        program, *words = shlex.split(notes["command"])
        assert program == "qgis_process"
        command_line(*words)
        copied = bands(notes["parameters"]["VARIANCE"])
        np.testing.assert_array_equal(copied, wanted)

    page = (tmp_path / "from the dialog.html").read_text(encoding="utf-8")
    assert page == (tmp_path / "english.html").read_text(encoding="utf-8")
    assert "40.25" in page and "40,25" not in page
