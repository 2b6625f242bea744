"""Adaptive kernel density surfaces and what is known of their error."""

import math

import numpy as np

from .discs import disc_mass, disc_sum
from .errors import InputError
from .grid import covering
from .kernels import GAUSSIAN, QUARTIC_RADIUS, kernel_named
from .ladder import RUNG_RATIOS
from .progress import part, silent
from .spectrum import NODES_PER_BANDWIDTH, gaussian_mass, gaussian_sum


def _records(x, y, weights, bandwidths):
    """The four record arrays as finite floats of one length; a scalar stands for all records."""
    x, y = np.atleast_1d(np.asarray(x, float)), np.atleast_1d(np.asarray(y, float))
    weights = np.broadcast_to(np.asarray(weights, float), x.shape)
    bandwidths = np.broadcast_to(np.asarray(bandwidths, float), x.shape)
    if x.shape != y.shape or x.ndim != 1:
        raise InputError(
            "x and y must be two lists of one length; found {} and {}.", x.shape, y.shape
        )
    for name, values in (("x", x), ("y", y), ("weights", weights)):
        if not np.all(np.isfinite(values)):
            raise InputError(
                "{} values of {} are not finite; leave those records out.",
                np.count_nonzero(~np.isfinite(values)),
                name,
            )
    if not np.all(np.isfinite(bandwidths) & (bandwidths > 0)):
        raise InputError("BANDWIDTH must be above 0; found {}.", np.nanmin(bandwidths))
    return x, y, weights, bandwidths


def in_pixels(x, y, bandwidths, grid):
    """Row, column and bandwidth in pixels, 0 at the centre of the first pixel; three arrays."""
    row = (grid.top - y) / grid.cell - 0.5
    column = (x - grid.left) / grid.cell - 0.5
    return row, column, bandwidths / grid.cell


def adaptive_surface(x, y, weights, bandwidths, grid, kernel="gaussian", progress=silent):
    """Sum of weighted kernels of individual bandwidth, at every pixel centre.

    f(u) = sum_i w_i K_{h_i}(u - x_i), within 1e-4 of each kernel's own peak. Records outside the
    grid count where their kernels reach in. A kernel narrower than a pixel gives its true value
    at the pixel centres, so a sum over pixels no longer holds its mass.

    Parameters
    ----------
    x, y : (n,) arrays
        Places, units of the working CRS.
    weights : (n,) array or float
        Of any sign.
    bandwidths : (n,) array or float
        Standard deviation of the kernel along each axis, units of the CRS, above 0.
    grid : Grid
    kernel : {"gaussian", "quartic"}
    progress : callable

    Returns
    -------
    (rows, columns) array
        Per unit of the CRS squared.

    Raises
    ------
    InputError
        For bandwidths not above 0, values that are not finite, or an unknown kernel.

    References
    ----------
    Silverman (1986), Density Estimation, section 5.3; Abramson (1982), Ann. Stat. 10:1217.
    """
    kernel = kernel_named(kernel)
    x, y, weights, bandwidths = _records(x, y, weights, bandwidths)
    row, column, widths = in_pixels(x, y, bandwidths, grid)
    if kernel is GAUSSIAN:
        total = gaussian_sum(row, column, weights, widths, grid.shape, progress)
    else:
        heights = weights * kernel.peak / np.square(widths)
        radius = QUARTIC_RADIUS * widths
        total = disc_sum(row, column, heights, radius, 2, grid.shape, progress)
    return _without_negatives(total / grid.cell_area, weights)


def _without_negatives(surface, weights):
    """Zero where approximation left a value below it although no weight is negative.

    The rest is scaled by what that adds, some 1e-5 at most, so that the sum stays as it was.
    """
    if not weights.size or weights.min() < 0:
        return surface
    before = surface.sum()
    np.maximum(surface, 0.0, out=surface)
    after = surface.sum()
    if 0 < before < after:
        surface *= before / after
    return surface


def squared_surface(x, y, weights, bandwidths, grid, kernel="gaussian", progress=silent):
    """Sum of squared weighted kernels: the variance of a surface under Poisson sampling.

    sum_i (w_i K_{h_i})^2; arguments as for adaptive_surface. A squared Gaussian is a Gaussian of
    bandwidth h / sqrt(2) with mass 1 / (4 pi h^2).

    Returns
    -------
    (rows, columns) array
        Per unit of the CRS to the fourth.
    """
    kernel = kernel_named(kernel)
    x, y, weights, bandwidths = _records(x, y, weights, bandwidths)
    if kernel is not GAUSSIAN:
        row, column, widths = in_pixels(x, y, bandwidths, grid)
        heights = np.square(weights * kernel.peak / np.square(widths))
        radius = QUARTIC_RADIUS * widths
        squares = disc_sum(row, column, heights, radius, 4, grid.shape, progress)
        return np.maximum(squares, 0.0) / grid.cell_area**2
    masses = np.square(weights) * kernel.roughness / np.square(bandwidths)
    return adaptive_surface(x, y, masses, bandwidths / math.sqrt(2.0), grid, "gaussian", progress)


