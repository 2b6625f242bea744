"""Loss of a protected map against independent libraries and closed forms."""

import numpy as np
import pytest
from scipy.stats import spearmanr
from steadfield.algorithms.numeric.loss import hellinger_distance, rank_correlation


def test_hellinger_distance_has_its_known_ends_and_value():
    assert hellinger_distance([1, 2, 3], [2, 4, 6]) == pytest.approx(0, abs=1e-7)
    assert hellinger_distance([1, 0], [0, 5]) == pytest.approx(1)
    # (1/2, 1/2) and (1, 0): 1 - sqrt(1/2), by the definition
    assert hellinger_distance([1, 1], [1, 0]) == pytest.approx(np.sqrt(1 - np.sqrt(0.5)))
    assert np.isnan(hellinger_distance([0, 0], [1, 1]))


def test_rank_correlation_agrees_with_scipy_with_ties():
    rng = np.random.default_rng(3)
    first = rng.integers(0, 9, 200)
    second = first + rng.integers(0, 6, 200)
    assert rank_correlation(first, second) == pytest.approx(spearmanr(first, second)[0])
    assert np.isnan(rank_correlation([1, 1], [1, 2]))
