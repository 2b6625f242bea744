import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric.errors import CancelledError, InputError
from steadfield.algorithms.numeric.overlay import atom_of_records, overlay


def boxes(*bounds):
    return np.array([shapely.box(*four) for four in bounds], object)


def random_zoning(generator, number):
    """A Voronoi cut of the square 0..100."""
    square = shapely.box(0, 0, 100, 100)
    places = shapely.multipoints(generator.uniform(0, 100, (number, 2)))
    cells = shapely.get_parts(shapely.voronoi_polygons(places, extend_to=square))
    return shapely.intersection(cells, square)


def test_two_crossing_strips_give_four_atoms_with_the_right_zones():
    across = boxes((0, 0, 10, 4), (0, 4, 10, 10))
    along = boxes((0, 0, 3, 10), (3, 0, 10, 10))
    laid = overlay([across, along])
    areas = {
        tuple(np.flatnonzero(column)): atom.area
        for column, atom in zip(laid.membership.toarray().T, laid.atoms)
    }
    assert areas == pytest.approx({(0, 2): 12, (0, 3): 28, (1, 2): 18, (1, 3): 42}, abs=1e-3)
    assert laid.layer.tolist() == [0, 0, 1, 1]
    assert laid.slivers == 0


@pytest.mark.parametrize("seed", range(4))
def test_atoms_cover_every_zone_once_and_do_not_overlap(seed):
    generator = np.random.default_rng(seed)
    layers = [random_zoning(generator, number) for number in (5, 12, 20)]
    laid = overlay(layers, 0.001)
    area = shapely.area(laid.atoms)
    assert laid.membership @ area == pytest.approx(shapely.area(np.concatenate(layers)), abs=0.05)
    assert area.sum() == pytest.approx(shapely.union_all(laid.atoms).area)
    pairwise = shapely.STRtree(laid.atoms).query(laid.atoms, predicate="overlaps")
    assert pairwise.size == 0


@pytest.mark.parametrize("seed", range(4))
def test_membership_agrees_with_intersections_one_by_one(seed):
    generator = np.random.default_rng(seed + 10)
    layers = [random_zoning(generator, number) for number in (6, 9)]
    laid = overlay(layers, 0.001)
    zones = np.concatenate(layers)
    shared = shapely.area(shapely.intersection(zones[:, None], laid.atoms[None, :]))
    expected = shared > 0.5 * shapely.area(laid.atoms)
    assert (laid.membership.toarray() == expected).all()


def test_a_drawing_mismatch_narrower_than_the_tolerance_is_absorbed():
    hexagons = boxes((0, 0, 10, 10), (10, 0, 20, 10))
    wards = boxes((0, 0, 10.3, 10), (10.3, 0, 20, 10))
    assert len(overlay([hexagons, wards], 0.1).atoms) == 3
    laid = overlay([hexagons, wards], 0.5)
    assert len(laid.atoms) == 2
    assert (laid.slivers, laid.sliver_area) == (1, pytest.approx(3.0))
    assert sorted(laid.membership.toarray().T.tolist()) == [[0, 1, 0, 1], [1, 0, 1, 0]]
    assert shapely.area(laid.atoms).sum() == pytest.approx(200)


def test_a_long_but_wide_enough_strip_is_no_sliver():
    strip = boxes((0, 0, 1000, 0.6), (0, 0.6, 1000, 50))
    assert len(overlay([strip], 0.5).atoms) == 2


def test_a_zone_narrower_than_the_tolerance_does_not_vanish():
    zones = boxes((0, 0, 10, 0.2), (0, 0.2, 10, 10))
    laid = overlay([zones], 0.5)
    assert (laid.membership.sum(axis=1) == 1).all()


def test_ground_of_one_layer_alone_stays_an_atom_of_its_own():
    laid = overlay([boxes((0, 0, 10, 10)), boxes((5, 0, 15, 10))])
    assert sorted(map(tuple, laid.membership.toarray().T)) == [(0, 1), (1, 0), (1, 1)]


def test_zones_of_one_layer_may_overlap():
    laid = overlay([boxes((0, 0, 6, 10), (4, 0, 10, 10))])
    assert sorted(map(tuple, laid.membership.toarray().T)) == [(0, 1), (1, 0), (1, 1)]


def test_ground_in_the_same_zones_is_one_atom_in_parts():
    ring = boxes((0, 0, 10, 10))
    middle = boxes((4, 0, 6, 10))
    laid = overlay([ring, middle])
    parts = {round(atom.area): shapely.get_num_geometries(atom) for atom in laid.atoms}
    assert parts == {80: 2, 20: 1}


def test_a_bow_tie_is_repaired():
    bow_tie = shapely.Polygon([(0, 0), (10, 10), (10, 0), (0, 10)])
    laid = overlay([np.array([bow_tie], object)])
    assert shapely.area(laid.atoms).sum() == pytest.approx(50)
    assert shapely.is_valid(laid.atoms).all()


def test_records_are_found_in_their_atoms_and_border_records_counted_once():
    laid = overlay([boxes((0, 0, 10, 10), (10, 0, 20, 10))])
    atom = atom_of_records(laid.atoms, [1, 10, 19, 25], [5, 5, 5, 5])
    zone = laid.membership.toarray().argmax(axis=0)
    assert zone[atom[[0, 2]]].tolist() == [0, 1]
    assert atom[1] in (0, 1) and atom[3] == -1


def test_what_cannot_be_laid_over_is_said():
    with pytest.raises(InputError, match="Published layer 1 holds no polygons"):
        overlay([np.empty(0, object)])
    with pytest.raises(InputError, match="tolerance must be 0 or more; found -1"):
        overlay([boxes((0, 0, 1, 1))], -1)
    whole, flat = shapely.box(0, 0, 1, 1), shapely.Polygon([(0, 0), (1, 0), (2, 0)])
    words = r"layer 2 holds 1 zones without an area \(the first is number 3\)"
    with pytest.raises(InputError, match=words):
        overlay([boxes((0, 0, 1, 1)), np.array([whole, whole, flat], object)])


def test_cancelling_stops_the_overlay():
    def stop(share):
        raise CancelledError

    with pytest.raises(CancelledError):
        overlay([boxes((0, 0, 1, 1))], progress=stop)