# where less than this share of one kernel's peak arrives, only tails meet
_TAILS = 0.1


def sampling_variance(x, y, weights, bandwidths, total, grid, kernel="gaussian", progress=silent):
    """Variance of a surface under Poisson sampling, with sense in its far tails too.

    squared_surface, but total^2, which is the variance of a lone record, wherever less than a
    tenth of a single kernel's peak arrives: there the squares are too small to be told from the
    error of their approximation. The height of a single kernel at a pixel is
    sum_i (w_i K_i) w_i K_i(0) / sum_i w_i K_i.

    Parameters
    ----------
    total : (rows, columns) array
        The surface of the same arguments, 0 or more. For weights that stand for w_i units each,
        pass their square roots as weights and the surface of the w_i.
    x, y, weights, bandwidths, grid, kernel, progress
        As for adaptive_surface; weights not negative.

    Returns
    -------
    (rows, columns) array
        Per unit of the CRS to the fourth.
    """
    records = (x, y, weights, bandwidths, grid, kernel)
    squares = squared_surface(*records, part(progress, 0.0, 0.5))
    peaks = np.asarray(weights) * kernel_named(kernel).peak / np.square(bandwidths)
    heights = adaptive_surface(
        x, y, weights * peaks, bandwidths, grid, kernel, part(progress, 0.5, 1.0)
    )
    # no mean of the heights is below the lowest, whatever rounding leaves where nothing reaches
    lowest = np.min(peaks, initial=np.inf, where=peaks > 0)
    if np.isfinite(lowest):
        heights = np.maximum(heights, lowest * total)
    square = np.square(total)
    # total / (heights / total) compares the surface with the height of one kernel
    return np.where(square < _TAILS * heights, square, np.minimum(squares, square))


