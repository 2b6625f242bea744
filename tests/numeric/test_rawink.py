"""Accumulated ink of overlapping features."""

import numpy as np
import pytest
from steadfield.algorithms.numeric import rawink
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.grid import Grid


def test_ink_adds_up_coat_by_coat():
    paper = 1.0
    for coats in range(6):
        assert rawink.accumulate(coats, 0.3) == pytest.approx(1 - paper, abs=1e-7)
        paper *= 1 - 0.3  # each coat leaves 0.7 of the paper that was left


def test_chosen_ink_nearly_fills_the_fullest_hundredth_of_pixels():
    counts = np.random.default_rng(1).poisson(3, 20_000)
    ink, full = rawink.ink_per_feature(counts)
    used = counts[counts > 0]
    assert np.mean(used <= full) >= 0.99 > np.mean(used < full)
    assert rawink.accumulate(full, ink) == pytest.approx(0.95, abs=1e-6)


def test_single_features_stay_short_of_full():
    ink, full = rawink.ink_per_feature(np.array([0, 1, 0, 1]))
    assert full == 3 and ink < 0.64


@pytest.mark.parametrize("ink", [0.05, 0.3, 0.95, 1.0])
def test_number_that_fills_is_the_least_that_reaches_nearly_full(ink):
    needed = rawink.features_to_fill(ink)
    assert rawink.accumulate(needed, ink) >= 0.95 - 1e-6
    assert needed == 1 or rawink.accumulate(needed - 1, ink) < 0.95


def test_points_are_counted_on_the_pixel_that_holds_them():
    grid = Grid(100.0, 50.0, 10.0, 3, 4)
    generator = np.random.default_rng(2)
    x, y = generator.uniform(90, 150, 400), generator.uniform(10, 60, 400)
    expected = np.zeros((3, 4), int)
    for one_x, one_y in zip(x, y):
        for row in range(3):
            for column in range(4):
                left, top = 100 + 10 * column, 50 - 10 * row
                expected[row, column] += left <= one_x < left + 10 and top - 10 < one_y <= top
    np.testing.assert_array_equal(rawink.count_points(x, y, grid), expected)
    assert 0 < expected.sum() < 400


def test_empty_grid_and_impossible_ink_are_refused():
    with pytest.raises(InputError, match="No feature lies on the grid"):
        rawink.ink_per_feature(np.zeros((2, 2)))
    with pytest.raises(InputError, match=r"found 1\.5"):
        rawink.accumulate([1], 1.5)
