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


def test_ready_models_open_in_the_designer_without_overlap_and_run_from_the_dialog(desktop):
    notes = desktop("open_models.py")
    assert "traceback" not in notes, notes["traceback"]
    assert len(notes["opened"]) == 5
    for name, boxes in notes["opened"].items():
        assert name in notes["offered"]
        assert len(boxes) > 8
        assert overlapping(boxes) == [], name
    assert notes["ran"]
    assert notes["loaded"]["Picture"] == "multibandcolor"
    assert notes["loaded"]["Density, first layer"] == "singlebandpseudocolor"
    assert notes["loaded"]["Zones of agreement"] != "singleSymbol"
    for key in "ABC":
        assert f">hill {key}<" in notes["legend"]
