"""Groups for a safe surface, and the attack that they have to withstand."""

import numpy as np
import pytest
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.microaggregation import neighbour_groups
from steadfield.algorithms.numeric.pinpoint import attack, holes, peaks, sharpened
from steadfield.algorithms.numeric.surface import (
    adaptive_surface,
    effective_records,
    squared_surface,
)

GRID = Grid(0, 8000, 40, 200, 200)


def hamlets(seed, lone=50):
    """Clusters and addresses that lie by themselves."""
    rng = np.random.default_rng(seed)
    hearts = rng.uniform(500, 7500, (10, 2))
    return np.concatenate(
        [
            hearts[rng.integers(0, 10, 1200)] + rng.normal(0, 220, (1200, 2)),
            rng.uniform(200, 7800, (lone, 2)),
        ]
    )


@pytest.mark.parametrize("seed", range(6))
def test_every_group_has_enough_effective_contributors_by_a_loop(seed):
    rng = np.random.default_rng(seed)
    places = rng.normal(0, 1, (400, 2))
    weights = rng.exponential(1, 400) * (rng.random(400) > 0.1)
    people = rng.integers(-1, 150, 400)
    least = int(rng.integers(3, 9))
    groups = neighbour_groups(*places.T, least, weights, people)
    used = groups.of_record >= 0
    assert (used == ((people >= 0) & (weights > 0))).all()
    groups_of = {p: len(set(groups.of_record[used & (people == p)])) for p in set(people[used])}
    assert max(groups_of.values()) > 1
    for group in range(len(groups.x)):
        own = np.flatnonzero(groups.of_record == group)
        by_person = {}
        for record in own:
            by_person.setdefault(people[record], []).append(record)
        w = np.array([weights[records].sum() for records in by_person.values()])
        assert w.sum() ** 2 / (w**2).sum() >= least - 1e-9
        assert groups.contributors[group] == len(by_person) >= least
        assert groups.total[group] == pytest.approx(w.sum())
        shared = np.array([groups_of[person] for person in by_person])
        assert groups.squares[group] == pytest.approx((w**2 * shared).sum())
        centre = np.mean([places[records].mean(0) for records in by_person.values()], axis=0)
        assert (groups.x[group], groups.y[group]) == pytest.approx(tuple(centre))
        reach = np.hypot(*(places[own] - centre).T)
        assert groups.radius[group] == pytest.approx(reach.max())
        # the floor of the bandwidth: the least-th nearest contributor lies no further
        nearest = np.sort([np.hypot(*(places[people == p] - centre).T).min()
                           for p in np.unique(people[used])])  # fmt: skip
        assert nearest[least - 1] <= groups.radius[group] + 1e-9


def test_groups_are_small():
    groups = neighbour_groups(*hamlets(1).T, 10)
    assert groups.contributors.max() < 3 * 10
    assert np.median(groups.radius) < 300


def test_a_holder_of_most_is_refused():
    with pytest.raises(InputError, match="LEAST_COUNT"):
        neighbour_groups(np.arange(30.0), np.zeros(30), 10, np.r_[1e6, np.ones(29)])


def safe_surface(places, least=10, bandwidth=120.0):
    groups = neighbour_groups(*places.T, least)
    widths = np.maximum(bandwidth, groups.radius)
    surface = adaptive_surface(groups.x, groups.y, groups.total, widths, GRID)
    squares = squared_surface(groups.x, groups.y, np.sqrt(groups.squares), widths, GRID)
    return np.where(surface < 2e-4 * surface.max(), 0, surface), effective_records(surface, squares)


@pytest.mark.parametrize("seed", range(3))
def test_everywhere_on_the_surface_stand_enough_contributors(seed):
    surface, effective = safe_surface(hamlets(seed))
    assert effective[surface > 0].min() >= 10 * 0.999


@pytest.mark.parametrize("seed", range(3))
def test_the_attack_finds_no_address_in_a_grouped_surface(seed):
    places = hamlets(seed)
    surface, _ = safe_surface(places)
    result = attack(surface, GRID, [120, 240], *places.T, None, 60, np.random.default_rng(seed))
    assert result.addresses > 20
    assert not result.succeeded


def test_the_attack_finds_most_addresses_in_a_plain_surface():
    places = hamlets(0)
    surface = adaptive_surface(*places.T, 1.0, 120.0, GRID)
    result = attack(surface, GRID, [120], *places.T, None, 60, np.random.default_rng(0))
    assert result.succeeded
    assert result.found > 0.6 * result.addresses


def test_the_attack_sees_the_hole_that_a_mask_cuts_around_an_address():
    """A wide kernel alone with a mask below the least count points at the address by its hole."""
    rng = np.random.default_rng(2)
    angle = rng.uniform(0, 2 * np.pi, 900)
    far = rng.normal(1500, 120, 900)
    places = np.column_stack([4000 + far * np.cos(angle), 4000 + far * np.sin(angle)])
    places = np.vstack([places, [4100.0, 3950.0]])
    widths = np.full(len(places), 250.0)
    widths[-1] = 600.0
    surface = adaptive_surface(*places.T, 1.0, widths, GRID)
    squares = squared_surface(*places.T, 1.0, widths, GRID)
    masked = np.where(effective_records(surface, squares) < 10, np.nan, surface)
    rows, columns = holes(masked)
    east = GRID.left + (columns + 0.5) * GRID.cell
    north = GRID.top - (rows + 0.5) * GRID.cell
    assert np.hypot(east - 4100, north - 3950).min() < 120
    safe, _ = safe_surface(places)
    assert np.isfinite(safe).all()


def test_peaks_and_sharpening_find_the_centres_of_two_overlapping_kernels():
    grid = Grid(0, 1000, 10, 100, 100)
    x, y = np.array([440.0, 580.0]), np.array([503.0, 503.0])
    surface = adaptive_surface(x, y, 1.0, 80.0, grid)
    rows, columns = peaks(sharpened(surface, 8.0, rounds=300))
    found = np.column_stack([(columns + 0.5) * 10, 1000 - (rows + 0.5) * 10])
    for place in zip(x, y):
        assert np.hypot(*(found - place).T).min() < 12
