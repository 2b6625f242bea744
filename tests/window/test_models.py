import pytest

pytestmark = pytest.mark.window


def overlapping(boxes):
    """Pairs of boxes that lie over each other."""
    return [
        (one[0], other[0])
        for place, one in enumerate(boxes)
        for other in boxes[place + 1 :]
        if min(one[3], other[3]) > max(one[1], other[1])
        and min(one[4], other[4]) > max(one[2], other[2])
    ]


def test_ready_models_open_in_the_designer_by_menu_too_and_run_from_the_dialog(desktop):
    notes = desktop("open_models.py")
    assert "traceback" not in notes, notes["traceback"]
    assert len(notes["opened"]) == 5
    for name, boxes in notes["opened"].items():
        assert name in notes["offered"]
        assert len(boxes) > 8
        assert overlapping(boxes) == [], name
    entry = "Open a copy in the model designer"
    assert entry in notes["menu of a model"]
    assert entry not in notes["menu of a tool"] and len(notes["menu of a tool"]) > 1
    (copy,) = notes["copies"]
    # without a file of its own it cannot be saved over the plugin's
    assert copy["file"] == "" and copy["valid"]
    assert copy["name"] == "Release only what the audit passes"
    assert copy["steps"] == copy["steps of the model"] and len(copy["steps"]) > 5
    assert notes["ran"]
    assert notes["loaded"]["Picture"] == "multibandcolor"
    assert notes["loaded"]["Density, first layer"] == "singlebandpseudocolor"
    assert notes["loaded"]["Zones of agreement"] != "singleSymbol"
    for key in "ABC":
        assert f">hill {key}<" in notes["legend"]
