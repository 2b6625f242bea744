"""Centres and spreads against closed forms and an independent optimiser."""

import math

import numpy as np
import pytest
import shapely
from scipy.optimize import minimize
from steadfield.algorithms.numeric.centres import (
    Ellipse,
    bearing,
    deviation_ellipse,
    geometric_median,
    mean_centre,
    standard_distance,
)
from steadfield.algorithms.numeric.errors import InputError

SQUARE_X = np.array([0.0, 2.0, 2.0, 0.0])
SQUARE_Y = np.array([0.0, 0.0, 2.0, 2.0])


def distance_sum(place, x, y, weights):
    return float(np.sum(weights * np.hypot(x - place[0], y - place[1])))


def test_weighted_mean_centre_is_the_centre_of_mass():
    assert mean_centre(SQUARE_X, SQUARE_Y) == (1.0, 1.0)
    # Weights 3, 1, 1, 3 on the square: x = (2 + 2) / 8, y = (2 + 6) / 8.
    assert mean_centre(SQUARE_X, SQUARE_Y, [3, 1, 1, 3]) == pytest.approx((0.5, 1.0))


def test_a_whole_weight_counts_as_that_many_records():
    rng = np.random.default_rng(3)
    x, y = rng.normal(size=(2, 40)) * 500 + 4e6
    times = rng.integers(0, 5, 40)
    for function in (mean_centre, standard_distance, geometric_median):
        weighted = function(x, y, times)
        repeated = function(np.repeat(x, times), np.repeat(y, times))
        assert weighted == pytest.approx(repeated, rel=1e-13, abs=1e-6)


def test_standard_distance_of_a_square_is_half_its_diagonal():
    assert standard_distance(SQUARE_X, SQUARE_Y) == pytest.approx(math.sqrt(2))


def test_large_coordinates_do_not_blur_the_spread():
    x, y = SQUARE_X * 1e-3 + 4.3e6, SQUARE_Y * 1e-3 + 3.2e6
    # Coordinates of this size are held to about 5e-10 m.
    assert standard_distance(x, y) == pytest.approx(1e-3 * math.sqrt(2), rel=1e-5)


@pytest.mark.parametrize("direction", [0.0, 20.0, 90.0, 133.0, 179.0])
def test_ellipse_axes_and_bearing_of_four_points_on_two_axes(direction):
    # Points at +-3 along the bearing and +-1 across it: the covariance has eigenvalues 9/2 and 1/2.
    angle = math.radians(direction)
    x = np.array([3 * math.sin(angle), -3 * math.sin(angle), math.cos(angle), -math.cos(angle)])
    y = np.array([3 * math.cos(angle), -3 * math.cos(angle), -math.sin(angle), math.sin(angle)])
    ellipse = deviation_ellipse(x, y)
    assert ellipse.semi_major == pytest.approx(math.sqrt(4.5))
    assert ellipse.semi_minor == pytest.approx(math.sqrt(0.5))
    turn = (ellipse.bearing - direction + 90.0) % 180.0 - 90.0
    assert turn == pytest.approx(0.0, abs=1e-9)
    assert 0.0 <= ellipse.bearing < 180.0


def test_axes_add_up_to_the_standard_distance():
    rng = np.random.default_rng(8)
    x, y, weights = rng.gamma(2.0, 300.0, 80), rng.normal(0, 90.0, 80), rng.uniform(0, 4, 80)
    ellipse = deviation_ellipse(x, y, weights)
    assert math.hypot(ellipse.semi_major, ellipse.semi_minor) == pytest.approx(
        standard_distance(x, y, weights)
    )


def test_ellipse_of_a_known_gaussian_is_recovered_and_holds_its_share():
    # Standard deviations 400 and 150 m, long axis on bearing 60 degrees. With 200,000 draws the
    # axes are known to sigma / sqrt(2 n), 0.16 %, and a share p to sqrt(p (1 - p) / n), 0.11 %.
    rng = np.random.default_rng(11)
    along, across = rng.normal(size=(2, 200_000)) * np.array([[400.0], [150.0]])
    angle = math.radians(30.0)
    x = 1000 + along * math.cos(angle) - across * math.sin(angle)
    y = 2000 + along * math.sin(angle) + across * math.cos(angle)
    for deviations in (1.0, math.sqrt(2), 2.0):
        ellipse = deviation_ellipse(x, y, deviations=deviations)
        assert ellipse.semi_major == pytest.approx(400 * deviations, rel=0.007)
        assert ellipse.semi_minor == pytest.approx(150 * deviations, rel=0.007)
        assert ellipse.bearing == pytest.approx(60.0, abs=0.4)
        share = 1.0 - math.exp(-(deviations**2) / 2)
        assert ellipse.contains(x, y).mean() == pytest.approx(share, abs=0.005)


