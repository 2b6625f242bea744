"""Which cell size suits a count of records per cell: a sweep over sizes, and advice from it."""

import math
from dataclasses import dataclass

import numpy as np

from .errors import InputError
from .hexagons import HEXAGON, cell_area, hexagon_centres, square_centres
from .lattice_zonings import cell_block, cell_numbers, random_tiling
from .progress import silent

OFFSETS = 24
LEAST_RECORDS = 10
MOST_BELOW = 0.1
READABLE_RECORDS = 20

# Two criteria that differ by more than this factor in size are said to disagree.
_AGREEMENT = 1.5


@dataclass(frozen=True)
class Sweep:
    """Figures of each cell size, averaged over random offsets and turns; (sizes,) arrays.

    Attributes
    ----------
    size : distance between centres of neighbouring cells, rising
    cells : number of cells that hold a record
    share_below : share of those that hold fewer records than asked
    records_below : share of the records that stand in such cells
    counting_error : median over those of the relative counting error, 1 / sqrt(records)
    cross_validation : score of Rudemo (1982), per unit area; smaller is better
    mean_variance : cost of Shimazaki & Shinomoto (2007), per squared unit area; smaller is better
    """

    size: np.ndarray
    cells: np.ndarray
    share_below: np.ndarray
    records_below: np.ndarray
    counting_error: np.ndarray
    cross_validation: np.ndarray
    mean_variance: np.ndarray


@dataclass(frozen=True)
class Advice:
    """What a sweep supports; positions count the sizes of the sweep.

    Attributes
    ----------
    advised : position of the advised size
    by_cross_validation, by_mean_variance : where the two criteria are smallest
    by_least_records : smallest size with few enough records in thin cells; None: no size
    agree : whether the two criteria name about the same size
    at_the_end : whether a criterion is smallest at the first or last size, so that the best one may
        lie outside those tried
    """

    advised: int
    by_cross_validation: int
    by_mean_variance: int
    by_least_records: object
    agree: bool
    at_the_end: bool


def cross_validation_score(cell, weight, area):
    """Cross-validation score of a histogram; its minimum estimates the least squared error.

    sum_k W_k^2 / (W^2 A) - 2 sum_i (w_i / W) (W_k(i) - w_i) / ((W - w_i) A): the integrated
    square of the histogram less twice its mean at each record, the record itself left out. With
    equal weights this is 2 / ((n - 1) A) - (n + 1) / (n^2 (n - 1) A) sum_k N_k^2, N_k records in
    cell k.

    Parameters
    ----------
    cell : (n,) int array
        Cell of each record.
    weight : (n,) array
    area : float
        Area A of a cell.

    Returns
    -------
    float
        Per unit area.

    References
    ----------
    Rudemo (1982), Scand. J. Stat. 9:65.
    """
    total = weight.sum()
    in_cell = np.bincount(cell, weights=weight)
    left_out = weight * (in_cell[cell] - weight) / (total - weight)
    return np.square(in_cell).sum() / (total**2 * area) - 2 * left_out.sum() / (total * area)


def mean_variance_cost(counts, area, squares=None):
    """Cost of a bin size for a count per bin: (2 mean - variance) / area^2.

    Parameters
    ----------
    counts : (cells,) array
        Every cell of the study area, the empty ones too.
    area : float
        Area of a cell.
    squares : (cells,) array, optional
        Sum of squared weights in each cell, when records carry weights: the variance that chance
        gives a weighted sum, in place of the mean.

    Returns
    -------
    float

    References
    ----------
    Shimazaki & Shinomoto (2007), Neural Comput. 19:1503.
    """
    counts = np.asarray(counts, float)
    chance = counts.mean() if squares is None else np.mean(squares)
    return (2 * chance - counts.var()) / area**2


def sweep(
    x, y, sizes, shape, generator, weight=None, inside=None, least_records=LEAST_RECORDS,
    offsets=OFFSETS, progress=silent,
):  # fmt: skip
    """Try cell sizes under random offsets and turns.

    Parameters
    ----------
    x, y : (n,) arrays
        Records, units of the working CRS.
    sizes : sequence of float
    shape : {"hexagon", "square"}
    generator : numpy.random.Generator
    weight : (n,) array, optional
    inside : callable, optional
        Takes arrays x and y and says which lie in the study area; the extent of the records
        without it. Cells whose centre lies inside enter the mean-variance cost.
    least_records : int
    offsets : int
        Tilings of each size.
    progress : callable

    Returns
    -------
    Sweep

    Raises
    ------
    InputError
        With fewer than two records, or a size that is not above 0.
    """
    x, y = np.asarray(x, float), np.asarray(y, float)
    if len(x) < 2:
        raise InputError("RECORDS: a sweep needs at least 2 records; found {}.", len(x))
    sizes = np.unique(np.asarray(sizes, float))
    if not (len(sizes) and sizes[0] > 0):
        raise InputError("CELL_SIZES: every size must be above 0.")
    weight = np.ones(len(x)) if weight is None else np.asarray(weight, float)
    bounds = (x.min(), y.min(), x.max(), y.max())
    if inside is None:
        inside = _inside_box(bounds)
    figures = np.empty((len(sizes), offsets, 6))
    for row, size in enumerate(sizes):
        for column in range(offsets):
            tiling = random_tiling(shape, size, True, generator)
            figures[row, column] = _figures(x, y, weight, tiling, bounds, inside, least_records)
            progress((row * offsets + column + 1) / (len(sizes) * offsets))
    return Sweep(sizes, *figures.mean(axis=1).T)


