"""Areas where a density ratio lies beyond what labels at random give."""

import math
from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from .errors import InputError
from .outlines import NEIGHBOURS


@dataclass(frozen=True)
class ToleranceAreas:
    """Connected areas beyond tolerance, one entry an area.

    Attributes
    ----------
    side : (n,) int array
        1 where the ratio is raised, -1 where it is lowered.
    everywhere : (n,) bool array
        Whether the p-value holds over the whole map, or pixel by pixel only.
    level : (n,) array
        P-value that all pixels of the area keep.
    rank : (n,) int array
        1 for the area with most records beyond (or short of) what the background leads to expect,
        among areas of one side, kind and level.
    area : (n,) array
        Units of the working CRS, squared.
    ratio : (n,) array
        Ratio at the pixel farthest from 1.
    least_p : (n,) array
        Smallest p-value inside, of the area's own kind.
    records, background : (n,) arrays
        Weight of the records and of the background that lie inside.
    expected : (n,) array
        Weight of records that the background inside leads to expect.
    row, column : (n,) int arrays
        Pixel of that ratio.
    labels : list of (rows, columns) int32 arrays
        One for each side, kind and level that has areas; 1 + the position of a pixel's area.
    """

    side: np.ndarray
    everywhere: np.ndarray
    level: np.ndarray
    rank: np.ndarray
    area: np.ndarray
    ratio: np.ndarray
    least_p: np.ndarray
    records: np.ndarray
    background: np.ndarray
    expected: np.ndarray
    row: np.ndarray
    column: np.ndarray
    labels: list


def tolerance_areas(contrast, relabelling, levels):
    """Connected areas whose p-values are at most given levels, raised and lowered.

    Parameters
    ----------
    contrast : contrast.Contrast
    relabelling : contrast.Relabelling
    levels : sequence of float
        Above 0 and below 0.5.

    Returns
    -------
    ToleranceAreas
        Pointwise areas first, so that those that hold over the whole map come to lie on top.

    Raises
    ------
    InputError
        A level out of range, or below the smallest p-value that so many relabellings can give.

    References
    ----------
    Kelsall & Diggle (1995), Statistics in Medicine 14:2335-2342 (tolerance contours).
    """
    check_levels(levels, relabelling.count)
    found, labels, count = [], [], 0
    weights = _weights_on_pixels(contrast)
    for everywhere in (False, True):
        suffix = "_anywhere" if everywhere else ""
        for side, name in ((1, "p_raised"), (-1, "p_lowered")):
            p_values = getattr(relabelling, name + suffix)
            for level in sorted(levels, reverse=True):
                with np.errstate(invalid="ignore"):
                    own, number = ndimage.label(p_values <= level, NEIGHBOURS)
                if not number:
                    continue
                rows = _areas(contrast, own, number, p_values, side, weights)
                order = sorted(range(number), key=lambda i: -side * (rows[i][3] - rows[i][5]))
                new = np.zeros(number + 1, np.int32)
                for rank, position in enumerate(order, start=1):
                    new[position + 1] = count + rank
                    found.append((side, everywhere, level, rank, *rows[position]))
                labels.append(new[own])
                count += number
    columns = list(zip(*found)) if found else [()] * 12
    kinds = (int, bool, float, int, float, float, float, float, float, float, int, int)
    return ToleranceAreas(*(np.array(column, kind) for column, kind in zip(columns, kinds)), labels)


def check_levels(levels, relabellings):
    """Raise InputError for levels out of range or out of reach of so many relabellings."""
    for level in levels:
        if not 0 < level < 0.5:
            raise InputError("Levels must lie above 0 and below 50 %; found {:g} %.", 100 * level)
        if level * (relabellings + 1) < 1 - 1e-9:
            raise InputError(
                "A level of {:g} % needs at least {} relabellings; found {}.",
                100 * level,
                math.ceil(1 / level - 1e-9) - 1,
                relabellings,
            )


def _weights_on_pixels(contrast):
    """Weights of records and of background that lie on each pixel."""
    pooled, grid = contrast.pooled, contrast.sums.grid
    rows, columns, inside = grid.pixels(pooled.x, pooled.y)
    flat = rows[inside] * grid.columns + columns[inside]
    return [
        np.bincount(flat, own[inside], grid.rows * grid.columns).reshape(grid.shape)
        for own in pooled.split
    ]


def _areas(contrast, labels, number, p_values, side, weights):
    """Area, ratio, least p, records, background, expected, row and column of each label."""
    index = np.arange(1, number + 1)
    pixels = ndimage.sum_labels(np.ones(labels.shape), labels, index)
    signed = side * np.nan_to_num(contrast.log_ratio, nan=0.0)
    places = ndimage.maximum_position(signed, labels, index)
    least = ndimage.minimum(np.nan_to_num(p_values, nan=1.0), labels, index)
    records, background = (ndimage.sum_labels(own, labels, index) for own in weights)
    first, second = contrast.pooled.totals
    area = pixels * contrast.sums.grid.cell_area
    return [
        (
            area[i],
            float(np.exp(contrast.log_ratio[places[i]])),
            least[i],
            records[i],
            background[i],
            background[i] * first / second,
            *places[i],
        )
        for i in range(number)
    ]
