"""What a protected map has lost: distance between distributions, and of ranks."""

import numpy as np
from scipy.stats import rankdata


def hellinger_distance(first, second):
    """Hellinger distance of two distributions over the same cells, 0 (equal) to 1 (apart).

    sqrt(1 - sum_i sqrt(p_i q_i)) with p and q the shares of the totals.

    Parameters
    ----------
    first, second : (n,) float arrays
        0 or more; negative values count as 0.

    Returns
    -------
    float
        NaN where one of them sums to zero.

    References
    ----------
    Hundepool et al. (2012), Statistical Disclosure Control, Wiley: information loss of
    frequency tables.
    """
    first = np.maximum(np.asarray(first, float), 0.0)
    second = np.maximum(np.asarray(second, float), 0.0)
    if not (first.sum() > 0 and second.sum() > 0):
        return float("nan")
    overlap = np.sqrt(first / first.sum() * (second / second.sum())).sum()
    return float(np.sqrt(max(1.0 - overlap, 0.0)))


def rank_correlation(first, second):
    """Spearman's rank correlation with mean ranks for ties; NaN where one has no spread."""
    first, second = rankdata(first), rankdata(second)
    first, second = first - first.mean(), second - second.mean()
    scale = np.sqrt((first**2).sum() * (second**2).sum())
    return float((first * second).sum() / scale) if scale > 0 else float("nan")
