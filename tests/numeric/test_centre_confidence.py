"""Coverage of confidence ellipses by simulation, closed forms, and refusals."""

import math

import numpy as np
import pytest
from steadfield.algorithms.numeric.centre_confidence import (
    centre_covariance,
    chance_of_distance,
    confidence_ellipse,
)
from steadfield.algorithms.numeric.centres import deviation_ellipse, mean_centre
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


def test_chance_of_a_distance_is_uniform_when_nothing_moved():
    # 2,000 pairs: a share of 5 % is known to 0.5 %.
    rng = np.random.default_rng(12)
    chances = []
    for _ in range(2000):
        groups = rng.normal(size=(2, 2, 80)) * np.array([[400.0], [150.0]])
        first, second = ((mean_centre(*g), centre_covariance(*g)) for g in groups)
        chances.append(chance_of_distance(*first, *second))
    for level in (0.05, 0.5):
        assert np.mean(np.array(chances) < level) == pytest.approx(level, abs=0.02 + 0.02 * level)


def test_chance_of_a_distance_by_hand_and_of_one_place():
    # V_1 + V_2 = diag(2, 8): T^2 = 4 / 2 + 16 / 8 = 4.
    chance = chance_of_distance((0, 0), np.diag([1.0, 4.0]), (2, 4), np.diag([1.0, 4.0]))
    assert chance == pytest.approx(math.exp(-2.0))
    assert math.isnan(chance_of_distance((0, 0), np.zeros((2, 2)), (2, 4), np.zeros((2, 2))))


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
