"""Bandwidth rules: invariances, weights and the refusals."""

import numpy as np
import pytest
from steadfield.algorithms.numeric import bandwidth
from steadfield.algorithms.numeric.errors import InputError


@pytest.fixture
def places():
    generator = np.random.default_rng(3)
    return generator.normal(500_000, 300, 800), generator.normal(200_000, 500, 800)


def test_normal_scale_is_spread_times_sixth_root(places):
    x, y = places
    standard = np.sqrt((np.var(x, ddof=1) + np.var(y, ddof=1)) / 2)
    assert bandwidth.standard_spread(x, y) == pytest.approx(standard, rel=1e-12)
    expected = min(standard, bandwidth.quartile_spread(x, y)) * 800 ** (-1 / 6)
    assert bandwidth.normal_scale(x, y) == pytest.approx(expected, rel=1e-12)


def test_quartile_spread_agrees_with_the_normal_distribution():
    generator = np.random.default_rng(5)
    x, y = generator.normal(0, 40, (2, 200_000))
    assert bandwidth.quartile_spread(x, y) == pytest.approx(40, rel=0.01)


def test_quartile_spread_equals_scipy_hazen_quantiles(places):
    mstats = pytest.importorskip("scipy.stats.mstats")
    ranges = [
        np.diff(mstats.mquantiles(values, [0.25, 0.75], alphap=0.5, betap=0.5))[0]
        for values in places
    ]
    expected = np.sqrt(np.mean(np.square(ranges))) / 1.3489795
    assert bandwidth.quartile_spread(*places) == pytest.approx(expected, rel=1e-7)


@pytest.mark.parametrize("rule", [bandwidth.normal_scale, bandwidth.oversmoothed])
def test_rules_ignore_shift_and_follow_scale(places, rule):
    x, y = places
    value = rule(x, y)
    assert rule(x + 1e6, y - 3e5) == pytest.approx(value, rel=1e-9)
    assert rule(7 * x, 7 * y) == pytest.approx(7 * value, rel=1e-9)


@pytest.mark.parametrize("rule", [bandwidth.normal_scale, bandwidth.oversmoothed])
def test_only_the_ratios_of_weights_matter(places, rule):
    x, y = places
    weights = np.random.default_rng(6).gamma(2.0, size=x.size)
    assert rule(x, y, 9 * weights) == pytest.approx(rule(x, y, weights), rel=1e-12)
    assert rule(x, y, np.full(x.size, 4.0)) == pytest.approx(rule(x, y), rel=1e-12)


def test_records_without_weight_do_not_count(places):
    x, y = places
    weights = np.where(np.arange(x.size) < 300, 1.0, 0.0)
    assert bandwidth.normal_scale(x, y, weights) == bandwidth.normal_scale(x[:300], y[:300])


def test_one_far_record_hardly_moves_the_normal_scale(places):
    x, y = places
    far_x, far_y = np.append(x, 9e6), np.append(y, 9e6)
    assert bandwidth.normal_scale(far_x, far_y) == pytest.approx(
        bandwidth.normal_scale(x, y), rel=0.1
    )


def test_half_the_records_on_one_place_fall_back_to_the_standard_spread():
    x = np.r_[np.zeros(90), np.arange(10.0)]
    y = np.r_[np.zeros(90), np.arange(10.0)]
    assert bandwidth.quartile_spread(x, y) == 0
    assert bandwidth.spread(x, y) == bandwidth.standard_spread(x, y) > 0


@pytest.mark.parametrize("count", [1, 50])
def test_one_place_is_refused_in_words(count):
    x = np.full(count, 123.4)
    for rule in (bandwidth.normal_scale, bandwidth.oversmoothed):
        with pytest.raises(InputError, match="one place"):
            rule(x, x)


@pytest.mark.parametrize(
    ("x", "weights", "words"),
    [
        ([], None, "No record"),
        ([1.0, 2.0], [0.0, 0.0], "No record"),
        ([1.0, 2.0], [1.0, -1.0], "negative"),
        ([1.0, np.nan], None, "finite"),
        ([1.0, 2.0], [1.0], "one length"),
    ],
)
def test_unusable_records_are_refused_in_words(x, weights, words):
    with pytest.raises(InputError, match=words):
        bandwidth.normal_scale(x, x, weights)
