import pytest

pytestmark = pytest.mark.window


def test_the_packaged_plugin_loads_runs_from_its_dialog_and_unloads(desktop):
    from steadfield.plugin.provider import ALGORITHMS

    notes = desktop("load_run_unload.py")
    assert "traceback" not in notes, notes["traceback"]
    assert notes["loaded"] is True
    assert set(ALGORITHMS) < set(notes["algorithms"])
    assert notes["ran"] is True
    assert notes["renderer"] == "singlebandpseudocolor"
    assert notes["provider after unloading"] is False
    assert notes["modules kept"] is False
