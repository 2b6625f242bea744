"""Coverage of confidence ellipses by simulation, closed forms, and refusals."""

import math

import numpy as np
import pytest
from scipy import stats
from steadfield.algorithms.numeric.centre_confidence import (
    centre_covariance,
    chance_of_distance,
    confidence_ellipse,
    sampled_centre,
)
from steadfield.algorithms.numeric.centres import deviation_ellipse
from steadfield.algorithms.numeric.errors import CancelledError


def coverage(draw, truth, runs, seed):
    rng = np.random.default_rng(seed)
    held = 0
    for _ in range(runs):
        ellipse = confidence_ellipse(*draw(rng), draws=399, rng=rng)
        held += bool(ellipse.contains(*truth))
    return held / runs


def test_confidence_ellipse_covers_the_true_centre_95_times_in_100():
    # Standard error of the estimated coverage: sqrt(0.95 * 0.05 / 1500) = 0.6 %.
    def gaussian(rng):
        return rng.normal(size=(2, 40)) * np.array([[400.0], [150.0]])

    def skewed_and_weighted(rng):
        x, y = rng.gamma(2.0, 100.0, 90), rng.normal(0, 50.0, 90)
        return x, 0.5 * x + y, rng.uniform(0.5, 2.0, 90)

    assert coverage(gaussian, (0.0, 0.0), 1500, 21) == pytest.approx(0.95, abs=0.02)
    assert coverage(skewed_and_weighted, (200.0, 100.0), 1500, 22) == pytest.approx(0.95, abs=0.02)


def test_confidence_ellipse_covers_when_contributors_have_several_records():
    # Records of one household stand together; taken as independent they would promise too much.
    def households(rng):
        homes = rng.normal(0, 300.0, size=(60, 2))
        label = np.repeat(np.arange(60), rng.integers(1, 6, 60))
        places = homes[label] + rng.normal(0, 20.0, size=(len(label), 2))
        return places[:, 0], places[:, 1], None, label

    def as_if_independent(rng):
        return households(rng)[:2]

    assert coverage(households, (0.0, 0.0), 1000, 23) == pytest.approx(0.95, abs=0.02)
    assert coverage(as_if_independent, (0.0, 0.0), 300, 24) < 0.85


def test_confidence_ellipse_of_many_records_is_the_normal_one():
    # For large n the ellipse tends to chi-square(2) at 95 %, 5.991, times covariance / n
    # (Hotelling).
    rng = np.random.default_rng(9)
    x, y = rng.normal(size=(2, 20_000)) * np.array([[400.0], [150.0]])
    ellipse = confidence_ellipse(x, y, draws=1999, rng=rng)
    spread = deviation_ellipse(x, y)
    factor = math.sqrt(5.991 / 20_000)
    # The 95 % point of 1,999 draws of T^2 is known to about 2.5 %, its root to half of that.
    assert ellipse.semi_major == pytest.approx(factor * spread.semi_major, rel=0.04)
    assert ellipse.semi_minor == pytest.approx(factor * spread.semi_minor, rel=0.04)


def test_centre_covariance_of_equal_weights_is_the_covariance_over_n():
    x, y = np.random.default_rng(6).normal(size=(2, 50))
    assert centre_covariance(x, y) == pytest.approx(np.cov(x, y, bias=True) / 50)


def levels_reached(draw, runs, seed):
    """Shares of chances below 5 % and 50 % when the true centres are the same."""
    rng = np.random.default_rng(seed)
    chances = np.array([chance_of_distance(*draw(rng)) for _ in range(runs)])
    return [float(np.mean(chances < level)) for level in (0.05, 0.5)]


@pytest.mark.parametrize("sizes", [(80, 80), (8, 8), (10, 50), (5, 100)])
def test_chance_of_a_distance_is_uniform_when_nothing_moved(sizes):
    # 1,500 pairs: a share of 5 % is known to 0.6 %, one of 50 % to 1.3 %. With chi-square in place
    # of F the small groups reach 5 % in 11 to 27 % of the pairs.
    def draw(rng):
        scale = np.array([[400.0], [150.0]])
        return [sampled_centre(*(rng.normal(size=(2, size)) * scale)) for size in sizes]

    assert levels_reached(draw, 1500, 12) == pytest.approx([0.05, 0.5], abs=0.03)


