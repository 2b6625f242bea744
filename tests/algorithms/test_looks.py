"""Classes of maps are told apart with any colour vision and in grey print.

Colours as dichromats see them: Machado, Oliveira & Fernandes (2009); differences: CIEDE2000. Both
are checked against their sources in tests/published. That 15 units are plainly different side by
side, and that grey print needs as much in lightness, is common practice, no source.
"""

import numpy as np
import pytest
from steadfield.algorithms import densityratio, recordcheck_page, releaseaudit_page
from steadfield.algorithms.numeric import colour
from steadfield.algorithms.safehexagons_layers import REASONS
from steadfield.plugin import looks
from steadfield.plugin.looks import VERDICTS

CLASSES = {
    "verdicts": list(VERDICTS.values()),
    "areas of a density ratio": [shade for _, shade, _ in densityratio.CLASSES],
    "reasons of the custodian": list(REASONS.values()),
    "risks of an audit": list(releaseaudit_page.FILLS.values()),
    "faults of records": list(recordcheck_page.COLOURS),
}
# maps whose classes are few enough to survive without colour
GREY = [name for name in CLASSES if name != "faults of records"]


def least_difference(values, distance):
    first, second = np.triu_indices(len(values), 1)
    return distance(values[first], values[second]).min()


@pytest.mark.parametrize("vision", ["normal", *colour.DEFICIENCIES])
@pytest.mark.parametrize("name", CLASSES)
def test_classes_differ_plainly_with_every_colour_vision(name, vision):
    seen = colour.seen_as(np.array([colour.from_hex(shade) for shade in CLASSES[name]]), vision)
    assert least_difference(colour.srgb_to_cielab(seen), colour.difference) >= 15


@pytest.mark.parametrize("name", GREY)
def test_classes_differ_plainly_in_grey_print(name):
    shades = np.array([colour.from_hex(shade) for shade in CLASSES[name]])
    lightness = colour.srgb_to_cielab(shades)[:, 0]
    assert least_difference(lightness, lambda first, second: abs(first - second)) >= 13


def test_classes_of_points_differ_in_shape_as_well_as_in_colour(point_layer):
    shades = CLASSES["faults of records"][: len(looks.MARKERS)]
    look = looks.categories("kind", [(shade, shade, shade) for shade in shades])
    points = point_layer([0.0], [0.0], kind=["a"])
    look(points)
    # a symbol lives as long as its category
    categories = points.renderer().categories()
    symbols = [category.symbol() for category in categories]
    assert len({one.symbolLayer(0).shape() for one in symbols}) == len(shades)
    assert [one.color().name() for one in symbols] == shades
