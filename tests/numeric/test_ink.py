"""The blend of layers as inks: its properties, its default inks and its warnings."""

from itertools import combinations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from steadfield.algorithms.numeric import colour, ink, ranks
from steadfield.algorithms.numeric.errors import InputError

steady = settings(derandomize=True, deadline=None, max_examples=60)
strength = st.floats(0, 1, width=32)
stacks = st.integers(1, 6).flatmap(
    lambda count: st.lists(strength, min_size=count, max_size=count).map(np.array)
)
# half a level of 255 in each of colour and opacity
ONE_LEVEL = 1.01 / 255


def lightness(colours):
    return colour.srgb_to_oklab(colours)[..., 0]


@steady
@given(stacks, st.randoms(use_true_random=False))
def test_order_of_layers_does_not_matter(strengths, random):
    inks = ink.default_inks(len(strengths))
    order = list(range(len(strengths)))
    random.shuffle(order)
    np.testing.assert_allclose(
        ink.blend(strengths[order], inks[order]), ink.blend(strengths, inks), atol=1e-9
    )


@steady
@given(stacks.filter(lambda strengths: len(strengths) < 6))
def test_layer_of_zeros_changes_nothing(strengths):
    inks = ink.default_inks(6)[: len(strengths) + 1]
    with_zeros = ink.blend(np.append(strengths, 0.0), inks)
    np.testing.assert_allclose(with_zeros, ink.blend(strengths, inks[:-1]), rtol=0, atol=1e-15)


@steady
@given(stacks.filter(lambda strengths: len(strengths) < 6), strength)
def test_lightness_never_rises_when_a_layer_is_added(strengths, added):
    inks = ink.default_inks(6)[: len(strengths) + 1]
    before = ink.blend(strengths, inks[:-1])
    after = ink.blend(np.append(strengths, added), inks)
    assert after[0] <= before[0]
    # and so on the finished picture, up to the rounding to 255 levels
    pictures = [
        ink.over(ink.rgba(np.asarray(stack, np.float32)[:, None], inks[: len(stack)]))
        for stack in (strengths, np.append(strengths, added))
    ]
    assert lightness(pictures[1])[0] <= lightness(pictures[0])[0] + 0.006


@pytest.mark.parametrize("count", range(1, 7))
def test_one_layer_alone_shows_its_pure_ink(count):
    inks = ink.default_inks(count)
    for layer in range(count):
        strengths = np.zeros((count, 1), np.float32)
        strengths[layer] = 1.0
        shown = ink.over(ink.rgba(strengths, inks))[0]
        np.testing.assert_allclose(shown, inks[layer], atol=ONE_LEVEL)


@steady
@given(st.integers(0, 5), st.floats(0.02, 1))
def test_one_layer_alone_keeps_the_hue_of_its_ink_at_any_strength(layer, value):
    inks = ink.default_inks(6)
    strengths = np.zeros(6)
    strengths[layer] = value
    mixed = ink.blend(strengths, inks)
    pure = colour.srgb_to_oklab(inks[layer])
    assert mixed[1] * pure[2] - mixed[2] * pure[1] == pytest.approx(0, abs=1e-9)
    assert mixed[0] == pytest.approx(1 - value * 0.4, abs=1e-9)  # half way from 1 to 0.2 at 1


@steady
@given(stacks)
def test_blend_follows_its_published_formulas(strengths):
    inks = ink.default_inks(len(strengths))
    coverage = 1 - np.prod(1 - strengths / 2)
    mixed = ink.blend(strengths, inks)
    assert mixed[0] == pytest.approx(1 - 0.8 * coverage, abs=1e-9)
    if strengths.sum() > 0:
        mean = (strengths[:, None] * colour.srgb_to_oklab(inks)[:, 1:]).sum(0) / strengths.sum()
        assert mixed[1] * mean[1] - mixed[2] * mean[0] == pytest.approx(0, abs=1e-9)


@steady
@given(st.integers(0, 2**31))
def test_picture_over_white_paper_is_the_blended_colour(seed):
    strengths = np.random.default_rng(seed).random((4, 60), np.float32) ** 2
    inks = ink.default_inks(4)
    intended = np.clip(colour.oklab_to_srgb(ink.blend(strengths, inks)), 0, 1)
    shown = ink.over(ink.rgba(strengths, inks))
    np.testing.assert_allclose(shown, intended, atol=1.6 / 255)


def test_opacity_is_nil_on_bare_paper_and_rises_with_strength():
    strengths = np.zeros((3, 21), np.float32)
    strengths[1] = np.linspace(0, 1, 21)
    levels = ink.rgba(strengths, ink.default_inks(3))
    opacity = levels[3].astype(int)
    assert opacity[0] == 0 and opacity[-1] < 255
    assert (np.diff(opacity) > 0).all()


def test_base_map_shows_through_faint_ink():
    strengths = np.full((2, 1), 0.1, np.float32)
    levels = ink.rgba(strengths, ink.default_inks(2))
    dark = ink.over(levels, (0.0, 0.0, 0.0))
    light = ink.over(levels, (1.0, 1.0, 1.0))
    assert (light - dark).min() > 0.7


