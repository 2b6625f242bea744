"""Cores, agreement, weight draws and zones, by brute force and closed form."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from scipy import ndimage
from steadfield.algorithms.numeric import agreement
from steadfield.algorithms.numeric.errors import CancelledError, InputError
from steadfield.algorithms.numeric.ranks import mass_rank

steady = settings(derandomize=True, deadline=None, max_examples=60)
layers = arrays.arrays(float, (5, 6), elements=st.integers(0, 9).map(float)).filter(
    lambda values: values.sum() > 0
)


def ranked(*values):
    return np.array([mass_rank(one) for one in values])


@steady
@given(layers, st.sampled_from([0.1, 0.25, 0.5, 0.8, 1.0]))
def test_core_is_the_smallest_set_of_densest_pixels_that_holds_the_share(values, share):
    core = agreement.cores(ranked(values), share)[0]
    goal = share * values.sum()
    taken = np.zeros_like(core)
    for level in np.unique(values[values > 0])[::-1]:
        if values[taken].sum() >= goal - 1e-9:
            break
        taken |= values == level
    np.testing.assert_array_equal(core, taken)


@steady
@given(layers, layers, st.tuples(st.floats(0.1, 5), st.floats(0.1, 5)))
def test_agreement_is_the_weighted_number_of_cores(first, second, weights):
    inside = agreement.cores(ranked(first, second), 0.5)
    weights = agreement.normalised_weights(weights, 2)
    expected = [
        [sum(w for w, core in zip(weights, inside) if core[r, c]) for c in range(6)]
        for r in range(5)
    ]
    np.testing.assert_allclose(agreement.agreement(inside, weights), expected, atol=1e-12)
    assert weights.mean() == pytest.approx(1)


def test_composite_of_one_weighted_layer_is_its_rank():
    ranks = ranked(np.arange(12.0).reshape(3, 4), np.arange(12.0)[::-1].reshape(3, 4))
    np.testing.assert_allclose(agreement.composite(ranks, [1, 0]), ranks[0])
    np.testing.assert_allclose(
        agreement.composite(ranks, [1, 3]), ranks[0] ** 0.25 * ranks[1] ** 0.75
    )


def test_weight_draws_meet_the_analytic_share_for_two_layers():
    ranks = np.random.default_rng(1).uniform(0, 1, (2, 20, 20))
    share, draws = 0.5, 4000
    held = agreement.hold_share(ranks, share, draws, np.random.default_rng(2))
    # w log r1 + (1 - w) log r2 > log(1 - share) with w uniform on 0 to 1
    high, low = np.log(ranks.max(axis=0)), np.log(ranks.min(axis=0))
    expected = np.clip((high - np.log(1 - share)) / (high - low), 0, 1)
    error = 4.5 * np.sqrt(expected * (1 - expected) / draws) + 1e-12
    assert (np.abs(held - expected) <= error).all()
    assert 0.1 < expected.mean() < 0.9


def test_weight_draws_meet_the_spline_formula_for_four_layers():
    # P(sum w_i x_i > t) for a flat Dirichlet w is the tail of a B-spline with knots x_i:
    # sum over i of (x_i - t)_+^(n-1) / prod_{j != i} (x_i - x_j) (Curry & Schoenberg 1966)
    ranks = np.random.default_rng(3).uniform(0.05, 1, (4, 8, 8))
    draws, limit = 4000, np.log(0.4)
    held = agreement.hold_share(ranks, 0.6, draws, np.random.default_rng(4))
    expected = np.zeros((8, 8))
    logs = np.log(ranks)
    for i in range(4):
        others = np.prod([logs[i] - logs[j] for j in range(4) if j != i], axis=0)
        expected += np.maximum(logs[i] - limit, 0) ** 3 / others
    expected = np.clip(expected, 0, 1)
    assert (
        np.abs(held - expected) <= 4.5 * np.sqrt(expected * (1 - expected) / draws) + 1e-9
    ).all()


def test_pixel_in_every_core_always_holds_and_pixel_in_none_never():
    ranks = np.array([[[0.9, 0.2, np.nan, 0.0]], [[0.8, 0.3, 0.1, 0.9]]])
    held = agreement.hold_share(ranks, 0.5, 500, np.random.default_rng(5))[0]
    assert held[0] == 1 and held[1] == 0 and held[2] == 0
    assert held[3] < 0.05  # a layer without anything there vetoes nearly every weighting


def test_whole_total_holds_wherever_every_layer_has_something():
    ranks = np.array([[[0.9, 0.2, 1e-9, 0.0, 0.0]], [[0.8, 0.0, 1e-9, 0.9, 0.0]]])
    held = agreement.hold_share(ranks, 1.0, 200, np.random.default_rng(5))[0]
    np.testing.assert_array_equal(held, [1, 0, 1, 0, 0])


def test_weight_draws_repeat_with_the_seed_and_honour_cancellation():
    ranks = np.random.default_rng(6).uniform(0, 1, (3, 30, 30))
    first, second = (
        agreement.hold_share(ranks, 0.5, 100, np.random.default_rng(7)) for _ in range(2)
    )
    np.testing.assert_array_equal(first, second)

    def stop(share):
        raise CancelledError

    with pytest.raises(CancelledError):
        agreement.hold_share(ranks, 0.5, 100, np.random.default_rng(7), stop)


def brute_zones(mask):
    """Sets of pixels connected over their sides, by flood fill."""
    left, found = {tuple(place) for place in np.argwhere(mask)}, []
    while left:
        zone, front = set(), [left.pop()]
        while front:
            row, column = front.pop()
            zone.add((row, column))
            for near in (
                (row + 1, column),
                (row - 1, column),
                (row, column + 1),
                (row, column - 1),
            ):
                if near in left:
                    left.remove(near)
                    front.append(near)
        found.append(frozenset(zone))
    return found


@pytest.mark.parametrize("seed", range(4))
def test_zones_and_their_figures_agree_with_a_flood_fill(seed):
    generator = np.random.default_rng(seed)
    values = ndimage.gaussian_filter(generator.random((3, 24, 20)), (0, 1.5, 1.5)) ** 8
    values[1, 3:6, 4:9] = np.nan
    inside = agreement.cores(ranked(*values), 0.5)
    held = generator.random((24, 20))
    zones = agreement.find_zones(values, inside, held, 2, 3)
    expected = {zone for zone in brute_zones(inside.sum(axis=0) >= 2) if len(zone) >= 3}
    found = [
        frozenset(map(tuple, np.argwhere(zones.labels == rank + 1))) for rank in range(len(zones))
    ]
    assert len(found) > 1 and set(found) == expected
    for rank, zone in enumerate(found):
        rows, columns = np.array(sorted(zone)).T
        assert zones.pixels[rank] == len(zone)
        assert zones.held[rank] == pytest.approx(held[rows, columns].mean())
        assert zones.core_count[rank] == inside[:, rows, columns].sum(axis=0).max()
        assert zones.mean_cores[rank] == pytest.approx(inside[:, rows, columns].sum(axis=0).mean())
        for layer in range(3):
            there = values[layer, rows, columns]
            assert zones.core_share[layer, rank] == inside[layer, rows, columns].mean()
            assert zones.mean_value[layer, rank] == pytest.approx(np.nanmean(there))
            part = np.nansum(there) / np.nansum(values[layer])
            assert zones.total_share[layer, rank] == pytest.approx(part)
    assert (np.diff(zones.held) <= 1e-9).all()


def test_no_place_with_enough_cores_gives_no_zones():
    values = np.zeros((2, 4, 4))
    values[0, 0, 0] = values[1, 3, 3] = 1.0
    inside = agreement.cores(ranked(*values), 0.5)
    zones = agreement.find_zones(values, inside, np.zeros((4, 4)), 2, 0)
    assert len(zones) == 0 and not zones.labels.any() and zones.mean_value.shape == (2, 0)


@pytest.mark.parametrize("share", [0.0, -1.0, 1.5])
def test_share_out_of_range_is_refused(share):
    with pytest.raises(InputError, match=f"found {share}"):
        agreement.cores(np.zeros((2, 2, 2)), share)


@pytest.mark.parametrize("weights", [[1, 2, 3], [0, 0], [-1, 2], [np.nan, 1]])
def test_unusable_weights_are_refused(weights):
    with pytest.raises(InputError, match="found"):
        agreement.normalised_weights(weights, 2)


@pytest.mark.parametrize("least", [0, 3])
def test_least_layers_out_of_range_is_refused(least):
    with pytest.raises(InputError, match=f"found {least}"):
        agreement.find_zones(
            np.ones((2, 2, 2)), np.ones((2, 2, 2), bool), np.ones((2, 2)), least, 0
        )
