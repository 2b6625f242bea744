"""How wide a kernel to use: rules of thumb from the spread of the records.

The bandwidth is the standard deviation of the Gaussian kernel on either axis, in units of the
working CRS.
"""

import math

import numpy as np

from .errors import InputError

QUARTILE_RANGE_OF_NORMAL = 1.3489795003921634


def normal_scale_constant(dimensions):
    """Factor of the normal-scale rule for the Gaussian kernel: (4 / (d + 2))^(1 / (d + 4)).

    Parameters
    ----------
    dimensions : int
        Number of coordinates d; 1.06 for d = 1 and 1 for d = 2.

    References
    ----------
    Silverman (1986), Density Estimation for Statistics and Data Analysis, section 4.3.2;
    Scott (1992), Multivariate Density Estimation, section 6.3.
    """
    return (4.0 / (dimensions + 2.0)) ** (1.0 / (dimensions + 4.0))


def oversmoothed_constant(dimensions):
    """Factor of the largest bandwidth that a density of given variance can ask for.

    The density that is easiest to estimate at a given variance is proportional to
    (1 - |x|^2 / (d + 8))^3; with the Gaussian kernel this gives the (d + 4)-th root of
    (d + 8)^((d + 6) / 2) / (16 (d + 2) 2^d Gamma((d + 8) / 2)).

    Parameters
    ----------
    dimensions : int
        Number of coordinates d; 1.144 for d = 1 and 1.085 for d = 2.

    References
    ----------
    Terrell (1990), Journal of the American Statistical Association 85:470-477.
    """
    d = float(dimensions)
    numerator = (d + 8.0) ** ((d + 6.0) / 2.0)
    denominator = 16.0 * (d + 2.0) * 2.0**d * math.gamma((d + 8.0) / 2.0)
    return (numerator / denominator) ** (1.0 / (d + 4.0))


def checked_records(x, y, weights=None):
    """Coordinates and weights as float arrays, records of no weight left out.

    Parameters
    ----------
    x, y : (n,) arrays
        Places, units of the working CRS.
    weights : (n,) array, optional
        Not negative; 1 each when left out.

    Returns
    -------
    x, y, weights : (m,) float arrays
        The records that carry weight.

    Raises
    ------
    InputError
        No record carries weight, a value is not finite, or a weight is negative.
    """
    x = np.asarray(x, float).ravel()
    y = np.asarray(y, float).ravel()
    weights = np.ones(x.size) if weights is None else np.asarray(weights, float).ravel()
    if not x.size == y.size == weights.size:
        raise InputError(
            "Coordinates and weights must be of one length; found {} x, {} y and {} weights.",
            x.size,
            y.size,
            weights.size,
        )
    if not (np.isfinite(x).all() and np.isfinite(y).all() and np.isfinite(weights).all()):
        raise InputError(
            "Coordinates and weights must be finite numbers; leave out the records without."
        )
    if (weights < 0).any():
        raise InputError(
            "Weights must not be negative; found {} that are. Leave those records out or "
            "correct the weight field.",
            int((weights < 0).sum()),
        )
    carrying = weights > 0
    if not carrying.any():
        raise InputError("No record carries any weight; check the layer and the weight field.")
    return x[carrying], y[carrying], weights[carrying]


def effective_size(weights):
    """Number of equal records that would vary as much: (sum w)^2 / sum w^2 (Kish 1965)."""
    weights = np.asarray(weights, float)
    return float(weights.sum() ** 2 / (weights**2).sum())


def standard_spread(x, y, weights=None):
    """Root of half the trace of the weighted covariance, units of the working CRS.

    The variance carries the factor n / (n - 1), n the effective number of records.
    """
    x, y, weights = checked_records(x, y, weights)
    size = effective_size(weights)
    share = weights / weights.sum()
    variance = 0.0
    for values in (x, y):
        offsets = values - values.min()
        variance += share @ (offsets - share @ offsets) ** 2
    if size - 1.0 > 1e-9:
        variance *= size / (size - 1.0)
    return math.sqrt(variance / 2.0)


def quartile_spread(x, y, weights=None):
    """Spread from the two interquartile ranges, scaled to agree with the normal distribution.

    Root of the mean of the squared ranges over 1.349: a few far records leave it alone.
    """
    x, y, weights = checked_records(x, y, weights)
    ranges = []
    for values in (x, y):
        low, high = _weighted_quantiles(values, weights, (0.25, 0.75))
        ranges.append(high - low)
    return math.hypot(*ranges) / math.sqrt(2.0) / QUARTILE_RANGE_OF_NORMAL


def spread(x, y, weights=None):
    """The smaller of the standard and the quartile spread; the standard one if the other is 0.

    Parameters
    ----------
    x, y : (n,) arrays
        Places, units of the working CRS.
    weights : (n,) array, optional

    Returns
    -------
    float
        Above 0, units of the working CRS.

    Raises
    ------
    InputError
        All records lie on one place, so that nothing can be learnt about a spread.

    References
    ----------
    Silverman (1986), section 3.4.2.
    """
    x, y, weights = checked_records(x, y, weights)
    if np.ptp(x) == 0 and np.ptp(y) == 0:
        raise InputError(
            "All {} records with weight lie on one place ({:.6g}, {:.6g}), so no bandwidth "
            "can be worked out from them; set BANDWIDTH by hand or check the coordinates.",
            x.size,
            x[0],
            y[0],
        )
    standard = standard_spread(x, y, weights)
    quartile = quartile_spread(x, y, weights)
    return min(standard, quartile) if quartile > 0 else standard


def normal_scale(x, y, weights=None):
    """Bandwidth that would be best if the records followed one round normal distribution.

    h = c s n^(-1/6): s the spread (smaller of standard and quartile spread), n the effective
    number of records, c = 1 in two dimensions. Too wide where records form several clusters.

    Parameters
    ----------
    x, y : (n,) arrays
        Places, units of the working CRS.
    weights : (n,) array, optional
        Not negative.

    Returns
    -------
    float
        Standard deviation of the Gaussian kernel, units of the working CRS.

    Raises
    ------
    InputError
        No record with weight, or all on one place.

    References
    ----------
    Silverman (1986), sections 3.4.2 and 4.3.2; Scott (1992), section 6.3.
    """
    x, y, weights = checked_records(x, y, weights)
    return (
        normal_scale_constant(2) * spread(x, y, weights) * effective_size(weights) ** (-1.0 / 6.0)
    )


def oversmoothed(x, y, weights=None):
    """The largest bandwidth that any density of the records' variance can ask for.

    h = 1.085 s n^(-1/6): s the standard spread, n the effective number of records. A wider
    kernel would blur for certain.

    Parameters, errors as for ``normal_scale``.

    References
    ----------
    Terrell (1990), Journal of the American Statistical Association 85:470-477.
    """
    x, y, weights = checked_records(x, y, weights)
    spread(x, y, weights)
    return (
        oversmoothed_constant(2)
        * standard_spread(x, y, weights)
        * effective_size(weights) ** (-1.0 / 6.0)
    )


def _weighted_quantiles(values, weights, shares):
    """Quantiles by linear interpolation at the middle of each record's weight."""
    order = np.argsort(values, kind="stable")
    ordered = weights[order]
    middles = (np.cumsum(ordered) - 0.5 * ordered) / ordered.sum()
    return np.interp(shares, middles, values[order])