def test_picture_of_values_is_the_picture_of_their_strengths():
    values = np.random.default_rng(9).gamma(1, 2, (3, 300, 400)).astype(np.float32)
    values[1, :20] = np.nan
    tables = []
    for one in values:
        masses = ranks.new_masses()
        ranks.add_to_masses(masses, one)
        tables.append(ranks.strength_table(masses))
    strengths = [ranks.look_up(table, one) for table, one in zip(tables, values)]
    inks = ink.default_inks(3)
    np.testing.assert_array_equal(
        ink.rgba_of_values(values, tables, inks), ink.rgba(strengths, inks)
    )


def test_picture_keeps_the_shape_of_the_layers():
    assert ink.rgba(np.zeros((2, 3, 5), np.float32), ink.default_inks(2)).shape == (4, 3, 5)


@pytest.mark.parametrize("count", range(2, 7))
def test_default_inks_are_at_least_15_apart_in_normal_vision(count):
    inks = ink.default_inks(count)
    assert len(inks) == count
    apart = [
        colour.difference(*colour.srgb_to_cielab(inks[[first, second]]))
        for first, second in combinations(range(count), 2)
    ]
    assert min(apart) >= 15
    assert ink.smallest_difference(inks) == pytest.approx(min(apart))


@pytest.mark.parametrize("count", range(2, 7))
@pytest.mark.parametrize("vision", colour.VISIONS[1:])
def test_default_inks_are_told_apart_under_simulated_deficiencies(count, vision):
    assert ink.smallest_difference(ink.default_inks(count), vision) > 8


@pytest.mark.parametrize("count", range(2, 7))
def test_default_inks_have_the_common_lightness_and_fit_the_display(count):
    inks = ink.default_inks(count)
    np.testing.assert_allclose(lightness(inks), ink.INK_LIGHTNESS, atol=0.004)
    assert inks.min() > 0.1  # none needs to hide the base map


@steady
@given(st.tuples(*[st.floats(0, 1)] * 3))
def test_any_colour_becomes_an_ink_of_the_common_lightness(srgb):
    made = ink.as_inks([srgb])
    assert lightness(made)[0] == pytest.approx(ink.INK_LIGHTNESS, abs=2e-3)


@steady
@given(st.lists(st.tuples(*[st.floats(0, 1)] * 3), min_size=2, max_size=6), st.integers(0, 2**31))
def test_blends_of_any_inks_fit_the_display(colours, seed):
    inks = ink.as_inks(colours)
    strengths = np.random.default_rng(seed).random((len(inks), 100))
    assert colour.in_gamut(ink.blend(strengths, inks), 1e-5).all()
    shown = ink.over(ink.rgba(strengths, inks))
    intended = np.clip(colour.oklab_to_srgb(ink.blend(strengths, inks)), 0, 1)
    np.testing.assert_allclose(shown, intended, atol=2.5 / 255)


def test_swatches_name_each_ink_each_pair_and_all_together():
    sets, srgb = ink.swatches(ink.default_inks(4))
    expected = [(i,) for i in range(4)] + list(combinations(range(4), 2)) + [(0, 1, 2, 3)]
    assert sets == expected and len(srgb) == len(sets)
    # two inks in full cover 3/4, all four 15/16
    assert lightness(srgb)[4:10] == pytest.approx(1 - 0.8 * 3 / 4, abs=1e-3)
    assert lightness(srgb)[10] == pytest.approx(1 - 0.8 * 15 / 16, abs=1e-3)


def test_readability_gives_the_smallest_difference_for_each_vision():
    inks = ink.default_inks(5)
    found = ink.readability(inks)
    assert [one.vision for one in found] == list(colour.VISIONS)
    for one in found:
        seen = colour.srgb_to_cielab(colour.seen_as(inks, one.vision))
        pair = list(one.ink_pair)
        # the picture shows inks at the exact common lightness, not rounded to 255 levels
        assert one.inks == pytest.approx(float(colour.difference(*seen[pair])), abs=0.1)
        assert one.inks == pytest.approx(ink.smallest_difference(inks, one.vision), abs=0.1)
        assert one.mixtures <= one.inks


def test_default_inks_raise_no_warning():
    for count in range(2, 7):
        assert ink.warnings_in_words(ink.default_inks(count), "abcdef"[:count]) == []


def test_equal_inks_are_named_in_a_warning():
    inks = ink.as_inks([colour.from_hex(text) for text in ("#2277cc", "#2379cc", "#cc4422")])
    words = ink.warnings_in_words(inks, ["falls", "lamps", "ice"])
    assert len(words) == 1
    assert "“falls”" in words[0] and "“lamps”" in words[0] and "cannot be told apart" in words[0]


def test_red_and_green_of_one_lightness_warn_about_deficiencies_only():
    # a dull red and a dull green, which lie near one line of confusion of deuteranopia
    inks = ink.as_inks([colour.from_hex("#b96365"), colour.from_hex("#4a925c")])
    words = ink.warnings_in_words(inks, ["a", "b"])
    assert words and all("Readers with" in one for one in words)


@pytest.mark.parametrize("count", [0, 7])
def test_other_numbers_of_layers_are_refused(count):
    with pytest.raises(InputError, match=f"found {count}"):
        ink.default_inks(count)
