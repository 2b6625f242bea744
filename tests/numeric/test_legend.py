"""The legend holds every ink, every mixture and every name, as a well-formed drawing."""

from itertools import combinations
from xml.etree import ElementTree

import numpy as np
import pytest
from steadfield.algorithms.numeric import colour, ink, legend
from steadfield.algorithms.numeric.errors import InputError

SVG = "{http://www.w3.org/2000/svg}"
WORDS = {
    "title": "Three layers of Ostermoor",
    "faint": "faint",
    "full": "full",
    "scale": "full is the densest place",
    "pairs": "Where two layers meet",
    "pairs_note": "column and row",
    "all": "all together",
}
NAMES = ["Falls & stumbles", "Unlit <paths>", "Ice", "Benches", "Kerbs", "Steps"]


def drawn(count, names=None, strengths=None):
    text = legend.draw_legend(
        ink.default_inks(count),
        names or NAMES[:count],
        ["per km²"] * count,
        WORDS,
        strengths,
    )
    return ElementTree.fromstring(text.encode())


def fills(drawing):
    return [rectangle.get("fill") for rectangle in drawing.iter(f"{SVG}rect")]


def in_full(members, count):
    strengths = np.zeros(count)
    strengths[list(members)] = 1.0
    return colour.to_hex(
        np.clip(colour.oklab_to_srgb(ink.blend(strengths, ink.default_inks(count))), 0, 1)
    )


@pytest.mark.parametrize("count", range(2, 7))
def test_legend_shows_each_ink_each_mixture_and_all_together(count):
    shown = fills(drawn(count))
    for layer, text in enumerate(colour.to_hex(ink.default_inks(count))):
        assert in_full([layer], count) in shown
        nearest = min(np.abs(colour.from_hex(fill) - colour.from_hex(text)).max() for fill in shown)
        assert nearest <= 1.01 / 255
    for pair in combinations(range(count), 2):
        assert in_full(pair, count) in shown
    assert in_full(range(count), count) in shown


@pytest.mark.parametrize("count", range(2, 7))
def test_legend_names_layers_and_units(count):
    written = [text.text for text in drawn(count).iter(f"{SVG}text")]
    for name in NAMES[:count]:
        assert name in written
    assert written.count("per km²") == count
    assert WORDS["title"] in written and WORDS["pairs"] in written


@pytest.mark.parametrize("count", [1, 2, 6])
def test_everything_lies_on_the_page(count):
    long_name = "An exceedingly long name of a layer that nobody would type by hand, and more"
    drawing = drawn(count, [long_name] * count)
    _, _, width, height = map(float, drawing.get("viewBox").split())
    assert drawing.get("width") == "96mm" and drawing.get("height") == f"{height:.3f}mm"
    for rectangle in drawing.iter(f"{SVG}rect"):
        assert float(rectangle.get("x", 0)) + float(rectangle.get("width")) <= width + 1e-6
        assert float(rectangle.get("y", 0)) + float(rectangle.get("height")) <= height + 1e-6
    for text in drawing.iter(f"{SVG}text"):
        assert 0 < float(text.get("y")) < height


@pytest.mark.parametrize(
    "name",
    [
        "An exceedingly long name of a layer that nobody would type by hand, and more",
        "density_of_falls_and_stumbles_at_home_and_outdoors",
    ],
)
def test_no_line_runs_off_the_page_in_the_widest_font(name):
    """Measured by the outlines of DejaVu Sans, which ships with matplotlib."""
    outlines = pytest.importorskip("matplotlib.textpath")
    font = pytest.importorskip("matplotlib.font_manager").FontProperties
    text = legend.draw_legend(
        ink.default_inks(3),
        [name] * 3,
        ["records per square kilometre"] * 3,
        {**WORDS, "title": f"{name} and {name}", "scale": name, "pairs_note": f"{name}, {name}"},
    )
    drawing = ElementTree.fromstring(text.encode())
    width = float(drawing.get("viewBox").split()[2])
    for line in drawing.iter(f"{SVG}text"):
        weight = "bold" if line.get("font-weight") == "600" else "normal"
        shape = font(family="DejaVu Sans", weight=weight, size=float(line.get("font-size")))
        taken = outlines.TextPath((0, 0), line.text, prop=shape).get_extents().width
        if line.get("text-anchor") == "start":
            assert float(line.get("x")) + taken <= width, line.text


def test_a_name_with_characters_that_the_format_forbids_leaves_it_well_formed():
    told = "".join(drawn(2, ["bell\x07</text><script>", "end\uffff"]).itertext())
    assert "bell\ufffd</text><script>" in told
    assert "end\ufffd" in told


def test_ramp_darkens_from_faint_to_full():
    ramp = fills(drawn(2))[1 : 1 + legend.STEPS]
    lightness = [colour.srgb_to_oklab(colour.from_hex(fill))[0] for fill in ramp]
    assert (np.diff(lightness) < 0).all()


def test_reduced_strength_of_a_layer_shows_in_the_legend():
    shown = fills(drawn(2, strengths=[1.0, 0.5]))
    assert in_full([0], 2) in shown and in_full([1], 2) not in shown


def test_missing_unit_is_refused():
    with pytest.raises(InputError, match="found 2, 2 and 1"):
        legend.draw_legend(ink.default_inks(2), ["a", "b"], ["per km²"], WORDS)
