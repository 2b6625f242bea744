"""How sure a mean centre is: bootstrap confidence ellipses and the chance of a distance.

The distribution of a centre is approached through its studentised distance, so that the ellipse
keeps its coverage for skewed and weighted records of some tens upwards.
"""

import math
from dataclasses import dataclass

import numpy as np

from .centres import checked_records, covariance_ellipse, mean_centre
from .errors import InputError
from .progress import silent

RESAMPLED_AT_ONCE = 2_000_000
LEAST_CONTRIBUTORS = 3


@dataclass(frozen=True)
class SampledCentre:
    """A weighted mean centre and what each contributor does to it.

    Attributes
    ----------
    place : (x, y)
    contributors : (c,) array or None
        Their labels; None where every record has its own and shares it with no other group.
    shares : (c,) array
        Share of the total weight, above 0.
    pulls : (c, 2) array
        Linearised effect on the centre, r_c / sum w with r_c = sum_{i in c} w_i (x_i - m).
    """

    place: tuple
    contributors: object
    shares: np.ndarray
    pulls: np.ndarray

    @property
    def size(self):
        """Number of equal contributors that would vary as much: 1 / sum of squared shares."""
        return 1.0 / float(np.square(self.shares).sum())


def confidence_ellipse(
    x, y, weights=None, contributors=None, level=0.95, draws=999, rng=None, progress=silent
):
    """Bootstrap confidence ellipse of the mean centre.

    Contributors (records without them) are drawn with replacement, weights and all. For
    each draw m* of the centre m the studentised distance T^2 = (m* - m)' V*^-1 (m* - m) is kept, V*
    being the draw's own linearised covariance of a weighted mean, sum_c r_c r_c' / (sum w)^2 with
    r_c = sum_{i in c} w_i (x_i - m*). The ellipse holds the places whose T^2 from m, by the data's
    own V, is at most the ``level`` quantile of the draws.

    Parameters
    ----------
    x, y : (n,) arrays
    weights : (n,) array, optional
    contributors : (n,) array, optional
        Labels of who each record belongs to; records of one contributor are drawn together.
    level : float
        Between 0 and 1.
    draws : int
    rng : numpy.random.Generator
    progress : callable

    Returns
    -------
    Ellipse or None
        None when the records are too few or lie on one line, so that nothing can be said.

    References
    ----------
    Hall (1987), Biometrika 74:481; Efron & Tibshirani (1993), An Introduction to the Bootstrap, ch.
    12; Cochran (1977), Sampling Techniques, ch. 6, for the linearised covariance.
    """
    if not 0.0 < level < 1.0:
        raise InputError("Confidence level must lie between 0 and 1; found {}.", level)
    if rng is None:
        raise InputError("A bootstrap needs a random generator; pass rng.")
    x, y, weights = checked_records(x, y, weights)
    centre = np.array(mean_centre(x, y, weights))
    sums = _contributor_sums(x - centre[0], y - centre[1], weights, contributors)
    covariance = centre_covariance(x, y, weights, contributors)
    if len(sums) < LEAST_CONTRIBUTORS or not _well_conditioned(covariance):
        return None
    distances = _studentised_draws(sums, draws, rng, progress)
    limit = np.partition(distances, _rank(level, draws))[_rank(level, draws)]
    if not np.isfinite(limit):
        return None
    return covariance_ellipse(centre[0], centre[1], limit * covariance)


def centre_covariance(x, y, weights=None, contributors=None):
    """Linearised covariance of the weighted mean centre, sum_c r_c r_c' / (sum w)^2.

    Parameters
    ----------
    x, y, weights, contributors : see `confidence_ellipse`

    Returns
    -------
    (2, 2) array
        Squared units of the working CRS.

    References
    ----------
    Cochran (1977), Sampling Techniques, ch. 6.
    """
    x, y, weights = checked_records(x, y, weights)
    centre = mean_centre(x, y, weights)
    sums = _contributor_sums(x - centre[0], y - centre[1], weights, contributors)
    return _mean_covariance(_second_moments(sums).sum(axis=0)[None], np.zeros((1, 2)))[0]


def sampled_centre(x, y, weights=None, contributors=None):
    """The mean centre of a group with the pull of each of its contributors.

    Parameters
    ----------
    x, y, weights, contributors : see `confidence_ellipse`

    Returns
    -------
    SampledCentre
        Contributors without weight are left out.
    """
    x, y, weights = checked_records(x, y, weights)
    place = mean_centre(x, y, weights)
    sums = _contributor_sums(x - place[0], y - place[1], weights, contributors)
    labels = None if contributors is None else np.unique(contributors)
    carrying = sums[:, 0] > 0
    sums, total = sums[carrying], sums[:, 0].sum()
    labels = labels if labels is None else labels[carrying]
    return SampledCentre(place, labels, sums[:, 0] / total, sums[:, 1:] / total)


