"""The advised bandwidth: what it rests on, and that trouble in the records is named."""

import math

import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric import advice, bandwidth
from steadfield.algorithms.numeric.errors import CancelledError, InputError


def round_cloud(count, seed=3):
    return np.random.default_rng(seed).normal(0, 1000, (2, count))


def turned(x, y, angle=0.3):
    return x * math.cos(angle) - y * math.sin(angle), x * math.sin(angle) + y * math.cos(angle)


def diagnosed(x, y):
    x, y, weights = bandwidth.checked_records(x, y)
    return advice.diagnose(x, y, weights, bandwidth.normal_scale(x, y, weights))


def test_values_agree_with_their_own_rules():
    x, y = round_cloud(600)
    weights = np.random.default_rng(4).gamma(2.0, size=600)
    found = advice.advise(x, y, weights)
    assert found.normal_scale == bandwidth.normal_scale(x, y, weights)
    assert found.oversmoothed == bandwidth.oversmoothed(x, y, weights)
    best = found.bandwidths[np.argmin(found.least_squares_curve)]
    assert found.least_squares == pytest.approx(best, rel=0.05)
    best = found.likelihood_bandwidths[np.argmax(found.likelihood_curve)]
    assert found.likelihood == pytest.approx(best, rel=0.08)


def test_advised_value_is_near_the_best_for_a_normal_cloud():
    # the normal scale is the best bandwidth for this law (Silverman 1986, section 4.3.2)
    found = advice.advise(*round_cloud(1500))
    best = 1000 * 1500 ** (-1 / 6)
    assert 0.7 * best < found.advised < 1.4 * best
    assert "geometric mean" in found.reason and found.warnings == ()


def test_no_more_than_the_oversmoothed_value_is_advised():
    for seed in range(4):
        found = advice.advise(*round_cloud(150, seed))
        assert found.advised <= found.oversmoothed


def squared_error(bandwidth_used, x, y, centres, widths):
    """Integrated squared error for a mixture of equal round normals, in closed form."""

    def gaussian(squares, variance):
        return np.exp(-squares / (2 * variance)) / (2 * np.pi * variance)

    def squares(first, second):
        return ((first[:, None] - second) ** 2).sum(axis=-1)

    places = np.column_stack([x, y])
    both = gaussian(squares(places, places), 2 * bandwidth_used**2).mean()
    crossed = gaussian(squares(places, centres), widths**2 + bandwidth_used**2).mean()
    truth = gaussian(squares(centres, centres), widths[:, None] ** 2 + widths**2).mean()
    return both - 2 * crossed + truth


def test_advised_value_comes_close_to_the_least_possible_error_on_clusters():
    generator = np.random.default_rng(6)
    centres, widths = generator.normal(0, 3000, (20, 2)), generator.uniform(200, 800, 20)
    members = generator.integers(0, 20, 1000)
    x, y = (centres[members] + generator.normal(0, 1, (1000, 2)) * widths[members, None]).T
    found = advice.advise(x, y)
    errors = [squared_error(h, x, y, centres, widths) for h in found.bandwidths[::5]]
    assert squared_error(found.advised, x, y, centres, widths) < 1.25 * min(errors)
    assert squared_error(found.normal_scale, x, y, centres, widths) > 2 * min(errors)


def test_cross_validations_that_differ_are_named_and_averaged():
    generator = np.random.default_rng(8)
    sharp = generator.normal((1000, 1000), 80, (400, 2))
    x, y = np.vstack([sharp, generator.normal(0, 3000, (600, 2))]).T
    found = advice.advise(x, y)
    assert found.likelihood > 2 * found.least_squares
    assert found.advised == pytest.approx(math.sqrt(found.likelihood * found.least_squares))
    factor = found.likelihood / found.least_squares
    assert f"differ by a factor of {factor:.1f}" in found.reason
    assert "geometric mean is advised" in found.reason


def test_few_records_get_the_oversmoothed_value_and_are_told():
    found = advice.advise(*round_cloud(14))
    assert found.advised == found.oversmoothed
    assert "14 records" in found.reason
    assert any("14 records are few" in words for words in found.warnings)


def test_many_records_with_one_heavy_weight_are_few():
    x, y = round_cloud(500)
    weights = np.full(500, 1e-3)
    weights[:10] = 1.0
    found = advice.advise(x, y, weights)
    assert found.diagnosis.effective < 16 and found.advised == found.oversmoothed
    assert any("an effective 11 by their weights" in words for words in found.warnings)


def test_stacked_records_are_counted_and_cross_validation_is_set_aside():
    x, y = round_cloud(300)
    x, y = np.r_[x, x[:150]], np.r_[y, y[:150]]
    found = advice.advise(x, y)
    assert found.diagnosis.places == 300
    assert found.diagnosis.stacked == pytest.approx(300 / 450)
    assert found.diagnosis.pairs == pytest.approx(300 / 450)
    assert found.diagnosis.collapses
    assert found.advised == found.normal_scale and "stacked" in found.reason
    assert any("450 records on 300 places" in words for words in found.warnings)


