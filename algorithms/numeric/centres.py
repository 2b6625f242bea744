"""Where records are centred and how far they spread.

Directions are bearings in degrees, clockwise from the north of the map. Weights are above or equal
to 0 with a positive sum; without them every record counts 1.
"""

import math
from dataclasses import dataclass

import numpy as np

from .errors import InputError


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
    x, y, weights = checked_records(x, y, weights)
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
    spread = _covariance(*checked_records(x, y, weights))
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
    x, y, weights = checked_records(x, y, weights)
    centre = mean_centre(x, y, weights)
    return covariance_ellipse(*centre, deviations**2 * _covariance(x, y, weights))


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
    x, y, weights = checked_records(x, y, weights)
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


def bearing(from_x, from_y, to_x, to_y):
    """Direction from places to others, 0 to below 360 degrees clockwise from north."""
    east, north = np.subtract(to_x, from_x), np.subtract(to_y, from_y)
    return np.degrees(np.arctan2(east, north)) % 360.0


def checked_records(x, y, weights):
    """Places and weights as float arrays, weights of 1 where there are none.

    Raises
    ------
    InputError
        No record, a weight that is not finite or below 0, or weights that add up to 0.
    """
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


def covariance_ellipse(x, y, covariance):
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
