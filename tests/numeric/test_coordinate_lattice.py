"""Rounded coordinates are found, with their step, and unrounded ones raise no alarm."""

import itertools

import numpy as np
import pytest
from steadfield.algorithms.numeric.coordinate_lattice import find_lattice, resolution

COUNT = 3000


@pytest.fixture
def places():
    rng = np.random.default_rng(17)
    centres = rng.uniform(0, 20_000, size=(30, 2))
    places = centres[rng.integers(0, 30, COUNT)] + rng.normal(0, 700.0, size=(COUNT, 2))
    return np.round(places + np.array([3_840_000, 3_560_000]), 2)


@pytest.mark.parametrize(
    ("step", "share"),
    # A step that is no round number is known only by its commonest gap, so not of a few records.
    [*itertools.product([5.0, 10.0, 30.0, 100.0, 250.0, 1000.0], [1.0, 0.1, 0.03]), (92.5, 1.0)],
)
def test_rounding_of_a_share_of_the_records_is_found_with_its_step(places, step, share):
    rng = np.random.default_rng(5)
    rounded = rng.uniform(size=COUNT) < share
    offset = np.array([0.3, 0.0]) * step
    places[rounded] = np.round(places[rounded] / step) * step + offset
    lattice = find_lattice(*places.T, least_step=5.0)
    assert lattice.step == pytest.approx(step, rel=1e-6)
    assert np.array_equal(lattice.on, rounded)
    for found, value in zip((lattice.offset_x, lattice.offset_y), places[rounded][0]):
        assert abs((value - found + step / 2) % step - step / 2) < 1e-3


@pytest.mark.parametrize("step", [5.0, 10.0, 25.0, 250.0, 1000.0])
def test_coordinates_that_are_all_multiples_of_a_step_are_found(places, step):
    places = np.round(places / step) * step
    lattice = find_lattice(*places.T, least_step=5.0)
    assert lattice.step == pytest.approx(step)
    assert lattice.on.all()
    assert (lattice.offset_x, lattice.offset_y) == (0.0, 0.0)


@pytest.mark.parametrize("stored", [0.0, 0.01, 1.0])
def test_places_stored_finely_are_on_no_lattice(stored):
    for seed in range(8):
        rng = np.random.default_rng(seed)
        places = rng.uniform(0, 8000, size=(1500, 2)) + 1e6
        if stored:
            places = np.round(places / stored) * stored
        assert find_lattice(*places.T, least_step=5.0) is None


def test_rounding_coarser_than_a_coarse_resolution_is_found():
    rng = np.random.default_rng(2)
    places = np.round(rng.uniform(0, 30_000, size=(4000, 2)))
    rounded = rng.uniform(size=4000) < 0.15
    places[rounded] = 100 * np.round(places[rounded] / 100)
    lattice = find_lattice(*places.T, least_step=5.0)
    assert lattice.step == 100.0
    # Whole metres lie on a lattice of 100 m by chance once in 10,000 places.
    assert np.count_nonzero(lattice.on ^ rounded) <= 4


def test_rounded_degrees_are_found():
    rng = np.random.default_rng(3)
    degrees = rng.uniform((7.0, 53.0), (7.4, 53.3), size=(2000, 2))
    degrees[:200] = np.round(degrees[:200], 3)
    lattice = find_lattice(*degrees.T, least_step=5 / 111_000)
    assert lattice.step == pytest.approx(0.001, rel=1e-6)
    assert np.array_equal(np.flatnonzero(lattice.on), np.arange(200))


def test_people_at_one_address_are_no_lattice():
    # Fifty flats with forty people each: many equal coordinates, but few distinct places.
    rng = np.random.default_rng(6)
    doors = np.round(rng.uniform(0, 5000, size=(50, 2)), 2)
    crowd = np.repeat(doors, 40, axis=0)
    assert find_lattice(*crowd.T, least_step=5.0) is None


def test_too_few_places_say_nothing():
    assert find_lattice(np.arange(5) * 100.0, np.arange(5) * 100.0, least_step=5.0) is None


@pytest.mark.parametrize("step", [0.01, 0.5, 1.0, 20.0, 1000.0])
def test_resolution_is_the_step_of_the_stored_digits(step):
    rng = np.random.default_rng(9)
    x, y = np.round(rng.uniform(0, 1e6, size=(2, 400)) / step) * step
    assert resolution(x, y) == pytest.approx(step)


def test_resolution_of_unrounded_numbers_is_zero():
    x, y = np.random.default_rng(9).uniform(0, 1e6, size=(2, 400))
    assert resolution(x, y) == 0.0
