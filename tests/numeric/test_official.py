import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric.contiguity import contiguity
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.official import (
    pieces_of,
    share_as_extreme,
    zones_from_codes,
    zones_from_polygons,
)
from steadfield.algorithms.numeric.scenarios import problem
from steadfield.algorithms.numeric.zone_results import place_official
from steadfield.algorithms.numeric.zones import recipes, simulate


def board(rows, columns):
    return np.array(
        [shapely.box(c, r, c + 1, r + 1) for r in range(rows) for c in range(columns)], object
    )


def test_codes_become_numbers_and_nulls_no_zone():
    labels, names = zones_from_codes(np.array(["b", None, "a", "b"], object))
    assert labels.tolist() == [1, -1, 0, 1] and names == ["a", "b"]
    labels, _ = zones_from_codes(np.array([4.0, np.nan, 2.0]))
    assert labels.tolist() == [1, -1, 0]


def test_a_unit_goes_to_the_zone_with_most_of_its_area():
    units = board(1, 4)
    zones = np.array(
        [shapely.box(0, 0, 1.3, 1), shapely.box(1.3, 0, 3, 1), shapely.box(9, 9, 10, 10)]
    )
    labels, share = zones_from_polygons(units, zones)
    assert labels.tolist() == [0, 1, 1, -1]
    np.testing.assert_allclose(share, [1, 0.7, 1, 0])


def test_zones_that_cross_themselves_are_repaired():
    bow = shapely.Polygon([(0, 0), (2, 1), (2, 0), (0, 1)])
    labels, _ = zones_from_polygons(board(1, 2), np.array([bow]))
    assert labels.tolist() == [0, 0]


def test_zones_elsewhere_are_refused():
    with pytest.raises(InputError, match="OFFICIAL_ZONES"):
        zones_from_polygons(board(1, 2), np.array([shapely.box(50, 50, 60, 60)]))


def test_pieces_are_counted():
    graph = contiguity(board(2, 3))
    labels = np.array([0, 1, 0, 0, 1, 1])
    assert pieces_of(graph, labels).tolist() == [2, 1]
    assert pieces_of(graph, np.array([0, -1, 0, 0, -1, 0])).tolist() == [2]


def test_units_in_no_official_zone_count_for_nothing_there():
    graph = contiguity(board(3, 3))
    totals = np.full(9, 100)
    counts = np.array([9, 1, 2, 3, 4, 5, 6, 7, 50])
    made = problem(graph, counts, totals, budget=0.3, generator=np.random.default_rng(0))
    labels = np.array([0, 0, 0, 1, 1, 1, 2, 2, -1])
    row = place_official(made, labels, ()).statistics
    names = made.statistic_names()
    assert row[names.index("largest")] == pytest.approx(13 / 200)
    assert row[names.index("zones")] == 3
    plan = recipes(made, "grown", [3], np.random.default_rng(1))
    run = simulate(made, plan, 20, 1, official=labels)
    assert run.official.zone_count == 3
    assert np.isfinite(run.official.places).all()


def test_share_as_extreme_is_uniform_for_a_zoning_like_the_others():
    # eight statistics, some of them nearly the same: one by one, a zoning like the others stands
    # outside the middle 95 % of some of them far oftener than 1 time in 20
    rng = np.random.default_rng(61)
    shares, apart = [], []
    for _ in range(600):
        base = rng.normal(size=(100, 4))
        values = np.column_stack([base, base + 0.3 * rng.normal(size=(100, 4))])
        values[rng.random(100) < 0.05, 3] = np.nan
        shares.append(share_as_extreme(values[1:], values[0]))
        places = (values[1:] < values[0]).mean(axis=0)
        apart.append(np.any((places < 0.025) | (places > 0.975)))
    # 600 draws: 5 % is known to 0.9 %, 50 % to 2 %
    assert np.mean(np.array(shares) <= 0.05) == pytest.approx(0.05, abs=0.03)
    assert np.mean(np.array(shares) <= 0.5) == pytest.approx(0.5, abs=0.07)
    assert np.mean(apart) > 0.2


def test_share_as_extreme_of_a_few_zonings_by_hand():
    # first statistic: 0, 1, 2, 3, 9 with mean 3 and variance (9 + 4 + 1 + 0 + 36) / 5 = 10; second:
    # 1, 5, 3, 3, 3 with mean 3 and variance 8 / 5. Farthest, squared, in variances: official
    # 36 / 10, the others 9 / 10 and 4 / 1.6 = 2.5, the larger of 4 / 10 and 2.5, 1 / 10, and 0
    simulated = np.array([[0.0, 1.0], [1.0, 5.0], [2.0, 3.0], [3.0, 3.0]])
    assert share_as_extreme(simulated, np.array([9.0, 3.0])) == pytest.approx(1 / 5)
    # 1 / 10 off, where the others lie 36, 9, 4 and 0 tenths off
    assert share_as_extreme(np.array([[9.0], [0.0], [1.0], [3.0]]), np.array([2.0])) == 4 / 5
    assert share_as_extreme(np.ones((4, 1)), np.ones(1)) == 1.0
    assert np.isnan(share_as_extreme(simulated, np.full(2, np.nan)))
