"""Highest-density levels and regions: shares held, ties, no data, nesting."""

import math

import numpy as np
import pytest
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.outlines import density_levels, density_regions


def bumps():
    y, x = np.mgrid[0:80, 0:100]
    first = np.exp(-((x - 30) ** 2 + (y - 40) ** 2) / (2 * 8**2))
    second = 0.7 * np.exp(-((x - 75) ** 2 + (y - 30) ** 2) / (2 * 6**2))
    return first + second


def test_levels_hold_at_least_the_share_and_one_pixel_less_does_not():
    density = bumps()
    total = density.sum()
    for level in density_levels(density, [0.05, 0.5, 0.9, 0.999]):
        inside = density >= level.threshold
        assert inside.sum() == level.pixels
        assert density[inside].sum() / total == pytest.approx(level.held, rel=1e-12)
        assert level.held >= level.share
        assert density[density > level.threshold].sum() / total < level.share


def test_no_set_of_so_few_pixels_holds_more():
    density = np.random.default_rng(4).gamma(1.0, size=(6, 7))
    (level,) = density_levels(density, [0.6])
    densest = np.sort(density.ravel())[::-1]
    assert densest[: level.pixels].sum() >= 0.6 * density.sum()
    assert densest[: level.pixels - 1].sum() < 0.6 * density.sum()


def test_threshold_of_a_normal_density_is_that_of_the_closed_form():
    # the region of a round normal law that holds a share p ends where density = peak * (1 - p)
    cell, sigma = 0.05, 1.0
    axis = np.arange(-6, 6, cell) + cell / 2
    density = np.exp(-(axis[:, None] ** 2 + axis**2) / 2) / (2 * math.pi)
    for level in density_levels(density, [0.25, 0.5, 0.95]):
        assert level.threshold == pytest.approx((1 - level.share) / (2 * math.pi), rel=0.01)
        area = level.pixels * cell**2
        assert area == pytest.approx(-2 * math.pi * sigma**2 * math.log(1 - level.share), rel=0.01)


def test_equal_pixels_are_all_in_or_all_out():
    density = np.array([[4.0, 2.0, 2.0], [2.0, 1.0, 1.0]])
    (level,) = density_levels(density, [0.4])
    assert level.pixels == 4
    assert level.held == pytest.approx(10 / 12)


def test_a_share_that_a_set_holds_exactly_takes_that_set():
    density = np.full((1, 10), 0.1) * np.r_[4, 1, 1, 1, 1, 0.5, 0.5, 0.5, 0.25, 0.25]
    levels = density_levels(density, [0.4, 0.8, 1.0])
    assert [level.pixels for level in levels] == [1, 5, 10]
    assert [level.held for level in levels] == pytest.approx([0.4, 0.8, 1.0], rel=1e-12)


def test_no_data_and_zero_hold_nothing():
    density = np.array([[np.nan, 3.0, 0.0], [np.nan, 1.0, 0.0]])
    (level,) = density_levels(density, [1.0])
    assert level.pixels == 2 and level.threshold == 1.0
    regions = density_regions(density, [level], 10.0)
    assert regions.labels[0].tolist() == [[0, 1, 0], [0, 1, 0]]
    assert regions.area.tolist() == [200.0]


def test_regions_add_up_to_their_level_and_nest():
    density = bumps()
    levels = density_levels(density, [0.5, 0.9, 0.2])
    regions = density_regions(density, levels, 5.0)
    for position, level in enumerate(levels):
        own = regions.level == position
        assert regions.share[own].sum() == pytest.approx(level.held, rel=1e-12)
        assert regions.area[own].sum() == pytest.approx(level.pixels * 25.0)
        assert regions.rank[own].tolist() == list(range(1, own.sum() + 1))
        assert np.all(np.diff(regions.share[own]) <= 0)
    wide, middle, narrow = (regions.labels[position] > 0 for position in (1, 0, 2))
    assert np.all(wide[middle]) and np.all(middle[narrow])


def test_each_region_is_described_from_its_own_pixels():
    density = bumps()
    levels = density_levels(density, [0.5])
    regions = density_regions(density, levels, 1.0)
    assert len(regions.share) == 2
    for number in range(2):
        inside = regions.labels[0] == number + 1
        assert regions.share[number] == pytest.approx(density[inside].sum() / density.sum())
        assert regions.area[number] == inside.sum()
        assert regions.peak[number] == density[inside].max()
    assert regions.peak_column.tolist() == [30, 75]
    assert regions.peak_row.tolist() == [40, 30]


def test_pixels_that_meet_at_a_corner_are_two_regions():
    density = np.array([[1.0, 0.0], [0.0, 2.0]])
    regions = density_regions(density, density_levels(density, [1.0]), 1.0)
    assert regions.labels[0].tolist() == [[2, 0], [0, 1]]


@pytest.mark.parametrize(
    ("density", "shares", "words"),
    [
        ([[1.0, 2.0]], [0.0], "Shares"),
        ([[1.0, 2.0]], [50.0], "Shares"),
        ([[1.0, 2.0]], [], "Shares"),
        ([[np.nan, 0.0]], [0.5], "no value above 0"),
        ([[1.0, -2.0]], [0.5], r"below 0 \(down to -2\)"),
        ([[1.0, np.inf]], [0.5], "infinite"),
    ],
)
def test_what_cannot_be_outlined_is_refused_in_words(density, shares, words):
    with pytest.raises(InputError, match=words):
        density_levels(np.array(density), shares)
