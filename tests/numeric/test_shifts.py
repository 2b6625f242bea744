"""The shift test of two cores: every shift by brute force, level and power by simulation."""

import numpy as np
import pytest
from scipy import ndimage
from steadfield.algorithms.numeric import shifts
from steadfield.algorithms.numeric.agreement import cores
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.ranks import mass_rank


def brute_shifts(first, second, first_known, second_known):
    """Correlation times root of the number of pixels compared, one shift at a time."""
    scores, areas = [], []
    limit = (first_known & second_known).sum() / 2
    for down in range(first.shape[0]):
        for right in range(first.shape[1]):
            moved = np.roll(second, (-down, -right), (0, 1))
            both = first_known & np.roll(second_known, (-down, -right), (0, 1))
            if both.sum() < limit:
                continue
            pair = np.corrcoef(first[both], moved[both])[0, 1] * np.sqrt(both.sum())
            scores.append(pair)
            areas.append((first & moved & both).sum())
    return np.array(scores), np.array(areas)


def test_shift_test_counts_every_shift_of_a_masked_grid():
    generator = np.random.default_rng(8)
    known = np.ones((2, 14, 11), bool)
    known[0, :5, :4] = known[1, -4:, -3:] = False
    core = (ndimage.gaussian_filter(generator.random((2, 14, 11)), (0, 1, 1)) > 0.5) & known
    scores, _ = brute_shifts(*core, *known)
    test = shifts.shift_test(*core, *known)
    assert test.shifts == len(scores)
    assert test.p_value == pytest.approx((scores >= scores[0] - 1e-9).mean())
    assert test.shared == (core[0] & core[1]).sum()


def test_shift_test_on_a_whole_grid_compares_shared_areas():
    core = ndimage.gaussian_filter(np.random.default_rng(9).random((2, 12, 15)), (0, 1, 1)) > 0.5
    whole = np.ones((12, 15), bool)
    _, areas = brute_shifts(*core, whole, whole)
    test = shifts.shift_test(*core)
    assert test.p_value == pytest.approx((areas >= areas[0]).mean())
    # over all shifts of a torus every pixel of one meets every pixel of the other
    assert test.expected == pytest.approx(core[0].sum() * core[1].sum() / core[0].size)
    assert (test.low, test.high) == pytest.approx(tuple(np.quantile(areas, [0.025, 0.975])))


def test_large_grids_are_thinned_to_nearly_the_same_answer(monkeypatch):
    core = np.array(simulated_cores(np.random.default_rng(10), 96, 6, np.ones((96, 96), bool), 0.6))
    exact = shifts.shift_test(*core)
    monkeypatch.setattr(shifts, "MOST_SHIFTED_PIXELS", 96 * 96 // 8)
    thinned = shifts.shift_test(*core)
    assert thinned.shifts < exact.shifts and thinned.shared == exact.shared
    assert thinned.p_value == pytest.approx(exact.p_value, abs=0.02)
    assert thinned.expected == pytest.approx(exact.expected, rel=0.1)


def simulated_cores(generator, side, smoothness, known, dependence=0.0):
    """Cores of two log-Gaussian densities cut from a larger field, so without joined edges."""
    margin = 4 * smoothness
    wide = side + 2 * margin
    field = ndimage.gaussian_filter(
        generator.standard_normal((2, wide, wide)), (0, smoothness, smoothness)
    )[:, margin:-margin, margin:-margin]
    field = field / field.std(axis=(1, 2), keepdims=True)
    field[1] = dependence * field[0] + np.sqrt(1 - dependence**2) * field[1]
    values = np.where(known, np.exp(1.2 * field), np.nan)
    return cores(np.array([mass_rank(one) for one in values]), 0.5)


def town(side):
    """An irregular area that fills about half of its grid."""
    y, x = np.mgrid[:side, :side] / side
    return ((x - 0.5) ** 2 / 0.2 + (y - 0.45) ** 2 / 0.12 < 1) & ~((x > 0.55) & (y > 0.55))


@pytest.mark.parametrize("shape", ["whole", "town"])
def test_shift_test_keeps_its_nominal_level_on_unrelated_layers(shape):
    side, runs = 40, 700
    known = np.ones((side, side), bool) if shape == "whole" else town(side)
    generator = np.random.default_rng(11)
    rejected = [
        shifts.shift_test(*simulated_cores(generator, side, 3, known), known, known).p_value <= 0.05
        for _ in range(runs)
    ]
    assert 0.03 <= np.mean(rejected) <= 0.07


@pytest.mark.parametrize("shape", ["whole", "town"])
def test_shift_test_finds_related_layers(shape):
    known = np.ones((40, 40), bool) if shape == "whole" else town(40)
    generator = np.random.default_rng(12)
    found = [
        shifts.shift_test(*simulated_cores(generator, 40, 3, known, 0.8), known, known).p_value
        <= 0.05
        for _ in range(60)
    ]
    assert np.mean(found) > 0.85


def test_layers_without_a_common_pixel_are_refused():
    left = np.array([[True, False]])
    with pytest.raises(InputError, match="no pixel with data in common"):
        shifts.shift_test(left, ~left, left, ~left)