def test_chance_of_a_distance_allows_for_weights():
    def draw(rng):
        return [
            sampled_centre(*rng.normal(size=(2, size)), rng.integers(1, 6, size))
            for size in (12, 30)
        ]

    assert levels_reached(draw, 1500, 13) == pytest.approx([0.05, 0.5], abs=0.03)


@pytest.mark.parametrize("moved", [30, 15, 0])
def test_chance_of_a_distance_counts_who_has_records_in_both_groups(moved):
    # the same households fall in spring and in summer: both centres share their luck. Taken as
    # independent, groups of the same households would hardly ever come below 5 %.
    def draw(rng):
        groups = []
        homes = rng.normal(0, 300.0, size=(60, 2))
        for start in (0, moved):
            label = np.repeat(np.arange(start, start + 30), rng.integers(1, 4, 30))
            x, y = (homes[label] + rng.normal(0, 60.0, size=(len(label), 2))).T
            groups.append(sampled_centre(x, y, None, label))
        return groups

    reached = levels_reached(draw, 1500, 14)
    assert reached == pytest.approx([0.05, 0.5], abs=0.035)
    assert reached[0] > 0.02


def test_chance_of_a_distance_of_whole_pairs_is_hotellings_one_sample_test():
    # Everyone has one record in each group: the differences are one sample, and T^2 (n - 2) /
    # (2 (n - 1)) is F with 2 and n - 2 (Mardia, Kent & Bibby 1979, section 5.2; scipy's F).
    rng = np.random.default_rng(15)
    first, moves = rng.normal(size=(2, 2, 12))
    label = np.arange(12)
    groups = [sampled_centre(*places, None, label) for places in (first, first + moves + 0.4)]
    mean = (moves + 0.4).mean(axis=1)
    squared = 12 * mean @ np.linalg.solve(np.cov(moves), mean)
    assert chance_of_distance(*groups) == pytest.approx(stats.f.sf(squared * 10 / 22, 2, 10))


def test_chance_of_a_distance_of_many_records_by_hand_and_of_too_few():
    # Two squares of 10,000 records at each corner, (±1, ±2) times sqrt(20,000): V = 2 diag(20,000,
    # 80,000) / 40,000 = diag(1, 4) and T^2 = 2^2 / 1 + 4^2 / 4 = 8. F with many degrees of freedom
    # tends to chi-square(2): exp(-4).
    corners = np.array([[-1, 1, -1, 1], [-2, -2, 2, 2]]) * math.sqrt(20_000)
    x, y = np.repeat(corners, 10_000, axis=1)
    far = sampled_centre(x + 2, y + 4)
    assert chance_of_distance(sampled_centre(x, y), far) == pytest.approx(math.exp(-4.0), rel=1e-3)
    for few in ([[0.0], [0.0]], [[0.0, 1.0], [0.0, 3.0]], np.zeros((2, 9))):
        assert math.isnan(chance_of_distance(sampled_centre(*few), sampled_centre(*few)))
    # one record pulls its centre nowhere: its certainty must not be taken for granted
    assert math.isnan(chance_of_distance(sampled_centre([0.0], [0.0]), far))


def test_the_same_generator_gives_the_same_ellipse():
    x, y = np.random.default_rng(1).normal(size=(2, 30))
    first = confidence_ellipse(x, y, rng=np.random.default_rng(5))
    assert first == confidence_ellipse(x, y, rng=np.random.default_rng(5))


def test_no_confidence_ellipse_where_nothing_can_be_said():
    rng = np.random.default_rng(0)
    assert confidence_ellipse([1.0], [2.0], rng=rng) is None
    assert confidence_ellipse([1.0, 2.0], [2.0, 5.0], rng=rng) is None
    assert confidence_ellipse([3.0] * 9, [4.0] * 9, rng=rng) is None
    line = np.arange(20.0)
    assert confidence_ellipse(line, 2 * line, rng=rng) is None


def test_bootstrap_can_be_cancelled():
    def cancel(share):
        raise CancelledError

    x, y = np.random.default_rng(1).normal(size=(2, 30))
    with pytest.raises(CancelledError):
        confidence_ellipse(x, y, rng=np.random.default_rng(1), progress=cancel)