@pytest.mark.parametrize(("pairs", "collapses"), [(31, False), (36, True)])
def test_collapse_starts_where_the_score_at_narrow_bandwidths_turns(pairs, collapses):
    # m pairs among n records: from m / n = 1/6 on, K2(0) / 2 / (2 K(0) - K2(0)) for the Gaussian
    # in the plane (Silverman 1986, section 3.4.3); here n = 200
    from steadfield.algorithms.numeric.crossvalidation import least_squares_scores

    x, y = round_cloud(200 - pairs)
    x, y = np.r_[x, x[:pairs]], np.r_[y, y[:pairs]]
    assert diagnosed(x, y).collapses == collapses
    distances = np.hypot(x[:, None] - x, y[:, None] - y)
    tiny = np.min(distances[distances > 0]) / 8
    scores = least_squares_scores(x, y, [tiny, 1.01 * tiny])
    assert (scores[0] < scores[1]) == collapses


@pytest.mark.parametrize("angle", [0.0, 0.4])
def test_rounding_is_found_whatever_way_the_lattice_is_turned(angle):
    x, y = round_cloud(2000)
    x, y = turned(np.round(x / 100) * 100, np.round(y / 100) * 100, angle)
    found = advice.advise(np.round(x, 6), np.round(y, 6))
    assert found.diagnosis.rounding == pytest.approx(100, rel=1e-6)
    assert any("rounded to a lattice of about 100 m" in words for words in found.warnings)
    assert found.bandwidths[0] >= 99.9


def test_rounding_is_found_where_few_neighbours_are_one_step_apart():
    # every place on whole kilometres, but most have no other one within a kilometre
    x, y = np.random.default_rng(8).integers(0, 60, (2, 180)) * 1000.0
    nearest = advice.nearest_distances(*np.unique(np.c_[x, y], axis=0).T)
    assert np.mean(nearest == 1000) < 0.5
    assert diagnosed(x, y).rounding == 1000
    found = advice.advise(x, y)
    assert found.bandwidths[0] >= 999.9


def test_coordinates_of_which_fewer_than_half_are_rounded_do_not_bound_the_bandwidth():
    x, y = round_cloud(600)
    x[:200], y[:200] = np.round(x[:200] / 300) * 300, np.round(y[:200] / 300) * 300
    assert diagnosed(x, y).rounding == 0.0


def test_rounding_is_not_seen_in_random_places():
    for seed in range(10):
        assert diagnosed(*round_cloud(400, seed)).rounding == 0.0


def test_a_bandwidth_below_the_rounding_is_never_advised():
    x, y = round_cloud(60)
    found = advice.advise(np.round(x / 900) * 900, np.round(y / 900) * 900)
    assert found.advised >= 899


def test_records_near_the_boundary_are_named_and_those_outside_left_out():
    x, y = np.random.default_rng(2).uniform(0, 5000, (2, 800))
    square = shapely.box(0, 0, 5000, 4000)
    found = advice.advise(x, y, boundary=square)
    inside = y <= 4000
    assert found.diagnosis.outside == np.sum(~inside)
    assert found.normal_scale == bandwidth.normal_scale(x[inside], y[inside])
    rim = np.minimum.reduce([x, 5000 - x, y, 4000 - y])[inside]
    assert found.near_boundary == pytest.approx(np.mean(rim <= found.advised), abs=1e-9)
    assert any("lie within one bandwidth of the boundary" in words for words in found.warnings)
    assert any("lie outside BOUNDARY" in words for words in found.warnings)


def test_best_value_is_refined_between_the_bandwidths_tried():
    bandwidths = np.geomspace(1, 10, 12)
    merit = -((np.log(bandwidths) - math.log(3.3)) ** 2)
    assert advice.best_inside(bandwidths, merit) == pytest.approx(3.3, rel=1e-9)


def test_merit_that_only_falls_or_rises_has_no_best_value():
    bandwidths = np.geomspace(1, 10, 12)
    assert math.isnan(advice.best_inside(bandwidths, bandwidths))
    assert math.isnan(advice.best_inside(bandwidths, -bandwidths))


def test_merit_that_rises_without_limit_to_zero_gives_its_widest_hump():
    place = np.log(np.geomspace(1, 100, 200))
    humps = np.exp(-8 * (place - 2) ** 2) + 0.8 * np.exp(-8 * (place - 3.5) ** 2)
    found = advice.best_inside(np.exp(place), humps + 5 * np.exp(-4 * place))
    assert math.log(found) == pytest.approx(3.5, abs=0.01)


def test_nothing_to_learn_from_is_refused_in_words():
    with pytest.raises(InputError, match="one place"):
        advice.advise([5.0, 5.0], [6.0, 6.0])
    with pytest.raises(InputError, match="inside BOUNDARY"):
        advice.advise(*round_cloud(50), boundary=shapely.box(9e5, 9e5, 9.1e5, 9.1e5))


def test_two_records_still_get_an_answer():
    found = advice.advise([0.0, 100.0], [0.0, 50.0])
    assert found.advised == found.oversmoothed > 0


def test_cancelling_stops_the_work():
    def cancel(share):
        if share > 0.3:
            raise CancelledError

    with pytest.raises(CancelledError):
        advice.advise(*round_cloud(300), progress=cancel)
