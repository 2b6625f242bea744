"""Cross-validation curves against the sums over all pairs that define them."""

import numpy as np
import pytest
from steadfield.algorithms.numeric import bandwidth, crossvalidation, pairsums
from steadfield.algorithms.numeric.errors import CancelledError, InputError


def squared_distances(x, y):
    return (x[:, None] - x) ** 2 + (y[:, None] - y) ** 2


def least_squares_by_pairs(x, y, weights, bandwidths):
    """Scores and their first term, pair by pair."""
    squares = squared_distances(x, y)
    products = np.multiply.outer(weights, weights)
    others = ~np.eye(x.size, dtype=bool)
    total = weights.sum()
    first = np.array(
        [(products * np.exp(-squares / (4 * h**2))).sum() / (4 * np.pi * h**2) for h in bandwidths]
    )
    first /= total**2
    second = np.array(
        [
            (products * np.exp(-squares / (2 * h**2)))[others].sum() / (2 * np.pi * h**2)
            for h in bandwidths
        ]
    )
    second /= products[others].sum()
    return first - 2 * second, first


def likelihood_by_pairs(x, y, weights, bandwidths):
    """Leave-one-out log likelihood, pair by pair, in logarithms."""
    squares = squared_distances(x, y)
    scores = []
    for h in bandwidths:
        terms = np.log(weights) - squares / (2 * h**2)
        np.fill_diagonal(terms, -np.inf)
        logs = np.logaddexp.reduce(terms, axis=1) - np.log(2 * np.pi * h**2)
        scores.append(weights @ (logs - np.log(weights.sum() - weights)) / weights.sum())
    return np.array(scores)


def pattern(kind, count=500):
    """Records of several kinds that have troubled such sums."""
    generator = np.random.default_rng(17)
    x, y = 500_000 + generator.normal(0, 900, (2, count))
    weights = np.ones(count)
    if kind == "clustered":
        centres = generator.normal(0, 3000, (2, 12))
        x, y = centres[:, generator.integers(0, 12, count)] + generator.normal(0, 90, (2, count))
    if kind == "weighted":
        weights = generator.pareto(1.2, count) + 0.01
    if kind == "stacked":
        x[:200], y[:200] = x[200:400], y[200:400]
    if kind == "far":
        x[0] += 4e6
        y[1:4] -= 60_000
    if kind == "rows and columns":
        x, y = np.round(x / 5) * 5, np.round(y / 5) * 5
    return x, y, weights


KINDS = ["round", "clustered", "weighted", "stacked", "far", "rows and columns"]


def bandwidths_for(kind, x, y):
    if kind == "rows and columns":
        return np.geomspace(15.0, 600.0, 12)  # the lattice of the transform is that of the records
    scale = bandwidth.normal_scale(x, y)
    return np.geomspace(scale / 15, 1.5 * scale, 12)


@pytest.mark.parametrize("kind", KINDS)
def test_least_squares_curve_equals_the_pair_sum(kind):
    x, y, weights = pattern(kind)
    bandwidths = bandwidths_for(kind, x, y)
    expected, first = least_squares_by_pairs(x, y, weights, bandwidths)
    found = crossvalidation.least_squares_scores(x, y, bandwidths, weights)
    # relative to the score, or to its first term where the score passes through 0
    assert np.all(np.abs(found - expected) <= 1e-6 * np.maximum(np.abs(expected), first))


@pytest.mark.parametrize("pairs_per_node", [0, 1e9])
@pytest.mark.parametrize("kind", KINDS)
def test_likelihood_curve_equals_the_pair_sum(kind, pairs_per_node, monkeypatch):
    # read off surfaces, or all pairs
    monkeypatch.setattr(crossvalidation, "PAIRS_PER_NODE", pairs_per_node)
    x, y, weights = pattern(kind)
    bandwidths = bandwidths_for(kind, x, y)
    expected = likelihood_by_pairs(x, y, weights, bandwidths)
    found = crossvalidation.likelihood_scores(x, y, bandwidths, weights)
    np.testing.assert_allclose(found, expected, rtol=0, atol=5e-6)


