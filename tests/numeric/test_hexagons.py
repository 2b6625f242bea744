import math

import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric import hexagons
from steadfield.algorithms.numeric.errors import InputError

FRAMES = [
    {"orientation": orientation, "origin": origin, "angle": angle}
    for orientation in ("pointy", "flat")
    for origin, angle in [((0.0, 0.0), 0.0), ((312.5, -88.0), 0.4), ((-7.0, 3.0), 2.9)]
]


@pytest.mark.parametrize("frame", FRAMES)
def test_each_point_lies_in_the_hexagon_with_the_nearest_centre(frame):
    generator = np.random.default_rng(5)
    x, y = generator.uniform(-500, 500, (2, 3000))
    q, r = hexagons.hexagon_cells(x, y, 90.0, **frame)
    reach = np.arange(-40, 41)
    all_q, all_r = (part.ravel() for part in np.meshgrid(reach, reach))
    centre_x, centre_y = hexagons.hexagon_centres(all_q, all_r, 90.0, **frame)
    squared = (x[:, None] - centre_x) ** 2 + (y[:, None] - centre_y) ** 2
    nearest = squared.argmin(axis=1)
    np.testing.assert_array_equal(q, all_q[nearest])
    np.testing.assert_array_equal(r, all_r[nearest])


@pytest.mark.parametrize("frame", FRAMES)
def test_the_polygon_of_a_cell_contains_the_points_of_the_cell(frame):
    x, y = np.random.default_rng(6).uniform(-500, 500, (2, 2000))
    q, r = hexagons.hexagon_cells(x, y, 75.0, **frame)
    polygons = hexagons.hexagon_polygons(q, r, 75.0, **frame)
    assert shapely.contains_xy(polygons, x, y).all()


@pytest.mark.parametrize("angle", [0.0, 0.7])
def test_squares_contain_their_points(angle):
    x, y = np.random.default_rng(7).uniform(-500, 500, (2, 2000))
    frame = {"origin": (12.0, 5.0), "angle": angle}
    column, row = hexagons.square_cells(x, y, 60.0, **frame)
    polygons = hexagons.square_polygons(column, row, 60.0, **frame)
    assert shapely.contains_xy(polygons, x, y).all()
    np.testing.assert_allclose(shapely.area(polygons), 3600, rtol=1e-9)
    assert hexagons.cell_area(60.0, hexagons.SQUARE) == 3600
    centre_x, centre_y = hexagons.square_centres(column, row, 60.0, **frame)
    centroids = shapely.centroid(polygons)
    np.testing.assert_allclose(shapely.get_x(centroids), centre_x, atol=1e-9)
    np.testing.assert_allclose(shapely.get_y(centroids), centre_y, atol=1e-9)


@pytest.mark.parametrize("frame", FRAMES)
def test_area_and_neighbour_distance_follow_the_closed_form(frame):
    size = 10.0
    polygon = hexagons.hexagon_polygons(np.array([4]), np.array([-3]), size, **frame)[0]
    side = size / math.sqrt(3)
    # Area of a regular hexagon, 3 sqrt(3)/2 side^2.
    assert polygon.area == pytest.approx(3 * math.sqrt(3) / 2 * side**2, rel=1e-12)
    assert hexagons.hexagon_area(size) == pytest.approx(polygon.area, rel=1e-12)
    q, r = (np.array([4, -3]) + hexagons.HEXAGON_NEIGHBOURS).T
    x, y = hexagons.hexagon_centres(q, r, size, **frame)
    distance = np.hypot(x - polygon.centroid.x, y - polygon.centroid.y)
    np.testing.assert_allclose(distance, size, rtol=1e-9)
    neighbours = hexagons.hexagon_polygons(q, r, size, **frame)
    shared = shapely.length(shapely.intersection(neighbours, polygon))
    np.testing.assert_allclose(shared, side, rtol=1e-9)


@pytest.mark.parametrize("frame", FRAMES)
def test_neighbours_share_corners_to_the_bit(frame):
    reach = np.arange(-6, 7)
    q, r = (part.ravel() for part in np.meshgrid(reach, reach))
    polygons = hexagons.hexagon_polygons(q, r, 33.3, **frame)
    assert shapely.is_ccw(shapely.get_exterior_ring(polygons)).all()
    corners = shapely.get_coordinates(polygons)
    # An m by m rhombus of hexagons has 2 (m + 1)^2 - 2 distinct corners.
    assert len(np.unique(corners, axis=0)) == 2 * (len(reach) + 1) ** 2 - 2
    union = shapely.coverage_union_all(polygons)
    assert union.geom_type == "Polygon" and not union.interiors
    assert union.area == pytest.approx(len(q) * hexagons.hexagon_area(33.3), rel=1e-12)


@pytest.mark.parametrize("shape", ["hexagon", "square"])
@pytest.mark.parametrize("frame", FRAMES)
def test_covering_cells_are_those_that_share_ground_with_the_area(frame, shape):
    area = shapely.Point(40, 10).buffer(130).difference(shapely.Point(60, 20).buffer(70))
    q, r = hexagons.cells_covering(area, 40.0, shape, **frame)
    reach = np.arange(-40, 41)
    all_q, all_r = (part.ravel() for part in np.meshgrid(reach, reach))
    if shape == "square":
        turned = {"origin": frame["origin"], "angle": frame["angle"]}
        everything = hexagons.square_polygons(all_q, all_r, 40.0, **turned)
    else:
        everything = hexagons.hexagon_polygons(all_q, all_r, 40.0, **frame)
    shares_ground = shapely.area(shapely.intersection(everything, area)) > 0
    expected = set(zip(all_q[shares_ground].tolist(), all_r[shares_ground].tolist()))
    assert set(zip(q.tolist(), r.tolist())) == expected
    assert len(q) == len(expected)
    assert np.array_equal(np.lexsort((q, r)), np.arange(len(q)))


def test_covering_a_box_gives_every_pixel_sized_square():
    column, row = hexagons.cells_covering((0, 0, 30, 20), 10.0, "square")
    assert set(zip(column.tolist(), row.tolist())) == {(c, r) for c in range(3) for r in range(2)}


def test_impossible_sizes_are_refused_with_what_was_found():
    with pytest.raises(InputError, match="found 0"):
        hexagons.hexagon_cells([1.0], [1.0], 0)
    with pytest.raises(InputError, match="found nan"):
        hexagons.square_cells([1.0], [1.0], math.nan)
    with pytest.raises(InputError, match="choose a size of"):
        hexagons.cells_covering((0, 0, 1e6, 1e6), 10.0)
    with pytest.raises(InputError, match="empty"):
        hexagons.cells_covering(shapely.Polygon(), 10.0)
    with pytest.raises(InputError, match="tilted"):
        hexagons.hexagon_cells([1.0], [1.0], 5.0, "tilted")
