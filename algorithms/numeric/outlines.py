"""The densest ground that holds a stated share of a surface, and the regions it falls into."""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from .errors import InputError
from .progress import silent

# A region ends where only the corners of pixels meet, so that its polygon is valid
NEIGHBOURS = np.array([[0, 1, 0], [1, 1, 1], [0, 1, 0]])


@dataclass(frozen=True)
class Level:
    """The densest pixels that hold at least a share of the total.

    Attributes
    ----------
    share : float
        Asked for, 0 to 1.
    held : float
        Share that the pixels hold: the smallest one not below ``share`` that whole pixels, those
        of equal density all in or all out, can hold.
    threshold : float
        Density of the least dense pixel in it.
    pixels : int
    """

    share: float
    held: float
    threshold: float
    pixels: int


@dataclass(frozen=True)
class Regions:
    """Connected regions of all levels, the outermost level first and each by falling mass.

    Attributes
    ----------
    level : (n,) int array
        Position of the region's level.
    rank : (n,) int array
        1 for the region of its level that holds most.
    share : (n,) array
        Share of the surface's total that the region holds.
    area : (n,) array
        Units of the working CRS, squared.
    peak : (n,) array
        Highest density inside.
    peak_row, peak_column : (n,) int arrays
        Pixel of the peak; the first in reading order where several are equal.
    labels : (levels, rows, columns) int32 array
        1 + the position of the region that a pixel belongs to, 0 for none.
    """

    level: np.ndarray
    rank: np.ndarray
    share: np.ndarray
    area: np.ndarray
    peak: np.ndarray
    peak_row: np.ndarray
    peak_column: np.ndarray
    labels: np.ndarray


def density_levels(density, shares):
    """Thresholds of the smallest sets of pixels that hold given shares of a density.

    Parameters
    ----------
    density : (rows, columns) array
        Not negative; NaN where there is no value.
    shares : sequence of float
        Above 0 and up to 1.

    Returns
    -------
    list of Level
        In the order of the shares.

    Raises
    ------
    InputError
        A share out of range, a negative density, or nothing above 0.

    References
    ----------
    Hyndman (1996), The American Statistician 50:120-126 (highest-density regions).
    """
    shares = [float(share) for share in shares]
    if not shares or not all(0 < share <= 1 for share in shares):
        raise InputError("Shares must lie above 0 and not above 1 (100 %); found {}.", shares)
    values = _checked_values(density)
    falling = np.sort(values[values > 0])[::-1]
    sums = np.cumsum(falling)
    # The last pixel of each run of equal densities: a set may end there and nowhere else
    ends = np.flatnonzero(np.append(np.diff(falling) != 0, True))
    held = sums[ends] / sums[-1]
    levels = []
    for share in shares:
        place = min(np.searchsorted(held, share * (1 - 1e-12)), ends.size - 1)
        end = ends[place]
        levels.append(Level(share, float(held[place]), float(falling[end]), int(end) + 1))
    return levels


def density_regions(density, levels, cell, progress=silent):
    """Connected regions of the ground at or above each level's threshold.

    Pixels belong together when they share a side.

    Parameters
    ----------
    density : (rows, columns) array
        As for ``density_levels``.
    levels : sequence of Level
    cell : float
        Side of a pixel, units of the working CRS.
    progress : callable

    Returns
    -------
    Regions
    """
    _checked_values(density)
    density = np.where(np.isnan(density), 0.0, density)
    total = density.sum()
    labels = np.zeros((len(levels), *density.shape), np.int32)
    found = []
    count = 0
    for position in np.argsort([level.threshold for level in levels], kind="stable"):
        inside = density >= levels[position].threshold
        own, number = ndimage.label(inside, NEIGHBOURS)
        mass = np.bincount(own.ravel(), density.ravel(), number + 1)[1:]
        pixels = np.bincount(own.ravel(), minlength=number + 1)[1:]
        places = _first_peaks(density, own, number)
        order = np.lexsort((places, -mass))
        new = np.zeros(number + 1, np.int32)
        new[order + 1] = count + 1 + np.arange(number)
        labels[position] = new[own]
        for rank, region in enumerate(order, start=1):
            found.append((position, rank, mass[region], pixels[region], places[region]))
        count += number
        progress((position + 1) / len(levels))
    level, rank, mass, pixels, places = (np.array(column) for column in zip(*found))
    peak_row, peak_column = np.unravel_index(places, density.shape)
    return Regions(
        level=level,
        rank=rank,
        share=mass / total,
        area=pixels * float(cell) ** 2,
        peak=density[peak_row, peak_column],
        peak_row=peak_row,
        peak_column=peak_column,
        labels=labels,
    )


def _checked_values(density):
    values = np.asarray(density, float)
    values = values[~np.isnan(values)]
    if not np.isfinite(values).all():
        raise InputError("The density holds infinite values; check how the raster was made.")
    if values.size == 0 or values.max() <= 0:
        raise InputError("The density has no value above 0, so no share of it can be outlined.")
    if values.min() < 0:
        raise InputError(
            "The density has values below 0 (down to {:.6g}), so shares of its total have "
            "no meaning; choose a density, not a ratio or a difference.",
            values.min(),
        )
    return values


def _first_peaks(density, labels, number):
    """Flat position of each region's highest pixel, the first in reading order of equals."""
    inside = np.flatnonzero(labels)
    region = labels.ravel()[inside]
    order = np.lexsort((inside, -density.ravel()[inside], region))
    first = np.searchsorted(region[order], np.arange(1, number + 1))
    return inside[order[first]]
