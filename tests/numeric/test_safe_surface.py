"""A surface against an outsider who fits its kernels and knows the map of the villages."""

import numpy as np
import pytest
from steadfield.algorithms.numeric.grid import covering
from steadfield.algorithms.numeric.safe_surface import hidden_groups, kernel_widths, safe_surface

BANDWIDTH, LEAST = 300.0, 10


def village_and_farm(seed):
    """Sixty people in a village at the origin, and one on a farm some kilometres off."""
    rng = np.random.default_rng(seed)
    angle, distance = rng.uniform(0, 2 * np.pi), rng.uniform(3000, 6000)
    farm = distance * np.array([np.cos(angle), np.sin(angle)])
    return np.vstack([rng.normal(0, 100, (60, 2)), farm]), farm


def guesses(centre, width, people):
    """Where the farm lies if all others of its group live in the heart of the village."""
    away = centre / np.hypot(*centre)
    return [people * centre, centre + away * width, centre + away * width / 1.2]


def test_a_farm_does_not_follow_from_its_groups_kernel_and_the_place_of_the_village():
    # a fit of the kernel to the raster gives its centre and width to the metre: granted
    misses = []
    for seed in range(30):
        places, farm = village_and_farm(seed)
        groups = hidden_groups(*places.T, LEAST)
        own = groups.of_record[-1]
        centre = np.array([groups.x[own], groups.y[own]])
        width = kernel_widths(BANDWIDTH, groups)[own]
        tries = guesses(centre, width, groups.contributors[own])
        misses.append([np.hypot(*(one - farm)) for one in tries])
    found = np.array(misses) < 1.5 * BANDWIDTH
    assert (found.sum(0) <= 6).all()
    assert np.median(misses, axis=0).min() > 3 * BANDWIDTH


def test_kernels_reach_over_their_groups_and_widths_come_in_steps():
    places, _ = village_and_farm(1)
    groups = hidden_groups(*places.T, LEAST)
    widths = kernel_widths(BANDWIDTH, groups)
    for number in range(len(groups.x)):
        own = places[groups.of_record == number]
        reach = np.hypot(own[:, 0] - groups.x[number], own[:, 1] - groups.y[number]).max()
        assert widths[number] >= max(reach, BANDWIDTH) * (1 - 1e-9)
    steps = 2 * np.log2(widths / BANDWIDTH)
    assert steps == pytest.approx(np.round(steps))


def test_a_surface_repeats_whatever_the_order_of_the_records():
    places, _ = village_and_farm(2)
    grid = covering((-9000, -9000, 9000, 9000), 150.0)
    turned = places[np.random.default_rng(0).permutation(len(places))]
    one, two = (
        safe_surface(*some.T, LEAST, BANDWIDTH, grid, np.random.default_rng(0)).density
        for some in (places, turned)
    )
    assert one == pytest.approx(two, rel=1e-9, abs=1e-18)
