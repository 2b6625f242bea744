import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric.contiguity import contiguity
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.official import (
    pieces_of,
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
