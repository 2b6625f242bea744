"""One row of numbers that describes a zoning: spread, clustering, segregation of its zones.

Every function works on the last axis, so that many zonings of up to k zones go through at once as
(zonings, k) arrays of counts and totals. Zones that a zoning does not have, or that hold no
total, have total 0 and drop out.
"""

from dataclasses import dataclass, fields

import numpy as np

from .variance import RATE, SHARE, zone_values


@dataclass(frozen=True)
class ZoneStatistics:
    """Statistics of each zoning, (zonings...) arrays; NaN where undefined.

    Attributes
    ----------
    largest, smallest, value_range : value of the highest and the lowest zone, and their difference
    variation : total-weighted coefficient of variation of the zone values
    dissimilarity : share of the counts that would have to move for all zones to be alike, 0 to 1
    share_above : share of the total in zones above the threshold
    zones : number of zones with a total
    """

    largest: np.ndarray
    smallest: np.ndarray
    value_range: np.ndarray
    variation: np.ndarray
    dissimilarity: np.ndarray
    share_above: np.ndarray
    zones: np.ndarray

    @classmethod
    def names(cls):
        """Names of the statistics, in order."""
        return tuple(field.name for field in fields(cls))


def zone_statistics(count, total, threshold, kind=RATE):
    """The statistics of one or many zonings.

    Parameters
    ----------
    count, total : (..., k) arrays
        Of each zone; a zone with total 0 drops out.
    threshold : float
        Value that `share_above` is counted against.
    kind : {"share", "rate"}
        Decides the index of dissimilarity, see there.

    Returns
    -------
    ZoneStatistics of arrays without the last axis
    """
    count, total = np.asarray(count, float), np.asarray(total, float)
    used = total > 0
    value = zone_values(count, total)
    some = used.any(axis=-1)
    largest = _or_missing(np.where(used, value, -np.inf).max(axis=-1, initial=-np.inf), some)
    smallest = _or_missing(np.where(used, value, np.inf).min(axis=-1, initial=np.inf), some)
    whole = np.where(used, total, 0.0).sum(axis=-1)
    above = np.where(used & (value > threshold), total, 0.0).sum(axis=-1)
    return ZoneStatistics(
        largest,
        smallest,
        largest - smallest,
        weighted_variation(count, total),
        dissimilarity(count, total, kind),
        _ratio(above, whole),
        used.sum(axis=-1),
    )


def weighted_variation(count, total):
    """Total-weighted coefficient of variation of the zone values.

    sqrt(sum N (v - V)^2 / sum N) / V, with V = sum count / sum N the overall value.

    Parameters
    ----------
    count, total : (..., k) arrays

    Returns
    -------
    (...) array
        NaN without any total or any count.
    """
    count, total = np.asarray(count, float), np.asarray(total, float)
    used = total > 0
    total = np.where(used, total, 0.0)
    whole = total.sum(axis=-1)
    overall = _ratio(np.where(used, count, 0.0).sum(axis=-1), whole)
    deviation = np.where(used, zone_values(count, total) - overall[..., None], 0.0)
    spread = _ratio((total * deviation**2).sum(axis=-1), whole)
    return _ratio(np.sqrt(spread), overall)


def dissimilarity(count, total, kind=RATE):
    """Index of dissimilarity between the counts and what they are compared with.

    1/2 sum |c/C - m/M|: for a share, m = total - count, the members that are not counted
    (Duncan & Duncan 1955, Am. Sociol. Rev. 20:210); for a rate, m = total (Hoover 1936, Rev.
    Econ. Stat. 18:162).

    Parameters
    ----------
    count, total : (..., k) arrays
    kind : {"share", "rate"}

    Returns
    -------
    (...) array
        0 (all zones alike) to 1; NaN where one of the two is empty.
    """
    used = np.asarray(total) > 0
    count = np.where(used, count, 0.0)
    other = np.where(used, total, 0.0) - (count if kind == SHARE else 0.0)
    whole, others = count.sum(axis=-1), other.sum(axis=-1)
    gap = _ratio(count, whole[..., None]) - _ratio(other, others[..., None])
    return 0.5 * np.abs(gap).sum(axis=-1)


def morans_i(value, i, j, zoning=None):
    """Moran's I of zone values over pairs of neighbouring zones, each pair weighing 1.

    I = (n / W) sum_ij w_ij (v_i - m)(v_j - m) / sum_i (v_i - m)^2, with m the plain mean of the n
    zones that have a value and W the number of pairs, counted both ways. Expected without any
    clustering: -1 / (n - 1).

    Parameters
    ----------
    value : (k,) or (zonings, k) array
        NaN where a zone has no value or is not used.
    i, j : (pairs,) int arrays
        Zones that are neighbours, each pair once; pairs with a missing value drop out.
    zoning : (pairs,) int array, optional
        Which zoning a pair belongs to; needed when there are several.

    Returns
    -------
    float or (zonings,) array
        NaN where all values are equal or no pair is left.

    References
    ----------
    Moran (1950), Biometrika 37:17; Cliff & Ord (1981), Spatial Processes.
    """
    value = np.asarray(value, float)
    several = np.atleast_2d(value)
    rows = np.zeros(len(i), np.intp) if zoning is None else np.asarray(zoning)
    present = ~np.isnan(several)
    number = present.sum(axis=-1)
    mean = _ratio(np.where(present, several, 0.0).sum(axis=-1), number)
    deviation = np.where(present, several - mean[:, None], 0.0)
    squares = np.square(deviation).sum(axis=-1)
    both = present[rows, i] & present[rows, j]
    product = deviation[rows, i] * deviation[rows, j]
    cross = np.bincount(rows, weights=product, minlength=len(several))
    pairs = np.bincount(rows[both], minlength=len(several))
    # Rounding leaves equal values a few bits apart; that is not a spread.
    size = np.where(present, np.abs(several), 0.0).max(axis=-1, initial=0.0)
    squares = np.where(squares > number * (1e-12 * size) ** 2, squares, 0.0)
    result = _ratio(number * cross, pairs * squares)
    return result if value.ndim > 1 else float(result[0])


def summarise(values):
    """Lowest, 5 %, 50 % and 95 % quantile, and highest of a statistic over scenarios.

    Parameters
    ----------
    values : (scenarios,) array
        NaN where a scenario has none.

    Returns
    -------
    (5,) array
        Quantiles interpolated between neighbouring values; NaN without any value.
    """
    values = np.asarray(values, float)
    values = values[~np.isnan(values)]
    return np.quantile(values, [0, 0.05, 0.5, 0.95, 1]) if len(values) else np.full(5, np.nan)


def _or_missing(values, known):
    return np.where(known, values, np.nan)


def _ratio(part, whole):
    """Quotient of any two arrays; NaN where the divisor is 0."""
    part, whole = np.broadcast_arrays(np.asarray(part, float), np.asarray(whole, float))
    return np.divide(part, whole, out=np.full(part.shape, np.nan), where=whole != 0)