def advise(found, most_below=MOST_BELOW):
    """The size that the criteria support and that leaves few enough records in thin cells.

    The criteria's size is the larger of the two minima, where they differ; the advice is that
    size, or the next larger one at which at most `most_below` of the records stand in cells with
    fewer than the least count. Records are taken, not cells: a thinly settled fringe has thin cells
    at any size. The tolerated share is common practice, no source.

    Parameters
    ----------
    found : Sweep
    most_below : float
        0 to 1.

    Returns
    -------
    Advice
    """
    first = int(np.argmin(found.cross_validation))
    second = int(np.argmin(found.mean_variance))
    wanted = max(first, second)
    enough = found.records_below <= most_below
    later = np.flatnonzero(enough[wanted:])
    # Where too few are left even at the largest size, the one with the fewest such records.
    advised = wanted + int(later[0]) if len(later) else int(np.argmin(found.records_below))
    ratio = found.size[wanted] / found.size[min(first, second)]
    ends = (0, len(found.size) - 1)
    return Advice(
        advised,
        first,
        second,
        int(np.argmax(enough)) if enough.any() else None,
        bool(ratio <= _AGREEMENT),
        first in ends or second in ends,
    )


def sizes_to_try(x, y, number=14):
    """Cell sizes around the normal reference rule for histograms.

    The rule for two dimensions is h = 3.5 s n^(-1/4), s the root of half the trace of the
    covariance (Scott 1992, Multivariate Density Estimation); sizes run from a sixth of it to four
    times it at equal ratios, rounded to two digits.

    Parameters
    ----------
    x, y : (n,) arrays
    number : int

    Returns
    -------
    (sizes,) array, rising
    """
    spread = math.sqrt((np.var(x) + np.var(y)) / 2)
    if not spread > 0:
        raise InputError("RECORDS: all records stand on one spot, so no cell size can be advised.")
    reference = 3.5 * spread * len(x) ** -0.25
    return np.unique([two_digits(s) for s in np.geomspace(reference / 6, reference * 4, number)])


def sizes_for_zonings(x, y, weight, area, generator, shape=HEXAGON, number=6):
    """Cell sizes over which a map of zone values can sensibly be varied.

    The largest cell takes about a thirtieth of the study area. The smallest is the one in which
    half of the records share their cell with at least twenty in all (common practice, no source),
    and at most half of the largest. Sizes between are at equal ratios, rounded to two digits.

    Parameters
    ----------
    x, y, weight : (n,) arrays
        Records.
    area : float
        Of the study area.
    generator : numpy.random.Generator
    shape : {"hexagon", "square"}
    number : int

    Returns
    -------
    (sizes,) array, rising
    """
    largest = math.sqrt(area / 30 / cell_area(1.0, shape))
    bounds = (x.min(), y.min(), x.max(), y.max())
    smallest = largest / 2
    for candidate in largest / 1.25 ** np.arange(4, 25):
        block = cell_block(random_tiling(shape, candidate, True, generator), bounds)
        cell = cell_numbers(block, x, y)
        held = np.bincount(cell, weights=weight, minlength=block.cells)[cell]
        order = np.argsort(held, kind="stable")
        reached = np.cumsum(weight[order])
        if held[order[np.searchsorted(reached, reached[-1] / 2)]] < READABLE_RECORDS:
            break
        smallest = candidate
    return np.unique([two_digits(size) for size in np.geomspace(smallest, largest, number)])


def two_digits(value):
    """A positive number rounded to two significant digits."""
    return float(f"{value:.1e}")


def _inside_box(bounds):
    left, bottom, right, top = bounds

    def inside(x, y):
        return (x >= left) & (x <= right) & (y >= bottom) & (y <= top)

    return inside


def _figures(x, y, weight, tiling, bounds, inside, least_records):
    block = cell_block(tiling, bounds)
    cell = cell_numbers(block, x, y)
    area = cell_area(tiling.size, tiling.shape)
    number = np.bincount(cell, minlength=block.cells)
    total = np.bincount(cell, weights=weight, minlength=block.cells)
    squares = np.bincount(cell, weights=weight**2, minlength=block.cells)
    held = np.flatnonzero(total > 0)
    error = np.sqrt(squares[held]) / total[held]
    within = _centres_inside(block, inside)
    # A study area smaller than a cell may hold no centre; then the cells with records stand in.
    if not within.any():
        within = total > 0
    return (
        len(held),
        np.mean(number[held] < least_records),
        np.mean(number[cell] < least_records),
        np.median(error),
        cross_validation_score(cell, weight, area),
        mean_variance_cost(total[within], area, squares[within]),
    )


def _centres_inside(block, inside):
    row, column = np.divmod(np.arange(block.cells), block.columns)
    centres = hexagon_centres if block.tiling.shape == HEXAGON else square_centres
    frame = {"origin": block.tiling.origin, "angle": block.tiling.angle}
    return inside(
        *centres(column + block.first_column, row + block.first_row, block.tiling.size, **frame)
    )