def test_likelihood_of_very_lonely_records_does_not_underflow(monkeypatch):
    monkeypatch.setattr(crossvalidation, "PAIRS_PER_NODE", 0)
    x, y = np.array([0.0, 1000.0, 2500.0]), np.zeros(3)
    bandwidths = np.array([2.0, 5.0])
    expected = likelihood_by_pairs(x, y, np.ones(3), bandwidths)
    assert expected.max() < -5000  # exp of it is 0 in floating point
    found = crossvalidation.likelihood_scores(x, y, bandwidths)
    np.testing.assert_allclose(found, expected, rtol=1e-12)


def test_likelihood_of_a_record_far_from_a_dense_crowd_is_exact(monkeypatch):
    monkeypatch.setattr(crossvalidation, "PAIRS_PER_NODE", 0)
    generator = np.random.default_rng(2)
    x, y = generator.normal(0, 1, (2, 400))
    x[0] = 30.0
    bandwidths = np.array([0.5, 1.0])
    expected = likelihood_by_pairs(x, y, np.ones(400), bandwidths)
    found = crossvalidation.likelihood_scores(x, y, bandwidths)
    np.testing.assert_allclose(found, expected, rtol=0, atol=5e-6)


def test_weights_count_equal_records_in_the_pair_sum():
    x, y, _ = pattern("round", 60)
    spectrum = pairsums.record_spectrum(x, y, np.full(60, 3.0), 100.0, 400.0)
    thrice = pairsums.record_spectrum(np.repeat(x, 3), np.repeat(y, 3), np.ones(180), 100.0, 400.0)
    widths = np.array([100.0, 300.0])
    np.testing.assert_allclose(
        pairsums.pair_sums(spectrum, widths),
        pairsums.pair_sums(thrice, widths),
        rtol=1e-12,
    )


def test_least_squares_score_estimates_the_squared_error():
    # for records of a normal law the mean score is that of the closed form of the squared error
    generator = np.random.default_rng(41)
    count, h = 200, 0.4
    scores = [
        crossvalidation.least_squares_scores(*generator.normal(0, 1, (2, count)), h)[0]
        for _ in range(60)
    ]
    both = 1 / (4 * np.pi * h**2) / count + (1 - 1 / count) / (4 * np.pi * (1 + h**2))
    crossed = 1 / (2 * np.pi * (2 + h**2))
    standard_error = np.std(scores) / np.sqrt(len(scores))
    assert abs(np.mean(scores) - (both - 2 * crossed)) < 3.5 * standard_error


def test_two_records_are_needed():
    for scores in (crossvalidation.least_squares_scores, crossvalidation.likelihood_scores):
        with pytest.raises(InputError, match="two records"):
            scores([1.0], [2.0], [10.0])
        with pytest.raises(InputError, match="two records"):
            scores([1.0, 5.0], [2.0, 3.0], [10.0], weights=[1.0, 0.0])


def test_bandwidths_that_no_lattice_holds_are_refused_with_one_that_fits():
    generator = np.random.default_rng(1)
    x, y = generator.uniform(0, 1e5, (2, 3000))
    with pytest.raises(InputError, match="start at"):
        crossvalidation.least_squares_scores(x, y, [1.0, 1000.0])
    least = pairsums.narrowest_bandwidth(x, y, 1000.0)
    assert 50 < least < 200
    pairsums.record_spectrum(x, y, None, 20 * least, 1000.0 + 20 * least)


def test_cancelling_stops_the_likelihood():
    def cancel(share):
        raise CancelledError

    x, y, weights = pattern("round")
    with pytest.raises(CancelledError):
        crossvalidation.likelihood_scores(x, y, [100.0, 200.0], weights, progress=cancel)
