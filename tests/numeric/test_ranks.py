"""Mass ranks: exact ones by brute force, and ranks from tables against exact ones."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from steadfield.algorithms.numeric import ranks
from steadfield.algorithms.numeric.errors import InputError

steady = settings(derandomize=True, deadline=None, max_examples=60)
SMALL = arrays.arrays(float, st.integers(1, 30), elements=st.integers(0, 6).map(float)).filter(
    lambda values: values.sum() > 0
)


def brute_rank(values):
    """Share of the total in pixels no denser, one pixel at a time."""
    return np.array([values[values <= value].sum() / values.sum() for value in values])


def table_of(values, stretch="share"):
    masses = ranks.new_masses()
    ranks.add_to_masses(masses, values)
    return masses, ranks.strength_table(masses, stretch)


@steady
@given(SMALL)
def test_mass_rank_is_the_share_of_the_total_in_pixels_no_denser(values):
    np.testing.assert_allclose(ranks.mass_rank(values), brute_rank(values), atol=1e-12)


@steady
@given(SMALL)
def test_rank_from_a_table_is_exact_for_values_in_bins_of_their_own(values):
    _, table = table_of(values)
    np.testing.assert_allclose(ranks.look_up(table, values), brute_rank(values), atol=1e-6)


def test_rank_from_a_table_is_within_the_stated_step_of_the_exact_one():
    values = np.random.default_rng(5).gamma(0.7, 2.0, 60_000)
    masses, table = table_of(values)
    step = ranks.coarsest_rank_step(masses)
    error = np.abs(ranks.look_up(table, values) - ranks.mass_rank(values.astype(np.float32)))
    assert error.max() <= step + 1e-6
    assert step < 0.005


def test_masses_added_block_by_block_are_those_of_the_whole():
    values = np.random.default_rng(6).lognormal(0, 3, (64, 50)).astype(np.float32)
    whole, blocks = ranks.new_masses(), ranks.new_masses()
    ranks.add_to_masses(whole, values)
    for start in range(0, 64, 10):
        ranks.add_to_masses(blocks, values[start : start + 10])
    np.testing.assert_allclose(blocks, whole, rtol=1e-12)
    assert whole.sum() == pytest.approx(values.sum(dtype=float), rel=1e-12)


@pytest.mark.parametrize("stretch", ranks.STRETCHES)
def test_no_data_and_values_not_above_zero_have_no_strength(stretch):
    values = np.array([np.nan, 0.0, -0.0, -3.0, -np.inf, np.inf, 1.0, 4.0, -np.nan], np.float32)
    masses, table = table_of(values, stretch)
    strengths = ranks.look_up(table, values)
    np.testing.assert_array_equal(strengths[[0, 1, 2, 3, 4, 5, 8]], 0.0)
    assert 0 < strengths[6] < strengths[7] == 1.0
    assert ranks.negative_mass(masses) == -3.0


@pytest.mark.parametrize("scale", [1e-30, 1e-9, 1.0, 1e12])
@pytest.mark.parametrize("stretch", ranks.STRETCHES)
def test_strength_does_not_depend_on_the_unit(stretch, scale):
    values = np.random.default_rng(7).gamma(1.0, 1.0, 4000)
    _, first = table_of(values, stretch)
    _, second = table_of(values * scale, stretch)
    np.testing.assert_allclose(
        ranks.look_up(first, values), ranks.look_up(second, values * scale), atol=2e-3
    )


def test_linear_and_logarithmic_strengths_follow_their_formulas():
    values = np.random.default_rng(8).uniform(0.01, 10, 5000)
    share = values / values.max()
    _, linear = table_of(values, "linear")
    _, logarithmic = table_of(values, "logarithmic")
    np.testing.assert_allclose(ranks.look_up(linear, values), share, rtol=6e-4)
    expected = np.log(1 + 1000 * share) / np.log(1001)
    np.testing.assert_allclose(ranks.look_up(logarithmic, values), expected, atol=2e-4)


@pytest.mark.parametrize("values", [[0.0, 0.0], [np.nan, np.nan], [-1.0, 0.0]])
def test_layer_without_a_value_above_zero_is_refused(values):
    with pytest.raises(InputError, match="no value above 0"):
        ranks.mass_rank(values)
    with pytest.raises(InputError, match="no value above 0"):
        table_of(np.array(values))
