"""Where records are centred, how far they spread, and how sure the centre is.

Directions are bearings in degrees, clockwise from the north of the map. Weights are above or equal
to 0 with a positive sum; without them every record counts 1.
"""

import math
from dataclasses import dataclass

import numpy as np

from .errors import InputError
from .progress import silent

RESAMPLED_AT_ONCE = 2_000_000


@dataclass(frozen=True)
class Ellipse:
    """An ellipse on the map.

    Attributes
    ----------
    x, y : float
        Middle, units of the working CRS.
    semi_major, semi_minor : float
        Half the long and half the short axis, same units.
    bearing : float
        Direction of the long axis, 0 to below 180 degrees clockwise from north; 0 for a circle.
    """

    x: float
    y: float
    semi_major: float
    semi_minor: float
    bearing: float

    @property
    def area(self):
        return math.pi * self.semi_major * self.semi_minor

    def outline(self, vertices=72):
        """Places along the ellipse, anticlockwise and closed, (vertices + 1, 2) array."""
        turn = np.linspace(0.0, 2.0 * math.pi, vertices + 1)
        turn[-1] = 0.0
        # The long axis points along the bearing, the short one a quarter turn anticlockwise of it.
        angle = math.radians(90.0 - self.bearing)
        along, across = self.semi_major * np.cos(turn), self.semi_minor * np.sin(turn)
        return np.column_stack(
            [
                self.x + along * math.cos(angle) - across * math.sin(angle),
                self.y + along * math.sin(angle) + across * math.cos(angle),
            ]
        )

    def contains(self, x, y):
        """Whether each place lies inside or on the ellipse, bool array shaped like x."""
        angle = math.radians(90.0 - self.bearing)
        across_x, across_y = np.asarray(x, float) - self.x, np.asarray(y, float) - self.y
        along = across_x * math.cos(angle) + across_y * math.sin(angle)
        across = across_y * math.cos(angle) - across_x * math.sin(angle)
        with np.errstate(divide="ignore", invalid="ignore"):
            reach = np.hypot(along / self.semi_major, across / self.semi_minor)
        return reach <= 1.0


def mean_centre(x, y, weights=None):
    """Weighted mean centre.

    Parameters
    ----------
    x, y : (n,) arrays
    weights : (n,) array, optional

    Returns
    -------
    (x, y) : floats
    """
    x, y, weights = _checked(x, y, weights)
    total = weights.sum()
    # Taken from the first record: projected coordinates are large against their spread.
    return (
        float(x[0] + weights @ (x - x[0]) / total),
        float(y[0] + weights @ (y - y[0]) / total),
    )


def standard_distance(x, y, weights=None):
    """Standard distance: the root mean square distance of the records from their mean centre.

    sqrt(sum_i w_i d_i^2 / sum_i w_i), divided by the total weight and not by n - 2: it describes
    these records, it does not estimate a population.

    Parameters
    ----------
    x, y : (n,) arrays
    weights : (n,) array, optional

    Returns
    -------
    float

    References
    ----------
    Bachi (1963), Papers of the Regional Science Association 10:83.
    """
    spread = _covariance(*_checked(x, y, weights))
    return math.sqrt(spread[0, 0] + spread[1, 1])


def deviation_ellipse(x, y, weights=None, deviations=1.0):
    """Standard deviational ellipse around the mean centre.

    Its semi-axes are ``deviations`` times the roots of the eigenvalues of the weighted covariance
    matrix (divisor: total weight), so half an axis is one standard deviation of the records along
    it, and semi_major^2 + semi_minor^2 is the squared standard distance. Of a bivariate normal
    cloud the ellipse holds 1 - exp(-deviations^2 / 2): 39.3 % for 1, 63.2 % for sqrt(2), 86.5 % for
    2. Conventions differ by a factor of sqrt(2) between authors; this is the plain one.

    Parameters
    ----------
    x, y : (n,) arrays
    weights : (n,) array, optional
    deviations : float

    Returns
    -------
    Ellipse
        With semi-axes of 0 for a single place, and semi_minor 0 for records on one line.

    References
    ----------
    Lefever (1926), American Journal of Sociology 32:88, for the idea; Yuill (1971), Geografiska
    Annaler B 53:28; Wang, Shi & Miao (2015), PLoS ONE 10:e0118537, for the eigenvalue form and the
    shares.
    """
    x, y, weights = _checked(x, y, weights)
    centre = mean_centre(x, y, weights)
    return _ellipse(*centre, deviations**2 * _covariance(x, y, weights))