def direct_surface(
    x, y, weights, bandwidths, grid, kernel="gaussian", pixels=None, progress=silent
):
    """The exact sum that adaptive_surface approximates, record by record and pixel by pixel.

    Parameters
    ----------
    pixels : two (k,) int arrays, optional
        Rows and columns of the pixels wanted; all of them without it.
    x, y, weights, bandwidths, grid, kernel, progress
        As for adaptive_surface.

    Returns
    -------
    (rows, columns) array, or (k,) array for chosen pixels
    """
    kernel = kernel_named(kernel)
    x, y, weights, bandwidths = _records(x, y, weights, bandwidths)
    if pixels is None:
        centre_x, centre_y = (values.ravel() for values in grid.centres())
    else:
        centre_x, centre_y = grid.x_centres()[pixels[1]], grid.y_centres()[pixels[0]]
    values = np.zeros(len(centre_x))
    step = max(1, (1 << 20) // max(len(x), 1))
    for start in range(0, len(values), step):
        progress(start / len(values))
        chosen = slice(start, start + step)
        squared = np.square(centre_x[chosen, None] - x) + np.square(centre_y[chosen, None] - y)
        values[chosen] = kernel.value(squared, bandwidths) @ weights
    return values.reshape(grid.shape) if pixels is None else values


def kernel_mass(x, y, bandwidths, mask, grid, kernel="gaussian", progress=silent):
    """Mass of each record's kernel that falls on a mask: the transpose of adaptive_surface.

    Parameters
    ----------
    mask : (rows, columns) array
        Share of each pixel that counts, 0 to 1.
    x, y, bandwidths, grid, kernel, progress
        As for adaptive_surface.

    Returns
    -------
    (n,) array
        q_i = cell area * sum over pixels of mask * K_{h_i}(pixel - x_i), 0 to 1. A surface of
        weights w_i / q_i sums over the mask to the sum of w_i, to rounding error.
    """
    kernel = kernel_named(kernel)
    x, y, _, bandwidths = _records(x, y, 1.0, bandwidths)
    row, column, widths = in_pixels(x, y, bandwidths, grid)
    mask = np.asarray(mask, float)
    if kernel is GAUSSIAN:
        return gaussian_mass(row, column, widths, mask, progress)
    mass = disc_mass(row, column, QUARTIC_RADIUS * widths, 2, mask, progress)
    return mass * kernel.peak / np.square(widths)


def effective_records(total, squares):
    """Effective number of records behind each pixel of a density surface.

    Parameters
    ----------
    total : (rows, columns) array
        Sum of weighted kernels, per unit of the CRS squared.
    squares : (rows, columns) array
        Sum of squared weighted kernels, per unit to the fourth.

    Returns
    -------
    (rows, columns) array
        Kish's effective size, (sum w K)^2 / sum (w K)^2, dimensionless; 0 where nothing reaches
        and at least 1 elsewhere, as it must be for weights that are not negative.

    References
    ----------
    Kish (1965), Survey Sampling, section 11.7.
    """
    square = np.square(total)
    reached = (total > 0) & (square > 0)
    least = np.minimum(squares, square)
    # where the squares vanish before the total does, one record is all there can be
    least = np.where(least > 0, least, square)
    return np.divide(square, least, out=np.zeros_like(square), where=reached)


def relative_standard_error(total, squares):
    """Standard error of a surface over its value, under Poisson sampling.

    sqrt(sum (w K)^2) / sum w K = effective_records ** -0.5; arguments as there.

    Returns
    -------
    (rows, columns) array
        Dimensionless, 1 for a single record; NaN where nothing reaches.

    References
    ----------
    Diggle (1985), Appl. Stat. 34:138; the variance of a sum over a Poisson pattern (Campbell).
    """
    effective = effective_records(total, squares)
    return np.divide(
        1.0, np.sqrt(effective), out=np.full_like(effective, np.nan), where=effective > 0
    )


# memory in bytes that a record takes at the most while its nodes are worked out
_BYTES_PER_RECORD = 130


def memory_needed(grid, narrowest, widest, records, kernel="gaussian"):
    """Memory that adaptive_surface takes at the most, beside its arguments.

    Parameters
    ----------
    grid : Grid
    narrowest, widest : float
        Smallest and largest bandwidth, units of the CRS.
    records : int
    kernel : str

    Returns
    -------
    float
        Bytes; a bound from the sizes of the arrays that stand at one time.
    """
    kernel_named(kernel)
    reach = GAUSSIAN.reach * widest / grid.cell
    padding = min(reach, max(128.0, max(grid.shape) / 2))
    padded = (grid.rows + padding) * (grid.columns + padding)
    nodes = padded * min(1.0, (NODES_PER_BANDWIDTH * grid.cell / narrowest) ** 2)
    planes = 8.0 * len(RUNG_RATIOS) * nodes
    return 40.0 * padded + planes + 24.0 * nodes + _BYTES_PER_RECORD * float(records)


def workable_cell(bounds, narrowest, widest, records, available, kernel="gaussian"):
    """Smallest round cell size whose surface fits into the memory there is.

    Parameters
    ----------
    bounds : (left, bottom, right, top)
    narrowest, widest, records, kernel
        As for memory_needed.
    available : float
        Bytes.

    Returns
    -------
    float
        1, 2 or 5 times a power of ten, units of the CRS.

    Raises
    ------
    InputError
        When the records alone do not fit.
    """
    if _BYTES_PER_RECORD * records >= available:
        raise InputError("{} records do not fit into memory; work on part of the area.", records)
    extent = max(bounds[2] - bounds[0], bounds[3] - bounds[1], widest)
    cell = round_down(extent / 1e6)
    while memory_needed(covering(bounds, cell), narrowest, widest, records, kernel) > available:
        cell = round_down(cell * 2.6)
    return cell


def round_down(length):
    """Largest of 1, 2 and 5 times a power of ten that is not above a length."""
    power = 10.0 ** math.floor(math.log10(length) + 1e-12)
    for leading in (5.0, 2.0):
        if leading * power <= length * (1 + 1e-9):
            return leading * power
    return power


def round_up(length):
    """Smallest of 1, 2 and 5 times a power of ten that is not below a length."""
    lower = round_down(length)
    if lower >= length * (1 - 1e-9):
        return lower
    return round_down(lower * 2.6)


def automatic_cell(bounds, narrowest, pixels=4_000_000):
    """Cell size that shows the narrowest kernel without more pixels than a map can use.

    Half the smallest bandwidth, which draws a Gaussian within 1 % between pixels, but no smaller
    than lets the extent be covered by a stated number of pixels, rounded to 1, 2 or 5 times a
    power of ten.

    Parameters
    ----------
    bounds : (left, bottom, right, top)
    narrowest : float
        Smallest bandwidth, units of the CRS, above 0.
    pixels : int
        Most pixels wanted.

    Returns
    -------
    float
        Units of the CRS.
    """
    cell = round_down(narrowest / 2)
    area = max(bounds[2] - bounds[0], cell) * max(bounds[3] - bounds[1], cell)
    while area / cell**2 > pixels:
        cell = round_down(cell * 2.6)
    return cell
