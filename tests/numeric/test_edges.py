"""Boundary masks and edge corrections."""

import numpy as np
import pytest
import shapely
from scipy.integrate import quad
from scipy.stats import norm
from steadfield.algorithms.numeric import edges, surface
from steadfield.algorithms.numeric.adaptation import adapt_bandwidths
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.grid import Grid, covering
from steadfield.algorithms.numeric.kernels import KERNELS

BOTH = pytest.mark.parametrize("kernel", list(KERNELS))


def district():
    """A round district with a hole, an inlet and an island."""
    ground = shapely.Point(500, 500).buffer(400, quad_segs=32)
    ground = ground.difference(shapely.box(450, 450, 640, 560))
    ground = ground.difference(shapely.Polygon([(500, 80), (540, 300), (560, 80)]))
    return ground.union(shapely.box(20, 40, 190, 200))


def uniform_records(polygon, per_unit, seed):
    rng = np.random.default_rng(seed)
    left, bottom, right, top = polygon.bounds
    count = rng.poisson(per_unit * (right - left) * (top - bottom))
    x, y = rng.uniform(left, right, count), rng.uniform(bottom, top, count)
    inside = shapely.contains_xy(polygon, x, y)
    return x[inside], y[inside]


@pytest.mark.parametrize("cell", [3.0, 37.0, 400.0])
def test_mask_equals_the_clipped_area_of_every_pixel(cell):
    polygon = shapely.affinity.rotate(district(), 17)
    grid = covering(polygon.bounds, cell, margin=cell)
    mask = edges.boundary_mask(polygon, grid)
    assert mask.sum() * grid.cell_area == pytest.approx(polygon.area, rel=1e-12)
    chosen = np.random.default_rng(1).permutation(mask.size)[:400]
    rows, columns = np.unravel_index(chosen, mask.shape)
    left, top = grid.left + columns * cell, grid.top - rows * cell
    squares = shapely.box(left, top - cell, left + cell, top)
    exact = shapely.area(shapely.intersection(squares, polygon)) / cell**2
    assert mask[rows, columns] == pytest.approx(exact, abs=1e-9)
    assert np.all(mask[rows, columns][exact == 0] == 0)


def test_mask_on_a_grid_smaller_than_the_polygon_and_on_pixel_lines():
    square = shapely.box(0, 0, 100, 100)
    assert edges.boundary_mask(square, Grid(20, 60, 5, 4, 6)) == pytest.approx(1.0)
    aligned = edges.boundary_mask(shapely.box(10, 10, 30, 20), Grid(0, 30, 10, 3, 4))
    assert aligned.tolist() == [[0, 0, 0, 0], [0, 1, 1, 0], [0, 0, 0, 0]]


def test_mask_repairs_self_crossing_and_counts_overlap_once():
    bow_tie = shapely.Polygon([(0, 0), (10, 10), (10, 0), (0, 10)])
    grid = Grid(0, 10, 1, 10, 10)
    assert edges.boundary_mask(bow_tie, grid).sum() == pytest.approx(50.0)
    twice = shapely.MultiPolygon([shapely.box(0, 0, 6, 10), shapely.box(4, 0, 10, 10)])
    assert edges.boundary_mask(twice, grid) == pytest.approx(1.0)


def test_boundary_elsewhere_is_refused():
    with pytest.raises(InputError, match="BOUNDARY has no area inside the extent"):
        edges.boundary_mask(shapely.box(0, 0, 1, 1), Grid(50, 60, 1, 5, 5))


@BOTH
def test_correction_by_record_keeps_the_total(kernel):
    polygon = district()
    grid = covering(polygon.bounds, 8.0)
    mask = edges.boundary_mask(polygon, grid)
    x, y = uniform_records(polygon, 1e-3, 2)
    rng = np.random.default_rng(3)
    weights, bandwidths = rng.uniform(0.2, 3, len(x)), rng.uniform(8.0, 90.0, len(x))
    factors = edges.record_factors(x, y, bandwidths, mask, grid, kernel)
    total = surface.adaptive_surface(x, y, weights / factors, bandwidths, grid, kernel)
    assert (total * mask).sum() * grid.cell_area == pytest.approx(weights.sum(), rel=1e-6)


@BOTH
def test_factors_of_a_half_plane_are_known(kernel):
    # on a straight border half of the kernel is lost; one and a half bandwidths inside, a
    # Gaussian keeps Phi(1.5) = 0.93319 (Abramowitz & Stegun 1964, table 26.1)
    grid = Grid(0, 400, 2.0, 200, 200)
    mask = edges.boundary_mask(shapely.box(0, 0, 200, 400), grid)
    x = np.array([200.0, 170.0, 100.0])
    held = edges.record_factors(x, np.full(3, 200.0), np.full(3, 20.0), mask, grid, kernel)
    places = edges.place_factors(20.0, mask, grid, kernel)
    assert held[0] == pytest.approx(0.5, abs=1e-3) and held[2] == pytest.approx(1.0, abs=1e-3)
    assert places[100, 99:101].mean() == pytest.approx(0.5, abs=1e-3)
    if kernel == "gaussian":
        assert held[1] == pytest.approx(0.93319, abs=2e-4)