def chance_of_distance(first, second):
    """Chance that two centres come to lie so far apart when their true places are the same.

    T^2 = d' V^-1 d, d the difference of the centres and V = sum_c d_c d_c' its covariance, d_c the
    difference of the pulls of contributor c in the two groups: one who has records in both moves
    both centres. Pulls carry sqrt(n / (n - 1)), n the effective number of contributors of the
    group. V is only as good as the contributors are many: T^2 is taken as Hotelling's with v
    degrees of freedom, T^2 (v - 1) / (2 v) as F with 2 and v - 1, for which the chance is
    (1 + T^2 / v)^(-(v - 1) / 2). v = 6 / sum_k (tr (V_k V^-1)^2 + (tr V_k V^-1)^2) / f_k over the
    contributors of the first group only, of the second only, and of both.

    Parameters
    ----------
    first, second : SampledCentre

    Returns
    -------
    float
        NaN with fewer than three contributors in either group, or where V is singular.

    References
    ----------
    Mardia, Kent & Bibby (1979), Multivariate Analysis, ch. 3 and 5; Krishnamoorthy & Yu (2004),
    Statistics & Probability Letters 66:161, for the degrees of freedom.
    """
    if min(len(first.shares), len(second.shares)) < LEAST_CONTRIBUTORS:
        return math.nan
    parts = [part for part in _difference_parts(first, second) if len(part[0])]
    covariances = [pulls.T @ pulls for pulls, _ in parts]
    covariance = np.sum(covariances, axis=0)
    if not _well_conditioned(covariance):
        return math.nan
    inverse = np.linalg.inv(covariance)
    lost = 0.0
    for own, (_, freedom) in zip(covariances, parts):
        relative = own @ inverse
        lost += (np.trace(relative @ relative) + np.trace(relative) ** 2) / freedom
    freedom = 6.0 / lost
    if freedom <= 1.0:
        return math.nan
    apart = np.subtract(first.place, second.place)
    return float((1.0 + apart @ inverse @ apart / freedom) ** (-0.5 * (freedom - 1.0)))


def _difference_parts(first, second):
    """Pulls on the difference of two centres, and degrees of freedom, by where contributors are.

    Three pairs ((c, 2) array, float): contributors of the first group only, of the second only, of
    both. The degrees of freedom of a sum of squares with unequal weights are those of as many equal
    ones, less what the means took.
    """
    sizes = first.size, second.size
    pulls = [
        group.pulls * math.sqrt(size / max(size - 1.0, 1e-9))
        for group, size in zip((first, second), sizes)
    ]
    shared = np.zeros((2, 0), int)
    if first.contributors is not None and second.contributors is not None:
        shared = np.array(np.intersect1d(first.contributors, second.contributors, True, True)[1:])
    alone = [np.setdiff1d(np.arange(len(own)), both) for own, both in zip(pulls, shared)]
    parts = [
        (own[rows], _freedom(group.shares[rows], size))
        for own, rows, group, size in zip(pulls, alone, (first, second), sizes)
    ]
    together = first.shares[shared[0]] + second.shares[shared[1]]
    difference = pulls[0][shared[0]] - pulls[1][shared[1]]
    return [*parts, (difference, _freedom(together, min(sizes)))]


def _freedom(shares, size):
    squares = np.square(shares)
    if not len(squares):
        return 0.0
    return float(squares.sum() ** 2 / np.square(squares).sum() * (1.0 - 1.0 / size))


def _contributor_sums(x, y, weights, contributors):
    """Sums of w, w x and w y of every contributor, (c, 3) array."""
    parts = np.column_stack([weights, weights * x, weights * y])
    if contributors is None:
        return parts
    _, label = np.unique(contributors, return_inverse=True)
    return np.column_stack([np.bincount(label.ravel(), part) for part in parts.T])


def _second_moments(sums):
    """w, wx, wy and their products w w, w wx, w wy, wx wx, wx wy, wy wy, (c, 9) array."""
    w, wx, wy = sums.T
    return np.column_stack([w, wx, wy, w * w, w * wx, w * wy, wx * wx, wx * wy, wy * wy])


def _mean_covariance(moments, centre):
    """Linearised covariances of weighted means, (b, 2, 2), from summed moments and the means."""
    total, _, _, ww, wx, wy, xx, xy, yy = moments.T
    mean_x, mean_y = centre.T
    result = np.empty((len(moments), 2, 2))
    result[:, 0, 0] = xx - 2 * mean_x * wx + mean_x**2 * ww
    result[:, 1, 1] = yy - 2 * mean_y * wy + mean_y**2 * ww
    result[:, 0, 1] = xy - mean_x * wy - mean_y * wx + mean_x * mean_y * ww
    result[:, 1, 0] = result[:, 0, 1]
    return result / total[:, None, None] ** 2


def _well_conditioned(covariance):
    values = np.linalg.eigvalsh(covariance)
    return values[0] > 1e-12 * values[1]


def _rank(level, draws):
    """Position of the level quantile among the sorted draws, so that level is not undershot."""
    return min(math.ceil(level * (draws + 1)), draws) - 1


def _studentised_draws(sums, draws, rng, progress):
    """T^2 of every bootstrap draw around the centre at 0; infinite where a draw has no spread."""
    count = len(sums)
    moments = _second_moments(sums)
    batch = max(1, min(draws, RESAMPLED_AT_ONCE // count))
    distances = np.empty(draws)
    for start in range(0, draws, batch):
        size = min(batch, draws - start)
        chosen = rng.integers(0, count, (size, count)) + count * np.arange(size)[:, None]
        times = np.bincount(chosen.ravel(), minlength=size * count).reshape(size, count)
        drawn = times @ moments
        distances[start : start + size] = _squared_distances(drawn)
        progress((start + size) / draws)
    return distances


def _squared_distances(drawn):
    total = drawn[:, 0]
    weighed = total > 0
    distances = np.full(len(drawn), np.inf)
    drawn = drawn[weighed]
    centre = drawn[:, 1:3] / drawn[:, :1]
    covariance = _mean_covariance(drawn, centre)
    (a, b), (_, d) = covariance.transpose(1, 2, 0)
    determinant = a * d - b * b
    x, y = centre.T
    with np.errstate(divide="ignore", invalid="ignore"):
        squared = (d * x * x - 2 * b * x * y + a * y * y) / determinant
    distances[weighed] = np.where(determinant > 1e-12 * (a + d) ** 2, squared, np.inf)
    return distances
