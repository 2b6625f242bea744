"""Colour conversions: round trips, gamut and text forms."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from steadfield.algorithms.numeric import colour
from steadfield.algorithms.numeric.errors import InputError

steady = settings(derandomize=True, deadline=None, max_examples=60)
channels = st.tuples(*[st.floats(0, 1)] * 3)


@steady
@given(channels)
def test_srgb_returns_from_linear_and_oklab(srgb):
    np.testing.assert_allclose(colour.linear_to_srgb(colour.srgb_to_linear(srgb)), srgb, atol=1e-9)
    np.testing.assert_allclose(colour.oklab_to_srgb(colour.srgb_to_oklab(srgb)), srgb, atol=1e-6)


@steady
@given(channels)
def test_oklab_returns_from_polar_form(srgb):
    oklab = colour.srgb_to_oklab(srgb)
    np.testing.assert_allclose(
        colour.oklch_to_oklab(colour.oklab_to_oklch(oklab)), oklab, atol=1e-12
    )


@steady
@given(channels, channels)
def test_difference_is_symmetric_and_zero_only_for_equal_colours(first, second):
    first, second = colour.srgb_to_cielab(first), colour.srgb_to_cielab(second)
    there, back = colour.difference(first, second), colour.difference(second, first)
    assert there == pytest.approx(back, abs=1e-9)
    assert colour.difference(first, first) == pytest.approx(0, abs=1e-9)


@steady
@given(st.floats(0, 1), st.floats(0, 0.5), st.floats(0, 360))
def test_colours_come_into_gamut_with_lightness_and_hue_kept(lightness, chroma, hue):
    asked = colour.oklch_to_oklab([lightness, chroma, hue])
    got = colour.into_gamut(asked)
    assert colour.in_gamut(got, 1e-5)
    assert got[0] == asked[0]
    # same direction: the cross product of the chroma vectors vanishes
    assert got[1] * asked[2] - got[2] * asked[1] == pytest.approx(0, abs=1e-12)
    assert np.hypot(*got[1:]) <= np.hypot(*asked[1:]) + 1e-12


def test_colour_within_gamut_is_left_as_it_is():
    colours = colour.srgb_to_oklab(np.random.default_rng(3).uniform(0.01, 0.99, (50, 3)))
    np.testing.assert_array_equal(colour.into_gamut(colours), colours)


def test_gamut_keeps_the_largest_chroma_that_fits():
    asked = colour.oklch_to_oklab([0.6, 0.4, 140.0])
    got = colour.into_gamut(asked)
    a_little_more = got * [1, 1.001, 1.001]
    assert colour.in_gamut(got, 1e-5) and not colour.in_gamut(a_little_more, 1e-5)


def test_colours_are_written_and_read_as_hexadecimal_text():
    assert colour.to_hex(colour.from_hex("#2e7179")) == "#2e7179"
    assert colour.to_hex(np.array([[1, 1, 1], [0, 0.5, 1]])) == ["#ffffff", "#0080ff"]
    np.testing.assert_allclose(colour.from_hex("abc"), np.array([0xAA, 0xBB, 0xCC]) / 255)


@pytest.mark.parametrize("text", ["", "#12", "red", "#12345g"])
def test_other_text_is_refused_with_what_was_found(text):
    with pytest.raises(InputError, match="found"):
        colour.from_hex(text)
