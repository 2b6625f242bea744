"""Raw data as accumulated ink: the more features of a layer overlap, the fuller its ink."""

import numpy as np

from .errors import InputError

# The number of features that nearly fills a pixel is met or passed by this share of used pixels.
FULL_QUANTILE = 0.99
NEARLY_FULL = 0.95
# Room for overlaps to show where features seldom overlap.
LEAST_FULL = 3


def ink_per_feature(counts):
    """Ink of one feature, so that all but the fullest pixels of a layer stay short of full.

    Parameters
    ----------
    counts : array
        Number of features on each pixel.

    Returns
    -------
    ink : float
        Above 0 and below 0.64, see `accumulate`.
    full : int
        The number of features whose ink adds up to 0.95: the 99 % quantile over the pixels that
        hold any, 3 at least (common practice, no source).

    Raises
    ------
    InputError
        No pixel holds a feature.
    """
    used = np.asarray(counts)[np.asarray(counts) > 0]
    if len(used) == 0:
        raise InputError("No feature lies on the grid; choose layers and a grid of one area.")
    full = max(int(np.ceil(np.quantile(used, FULL_QUANTILE))), LEAST_FULL)
    return 1 - (1 - NEARLY_FULL) ** (1 / full), full


def features_to_fill(ink):
    """Number of overlapping features whose ink adds up to 0.95 or more."""
    if ink >= NEARLY_FULL:
        return 1
    return int(np.ceil(np.log(1 - NEARLY_FULL) / np.log(1 - ink) - 1e-9))


def accumulate(counts, ink):
    """Strength of a layer where features overlap.

    Each feature lays the same see-through ink over what is there: 1 - (1 - ink)^count, as with
    coats of paint.

    Parameters
    ----------
    counts : array
        Number of features on each pixel.
    ink : float
        Ink of one feature, above 0 and up to 1.

    Returns
    -------
    float32 array of the same shape
        0 to 1.

    Raises
    ------
    InputError
        The ink is out of range.
    """
    if not 0 < ink <= 1:
        raise InputError("The ink of one feature must be above 0 and up to 1; found {}.", ink)
    return np.asarray(1 - (1 - ink) ** np.asarray(counts, float), np.float32)


def count_points(x, y, grid):
    """Number of points on each pixel.

    Parameters
    ----------
    x, y : (n,) arrays
        Units of the working CRS.
    grid : numeric.grid.Grid

    Returns
    -------
    (rows, columns) int64 array
    """
    rows, columns, inside = grid.pixels(x, y)
    places = rows[inside] * grid.columns + columns[inside]
    return np.bincount(places, minlength=grid.rows * grid.columns).reshape(grid.shape)