def geometric_median(x, y, weights=None):
    """Geometric median: the place with the smallest weighted sum of distances to the records.

    Weiszfeld's iteration in the form that may pass through a record (Vardi & Zhang 2000), with
    Newton steps where the sum is smooth. Where the median is a record, it is that record exactly.
    For an even number of records on one line every place between the middle two is a median; one of
    them is given.

    Parameters
    ----------
    x, y : (n,) arrays
    weights : (n,) array, optional

    Returns
    -------
    (x, y) : floats
        To about 1e-9 of the spread of the records.

    References
    ----------
    Weiszfeld (1937), Tohoku Mathematical Journal 43:355. Vardi & Zhang (2000), PNAS 97:1423.
    """
    x, y, weights = _checked(x, y, weights)
    centre = np.array(mean_centre(x, y, weights))
    places, inverse = np.unique(np.column_stack([x, y]), axis=0, return_inverse=True)
    weights = np.bincount(inverse.ravel(), weights, len(places))
    places, weights = places[weights > 0], weights[weights > 0]
    local = places - centre
    scale = math.sqrt(np.mean((local**2).sum(axis=1)))
    if scale == 0.0:
        return float(places[0, 0]), float(places[0, 1])
    at = np.zeros(2)
    for _ in range(1000):
        nearest = int(np.argmin(((local - at) ** 2).sum(axis=1)))
        pull = _pull(local, weights, local[nearest])[0]
        if np.hypot(*pull) <= weights[nearest]:
            return float(places[nearest, 0]), float(places[nearest, 1])
        moved = _median_step(local, weights, at)
        if np.hypot(*(moved - at)) <= 1e-11 * scale:
            at = moved
            break
        at = moved
    return float(centre[0] + at[0]), float(centre[1] + at[1])


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
        raise InputError(f"Confidence level must lie between 0 and 1; found {level}.")
    if rng is None:
        raise InputError("A bootstrap needs a random generator; pass rng.")
    x, y, weights = _checked(x, y, weights)
    centre = np.array(mean_centre(x, y, weights))
    sums = _contributor_sums(x - centre[0], y - centre[1], weights, contributors)
    covariance = _mean_covariance(_second_moments(sums).sum(axis=0)[None], np.zeros((1, 2)))[0]
    if len(sums) < 3 or not _well_conditioned(covariance):
        return None
    distances = _studentised_draws(sums, draws, rng, progress)
    limit = np.partition(distances, _rank(level, draws))[_rank(level, draws)]
    if not np.isfinite(limit):
        return None
    return _ellipse(centre[0], centre[1], limit * covariance)


def bearing(from_x, from_y, to_x, to_y):
    """Direction from places to others, 0 to below 360 degrees clockwise from north."""
    east, north = np.subtract(to_x, from_x), np.subtract(to_y, from_y)
    return np.degrees(np.arctan2(east, north)) % 360.0


def _checked(x, y, weights):
    x, y = np.asarray(x, float), np.asarray(y, float)
    if x.size == 0:
        raise InputError("A centre needs at least one record; found none.")
    if weights is None:
        weights = np.ones(len(x))
    weights = np.asarray(weights, float)
    if not (np.isfinite(weights).all() and (weights >= 0).all()):
        raise InputError(
            "Weights must be finite and not below 0; leave out the records that are not."
        )
    if not weights.sum() > 0:
        raise InputError("The weights of a group add up to 0; a centre needs a positive total.")
    return x, y, weights


def _covariance(x, y, weights):
    centre_x, centre_y = mean_centre(x, y, weights)
    deviations = np.stack([x - centre_x, y - centre_y])
    return (deviations * weights) @ deviations.T / weights.sum()


def _ellipse(x, y, covariance):
    """The ellipse whose squared semi-axes are the eigenvalues of a 2 x 2 matrix."""
    values, vectors = np.linalg.eigh(covariance)
    values = np.maximum(values, 0.0)
    if math.isclose(values[0], values[1], rel_tol=1e-12, abs_tol=0.0) or values[1] == 0.0:
        direction = 0.0
    else:
        east, north = vectors[:, 1]
        direction = math.degrees(math.atan2(east, north)) % 180.0
    return Ellipse(float(x), float(y), math.sqrt(values[1]), math.sqrt(values[0]), direction)


def _pull(places, weights, at):
    """Sum of the pulls of the places on ``at``, their distances, and pull per metre of offset."""
    offset = places - at
    distance = np.hypot(offset[:, 0], offset[:, 1])
    force = np.divide(weights, distance, out=np.zeros(len(weights)), where=distance > 0)
    return force @ offset, distance, force


def _median_step(places, weights, at):
    pull, distance, force = _pull(places, weights, at)
    here = weights[distance == 0].sum()
    strength = np.hypot(*pull)
    if strength == 0:
        return at
    weiszfeld = at + max(0.0, 1.0 - here / strength) * pull / force.sum()
    if here > 0:
        return weiszfeld
    unit = (places - at) / distance[:, None]
    curvature = force.sum() * np.eye(2) - (unit * force[:, None]).T @ unit
    if np.linalg.cond(curvature) > 1e10:
        return weiszfeld
    newton = at + np.linalg.solve(curvature, pull)
    return min((weiszfeld, newton), key=lambda place: weights @ np.hypot(*(places - place).T))


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
