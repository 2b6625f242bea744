"""Two-sided geometric noise against its closed form, and the promise of privacy by enumeration."""

import math

import numpy as np
import pytest
from scipy import stats
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.noise import (
    bounded_contributions,
    geometric_noise,
    noise_probability,
    not_below_zero,
    rehearsal_source,
    scale_of,
    system_source,
)


@pytest.mark.parametrize(
    ("epsilon", "sensitivity", "seed"), [(1.0, 1, 1), (0.3, 1, 2), (2.5, 1, 3), (1.0, 3, 4)]
)
def test_the_draws_follow_the_closed_form(epsilon, sensitivity, seed):
    source = rehearsal_source(np.random.default_rng(seed))
    draws = geometric_noise(40_000, epsilon, sensitivity, source)
    a = math.exp(-epsilon / sensitivity)
    reach = int(math.log(20 / 40_000) / math.log(a))
    k = np.arange(-reach, reach + 1)
    observed = np.array([(draws == value).sum() for value in k])
    # Ghosh, Roughgarden & Sundararajan 2012: P(k) = (1 - a)/(1 + a) a^|k|; the tails in one class
    expected = 40_000 * (1 - a) / (1 + a) * a ** np.abs(k)
    observed = np.append(observed, 40_000 - observed.sum())
    expected = np.append(expected, 40_000 - expected.sum())
    assert stats.chisquare(observed, expected).pvalue > 0.001
    # variance 2a/(1 - a)^2
    assert draws.var() == pytest.approx(2 * a / (1 - a) ** 2, rel=0.05)


def test_the_probabilities_sum_to_one():
    k = np.arange(-400, 401)
    assert noise_probability(k, 0.5).sum() == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(("epsilon", "limit"), [(0.5, 1), (1.0, 2), (2.0, 3)])
def test_neighbouring_data_give_every_output_nearly_as_often(epsilon, limit):
    """Add one person with up to `limit` records to every small table of two cells."""
    outputs = np.arange(-12, 16)
    for first in range(3):
        for second in range(3):
            for more in range(limit + 1):
                for other in range(limit + 1 - more):
                    one = np.outer(
                        noise_probability(outputs - first, epsilon, limit),
                        noise_probability(outputs - second, epsilon, limit),
                    )
                    two = np.outer(
                        noise_probability(outputs - first - more, epsilon, limit),
                        noise_probability(outputs - second - other, epsilon, limit),
                    )
                    assert np.abs(np.log(one / two)).max() <= epsilon + 1e-9


def test_the_scale_never_promises_more_than_it_keeps():
    rng = np.random.default_rng(2)
    for epsilon in rng.uniform(0.001, 5, 300):
        assert scale_of(float(epsilon), 3) <= epsilon / 3


def test_one_person_changes_the_counts_by_no_more_than_the_limit():
    rng = np.random.default_rng(4)
    contributors = rng.integers(0, 30, 500)
    kept = bounded_contributions(contributors, 3, rehearsal_source(rng))
    assert np.bincount(contributors[kept]).max() == 3
    assert kept.sum() == np.minimum(np.bincount(contributors), 3).sum()


def test_records_of_unknown_contributors_are_left_out():
    kept = bounded_contributions(np.array([-1, 0, -1, 1]), 2, system_source())
    assert kept.tolist() == [False, True, False, True]
    assert bounded_contributions(None, 1, system_source()) is None


def test_a_seed_repeats_the_noise_and_the_system_source_does_not():
    drawn = [
        geometric_noise(50, 0.2, 1, rehearsal_source(np.random.default_rng(9))) for _ in range(2)
    ]
    assert (drawn[0] == drawn[1]).all()
    one, two = (geometric_noise(200, 0.2, 1, system_source()) for _ in range(2))
    assert (one != two).any()


def test_lifting_to_zero_keeps_the_rest():
    assert not_below_zero(np.array([-3, 0, 5])).tolist() == [0, 0, 5]


@pytest.mark.parametrize("epsilon", [0, -1, float("nan"), 1e-9, 51])
def test_a_budget_that_means_nothing_is_refused(epsilon):
    with pytest.raises(InputError, match="EPSILON"):
        scale_of(epsilon, 1)


def test_a_contribution_limit_below_one_is_refused():
    with pytest.raises(InputError, match="CONTRIBUTION_LIMIT"):
        bounded_contributions(np.array([0]), 0, system_source())
