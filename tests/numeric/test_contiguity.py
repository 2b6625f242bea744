import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely import affinity
from steadfield.algorithms.numeric.contiguity import contiguity, from_pairs
from steadfield.algorithms.numeric.errors import InputError


def board(rows, columns, side=100.0, turn=0.0):
    boxes = [
        shapely.box(c * side, r * side, (c + 1) * side, (r + 1) * side)
        for r in range(rows)
        for c in range(columns)
    ]
    return np.array([affinity.rotate(b, turn, origin=(0, 0)) for b in boxes], dtype=object)


def rook_pairs(rows, columns):
    index = np.arange(rows * columns).reshape(rows, columns)
    across = np.c_[index[:, :-1].ravel(), index[:, 1:].ravel()]
    down = np.c_[index[:-1].ravel(), index[1:].ravel()]
    return {tuple(pair) for pair in np.r_[across, down].tolist()}


def as_set(found):
    return {tuple(pair) for pair in found.pairs.tolist()}


def brute_force_pairs(polygons):
    """Every pair, by the length of the intersection of the outlines."""
    pairs = set()
    for i in range(len(polygons)):
        for j in range(i + 1, len(polygons)):
            common = shapely.intersection(
                shapely.boundary(polygons[i]), shapely.boundary(polygons[j])
            )
            if shapely.length(common) > 1e-6:
                pairs.add((i, j))
    return pairs


@pytest.mark.parametrize("turn", [0.0, 17.3])
def test_a_board_has_its_edges_and_no_corners(turn):
    found = contiguity(board(5, 7, turn=turn))
    assert as_set(found) == rook_pairs(5, 7)
    np.testing.assert_allclose(found.border, 100.0)
    assert found.findings.sentences() == []


def voronoi_cells(seed, many):
    places = np.random.default_rng(seed).random((many, 2)) * 1000
    cells = shapely.voronoi_polygons(shapely.multipoints(places))
    return np.array([c.intersection(shapely.box(0, 0, 1000, 1000)) for c in cells.geoms])


@settings(max_examples=15, deadline=None, derandomize=True)
@given(st.integers(0, 10_000), st.integers(5, 60))
def test_random_cells_have_the_pairs_that_a_search_of_all_pairs_finds(seed, many):
    cells = voronoi_cells(seed, many)
    found = contiguity(cells, tolerance=0)
    expected = brute_force_pairs(cells)
    # the two differ at most where a shared border is shorter than rounding can tell
    for i, j in as_set(found) ^ expected:
        assert shapely.length(shapely.intersection(cells[i], cells[j])) < 1e-4


def test_shared_lengths_match_the_intersection_of_the_outlines():
    cells = voronoi_cells(3, 40)
    found = contiguity(cells, tolerance=0)
    for (i, j), length in zip(found.pairs, found.border):
        assert length == pytest.approx(shapely.length(cells[i].intersection(cells[j])), rel=1e-6)


def test_a_border_with_vertices_on_one_side_only_is_found_exactly():
    big = shapely.box(0, 0, 300, 100)
    small = [shapely.box(x, 100, x + 100, 200) for x in (0, 100, 200)]
    found = contiguity(np.array([big, *small]), tolerance=0)
    assert as_set(found) == {(0, 1), (0, 2), (0, 3), (1, 2), (2, 3)}
    np.testing.assert_allclose(found.border, 100)
    assert found.findings.gaps == found.findings.slivers == 0


def test_slivers_and_gaps_within_the_tolerance_are_matched_and_counted():
    left = shapely.box(0, 0, 100, 100)
    gap = shapely.box(100.05, 0, 200, 100)
    sliver = shapely.box(199.96, 0, 300, 100)
    found = contiguity(np.array([left, gap, sliver]))  # tolerance: 0.1
    assert as_set(found) == {(0, 1), (1, 2)}
    assert (found.findings.gaps, found.findings.slivers) == (1, 1)
    assert any("gaps" in s for s in found.findings.sentences())


def test_jittered_boards_have_the_pairs_of_the_clean_one():
    generator = np.random.default_rng(12)
    clean = board(8, 8)
    corners = [shapely.get_coordinates(cell)[:-1] for cell in clean]
    dirty = [shapely.Polygon(xy + generator.uniform(-0.02, 0.02, xy.shape)) for xy in corners]
    assert as_set(contiguity(np.array(dirty))) == rook_pairs(8, 8)