def test_outline_lies_on_the_ellipse_and_runs_anticlockwise():
    ellipse = Ellipse(50.0, -20.0, 30.0, 10.0, 25.0)
    ring = ellipse.outline(360)
    assert np.array_equal(ring[0], ring[-1])
    polygon = shapely.Polygon(ring)
    assert polygon.exterior.is_ccw
    assert polygon.area == pytest.approx(ellipse.area, rel=1e-3)
    first_radius = ring[0] - (50.0, -20.0)
    assert math.hypot(*first_radius) == pytest.approx(30.0)
    assert bearing(0, 0, *first_radius) == pytest.approx(25.0)


def test_one_place_and_a_straight_line_have_flat_ellipses():
    point = deviation_ellipse([5.0, 5.0], [7.0, 7.0])
    assert (point.semi_major, point.semi_minor, point.bearing) == (0.0, 0.0, 0.0)
    line = deviation_ellipse([0.0, 1.0, 2.0], [0.0, 1.0, 2.0])
    assert line.semi_minor == pytest.approx(0.0, abs=1e-7)
    assert line.bearing == pytest.approx(45.0)


@pytest.mark.parametrize("seed", range(12))
def test_geometric_median_is_as_good_as_a_general_optimiser_finds(seed):
    rng = np.random.default_rng(seed)
    count = int(rng.integers(3, 60))
    x, y = rng.standard_t(1.5, size=(2, count)) * 200
    weights = rng.uniform(0.1, 5, count)
    found = geometric_median(x, y, weights)
    reference = minimize(
        distance_sum,
        (np.average(x, weights=weights), np.average(y, weights=weights)),
        args=(x, y, weights),
        method="Nelder-Mead",
        options={"xatol": 1e-9, "fatol": 1e-11, "maxiter": 8000, "maxfev": 8000},
    )
    least = distance_sum(reference.x, x, y, weights)
    assert distance_sum(found, x, y, weights) <= least * (1 + 1e-11)
    assert found == pytest.approx(tuple(reference.x), abs=1e-3)


def test_geometric_median_of_a_triangle_sees_every_side_at_120_degrees():
    # Torricelli's point of a triangle whose angles are all below 120 degrees.
    x, y = np.array([0.0, 7.0, 2.0]), np.array([0.0, 1.0, 5.0])
    median_x, median_y = geometric_median(x, y)
    angle = np.sort(np.degrees(np.arctan2(y - median_y, x - median_x)))
    assert np.diff(angle) == pytest.approx([120.0, 120.0], abs=1e-6)


def test_geometric_median_is_the_record_itself_where_the_angle_is_wide():
    # A triangle with an angle of 120 degrees or more has its median at that corner (Torricelli).
    assert geometric_median([0.0, 10.0, -10.0], [0.0, 1.0, 1.0]) == (0.0, 0.0)


def test_a_record_of_half_the_weight_is_the_geometric_median():
    rng = np.random.default_rng(4)
    x, y = rng.uniform(0, 100, size=(2, 30))
    weights = np.ones(30)
    weights[17] = 29.5
    assert geometric_median(x, y, weights) == (x[17], y[17])


def test_geometric_median_starting_on_a_record_moves_on():
    # The mean centre is a record that is not the median: the plain iteration would divide by zero.
    x, y = np.array([0.0, -1.0, -1.0, -1.0, 3.0]), np.array([0.0, -1.0, 0.0, 1.0, 0.0])
    found = geometric_median(x, y)
    assert mean_centre(x, y) == (0.0, 0.0)
    reference = minimize(
        distance_sum, (-0.5, 0.1), args=(x, y, np.ones(5)), method="Nelder-Mead", tol=1e-12
    )
    assert distance_sum(found, x, y, 1.0) <= reference.fun + 1e-9


def test_geometric_median_on_a_line_is_a_median():
    odd = geometric_median([0.0, 1.0, 5.0, 9.0, 30.0], np.zeros(5))
    assert odd == (5.0, 0.0)
    even_x, even_y = geometric_median([0.0, 1.0, 5.0, 9.0], np.full(4, 2.0))
    assert 1.0 <= even_x <= 5.0
    assert even_y == pytest.approx(2.0)


def test_bearing_runs_clockwise_from_north():
    assert bearing(0, 0, [0, 1, 0, -1], [1, 0, -1, 0]) == pytest.approx([0, 90, 180, 270])


@pytest.mark.parametrize(
    ("weights", "found"), [([1, -1], "below 0"), ([0, 0], "add up to 0"), ([1, np.nan], "finite")]
)
def test_weights_that_cannot_be_used_are_refused(weights, found):
    with pytest.raises(InputError, match=found):
        mean_centre([0.0, 1.0], [0.0, 1.0], weights)


def test_no_records_are_refused():
    with pytest.raises(InputError, match="at least one record"):
        standard_distance([], [])