@BOTH
def test_place_factors_of_many_bandwidths_agree_with_the_plain_sum(kernel):
    polygon = district()
    grid = covering(polygon.bounds, 12.0)
    mask = edges.boundary_mask(polygon, grid)
    bandwidths = 12.0 * 30 ** np.random.default_rng(4).uniform(0, 1, grid.shape)
    factors = edges.place_factors(bandwidths, mask, grid, kernel)
    centre_x, centre_y = grid.centres()
    for row, column in [(5, 9), (33, 34), (40, 12), (60, 30), (66, 1)]:
        apart = np.square(centre_x - centre_x[row, column]) + np.square(
            centre_y - centre_y[row, column]
        )
        kernel_values = KERNELS[kernel].value(apart, bandwidths[row, column])
        exact = (kernel_values * mask).sum() * grid.cell_area
        assert factors[row, column] == pytest.approx(exact, abs=2e-3)


def even_records(polygon, cell):
    """The mean of uniform patterns: a dense lattice of records weighted by the area inside."""
    grid = covering(polygon.bounds, cell)
    mask = edges.boundary_mask(polygon, grid)
    fine = covering(polygon.bounds, cell / 3)
    x, y = (values.ravel() for values in fine.centres())
    weights = edges.boundary_mask(polygon, fine).ravel() * fine.cell_area
    kept = weights > 0
    return x[kept], y[kept], weights[kept], grid, mask


@BOTH
def test_uniform_pattern_is_flat_to_the_border_by_place(kernel):
    x, y, weights, grid, mask = even_records(district(), 10.0)
    total = surface.adaptive_surface(x, y, weights, 40.0, grid, kernel)
    raw_inside = total[mask > 0.5]
    corrected = (total / np.maximum(edges.place_factors(40.0, mask, grid, kernel), 1e-9))[
        mask > 0.5
    ]
    assert raw_inside.min() < 0.6
    assert np.abs(corrected - 1).max() < 0.05


def test_uniform_pattern_is_flat_by_place_with_an_adaptive_bandwidth():
    # the bandwidths vary by a factor of two across the district; the pattern itself is uniform
    x, y, weights, grid, mask = even_records(district(), 10.0)
    bandwidths = 20.0 * 2 ** (x / 900.0)
    total = surface.adaptive_surface(x, y, weights, bandwidths, grid)
    at_places = edges.bandwidth_at_places(x, y, weights, bandwidths, total, grid)
    corrected = total / np.maximum(edges.place_factors(at_places, mask, grid), 1e-9)
    assert np.abs(corrected[mask > 0.5] - 1).max() < 0.05


def test_correction_by_record_follows_its_known_course_at_a_straight_border():
    # of a uniform pattern Diggle's corrected mean at a depth d is the integral over the ground of
    # phi(d - u) / Phi(u), which is ln 2 on the border itself and 1 further in
    x, y, weights, grid, mask = even_records(shapely.box(0, 0, 300, 300), 5.0)
    factors = edges.record_factors(x, y, np.full(len(x), 25.0), mask, grid)
    total = surface.adaptive_surface(x, y, weights / factors, 25.0, grid)
    found = total[30, :20]
    depths = grid.x_centres()[:20] / 25.0
    known = [quad(lambda u, d=d: norm.pdf(d - u) / norm.cdf(u), 0, 9)[0] for d in depths]
    assert quad(lambda u: norm.pdf(u) / norm.cdf(u), 0, 9)[0] == pytest.approx(np.log(2))
    assert found == pytest.approx(known, abs=0.01)


def test_adaptive_bandwidths_do_not_widen_at_the_border_of_a_uniform_pattern():
    polygon = district()
    x, y = uniform_records(polygon, 0.06, 6)
    grid = covering(polygon.bounds, 10.0)
    mask = edges.boundary_mask(polygon, grid)
    depth = shapely.distance(polygon.boundary, shapely.points(x, y))
    corrected = adapt_bandwidths(x, y, 1.0, 40.0, 0.5, mask=mask, grid=grid).bandwidths
    plain = adapt_bandwidths(x, y, 1.0, 40.0, 0.5).bandwidths
    rim, core = depth < 15, depth > 90
    assert corrected[rim].mean() == pytest.approx(corrected[core].mean(), rel=0.02)
    assert plain[rim].mean() > 1.1 * plain[core].mean()


def test_record_far_outside_is_refused_with_a_count():
    grid = Grid(0, 100, 2.0, 50, 50)
    mask = edges.boundary_mask(shapely.box(0, 0, 50, 50), grid)
    with pytest.raises(InputError, match="1 records lie too far outside BOUNDARY"):
        edges.record_factors(np.array([10.0, 5e3]), np.array([10.0, 5e3]), 5.0, mask, grid)