def test_beyond_the_tolerance_a_gap_separates():
    pieces = np.array([shapely.box(0, 0, 100, 100), shapely.box(101, 0, 200, 100)])
    with pytest.raises(InputError, match="none of the 2 units shares a border"):
        contiguity(pieces)


def test_duplicates_are_neighbours_and_counted():
    cells = board(2, 2)
    found = contiguity(np.r_[cells, cells[3:]])
    assert as_set(found) == rook_pairs(2, 2) | {(3, 4), (1, 4), (2, 4)}
    assert found.findings.duplicates == 1


def test_a_unit_that_lies_on_others_counts_as_their_neighbour():
    cells = board(1, 3)
    found = contiguity(np.r_[cells, [shapely.box(90, 20, 110, 60)]])
    assert as_set(found) == rook_pairs(1, 3) | {(0, 3), (1, 3)}
    assert found.findings.overlaps == 2


def test_outlines_that_cross_themselves_are_repaired_and_counted():
    cells = board(1, 3)
    cells[1] = shapely.Polygon([(100, 0), (200, 100), (200, 0), (100, 100)])
    found = contiguity(cells)
    assert found.findings.repaired == 1
    assert as_set(found) == {(0, 1), (1, 2)}


def test_islands_join_their_nearest_neighbour_and_are_counted():
    cells = board(2, 3)
    far = [shapely.box(900, 0, 950, 100), shapely.box(950, 0, 990, 100)]
    alone = [shapely.box(0, 500, 50, 560)]
    found = contiguity(np.r_[cells, far, alone])
    joined = {(2, 6), (3, 8)}
    assert as_set(found) == rook_pairs(2, 3) | {(6, 7)} | joined
    assert found.findings.islands == 2
    assert found.components()[0] == 1
    assert contiguity(np.r_[cells, far, alone], join_islands=False).components()[0] == 3


@settings(max_examples=15, deadline=None, derandomize=True)
@given(st.integers(0, 10_000))
def test_joining_connects_any_archipelago_with_one_join_less_than_islands(seed):
    generator = np.random.default_rng(seed)
    cells = board(6, 6)
    kept = cells[generator.random(36) < 0.55]
    if len(kept) < 2:
        return
    try:
        apart = contiguity(kept, join_islands=False)
    except InputError:
        return
    joined = contiguity(kept)
    assert joined.components()[0] == 1
    assert joined.findings.islands == apart.components()[0] - 1
    assert len(joined.pairs) == len(apart.pairs) + joined.findings.islands


def test_multipart_units_and_holes_have_all_their_borders():
    ring = shapely.box(0, 0, 300, 300) - shapely.box(100, 100, 200, 200)
    core = shapely.box(100, 100, 200, 200)
    outside = shapely.MultiPolygon([shapely.box(300, 0, 400, 50), shapely.box(300, 80, 400, 99)])
    found = contiguity(np.array([ring, core, outside]), tolerance=0)
    assert as_set(found) == {(0, 1), (0, 2)}
    np.testing.assert_allclose(found.border, [400, 69])


def test_within_removes_the_pairs_that_cross_groups():
    found = from_pairs(4, [(0, 1), (1, 2), (3, 2)]).within(np.array(["a", "a", "b", "b"]))
    assert as_set(found) == {(0, 1), (2, 3)}


def test_pairs_come_sorted_and_once():
    found = from_pairs(3, [(2, 1), (1, 2), (0, 1), (1, 1)], [1.0, 2.0, 5.0, 9.0])
    assert found.pairs.tolist() == [[0, 1], [1, 2]]
    assert found.border.tolist() == [5.0, 3.0]


@pytest.mark.parametrize(
    ("units", "words"),
    [
        ([shapely.box(0, 0, 1, 1)], "at least two"),
        ([shapely.box(0, 0, 1, 1), shapely.Polygon()], "no area"),
        ([shapely.box(0, 0, 1, 1), None], "no area"),
        ([shapely.box(0, 0, 1, 1), shapely.box(1, 1, 2, 2)], "shares a border"),
    ],
)
def test_units_that_cannot_be_grouped_are_refused_in_words(units, words):
    with pytest.raises(InputError, match=words):
        contiguity(np.array(units, dtype=object))
