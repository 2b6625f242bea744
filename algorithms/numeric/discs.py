"""Sums of kernels that end at a radius: powers of 1 - (r / a)^2 inside a disc.

Their spectrum fades slowly, so no coarse lattice holds it. But along a row of pixels such a kernel
is a polynomial in the column between the two ends of a chord. So each record adds the coefficients
of its polynomial where the chord begins and takes them off where it ends; one running sum along
the row gives the coefficients that count at every pixel, and the polynomial is worked out once a
pixel, however many kernels overlap there. The result is exact. Kernels so wide that 72 nodes span
their radius on a coarser lattice are summed there and brought to the pixels by local cubics, which
costs 6e-5 of the kernel's peak at most, at its rim.

Everything is in pixels: rows and columns count from 0 at the centre of the first pixel.
"""

import math
from dataclasses import dataclass

import numpy as np
from scipy.sparse import csc_matrix, csr_matrix

from .ladder import lagrange_weights
from .progress import part, silent
from .spreading import gather_windows, row_order, sum_windows

# below this radius the square of pixels around a record is quicker
_WINDOW_RADIUS = 3.0
_NODES_PER_RADIUS = 72
_COARSE_RATIO = 1.6
_WIDEST = _NODES_PER_RADIUS * _COARSE_RATIO
# ratio of radii that share a running sum: columns reach some three times it, in radii of the
# smallest, and rounding errors grow with twice the power of that
_SUM_RATIO = {2: 5.0, 4: 2.0}
_CHORDS = 1 << 17
_ROWS = 64


@dataclass(frozen=True)
class Chords:
    """Chords of some records along the rows of one strip of columns.

    Attributes
    ----------
    records : (n,) int array
    starts : (n,) int array
        Number of each record's first chord.
    rows : slice
        Rows that the chords lie in.
    ends : sparse matrix
        Nodes of those rows x chords: the weight where a chord begins, less it where it has ended.
    change : (nodes,) int array
        Chords that begin at each node, less those that have ended.
    coefficients : (chords, terms) array
        Of the polynomial in the column counted from the middle of the strip.
    """

    records: np.ndarray
    starts: np.ndarray
    rows: slice
    ends: csc_matrix
    change: np.ndarray
    coefficients: np.ndarray


def _squared(terms):
    """Coefficients of the square of a polynomial, lowest power first, each an array."""
    product = [0.0] * (2 * len(terms) - 1)
    for first, one in enumerate(terms):
        for second, other in enumerate(terms):
            product[first + second] = product[first + second] + one * other
    return product


def _chords(row, column, radius, weights, power, records, height, first_column, width):
    """Chords of some records; columns are counted from the first one of the strip."""
    first = np.maximum(np.ceil(row[records] - radius[records]), 0)
    last = np.minimum(np.floor(row[records] + radius[records]), height - 1)
    counts = np.maximum(last - first + 1, 0).astype(np.int64)
    starts = np.cumsum(counts) - counts
    owner = np.repeat(np.arange(len(records)), counts)
    line = np.arange(len(owner)) + (first - starts)[owner]
    place = (column[records] - first_column)[owner]
    scale = np.square(radius[records])[owner]
    squared = np.maximum(scale - np.square(line - row[records][owner]), 0.0)
    reach = np.sqrt(squared)
    begin = np.ceil(place - reach)
    # the rim itself has no value, so that it does not matter on which side it falls
    end = np.maximum(np.floor(place + reach) + 1, begin)
    low, high = int(line.min()), int(line.max()) + 1
    nodes = (high - low) * (width + 1)
    base = (line - low) * (width + 1)
    begin, end = (base + begin).astype(np.int32), (base + end).astype(np.int32)
    place -= width // 2
    terms = [(squared - np.square(place)) / scale, 2 * place / scale, -1.0 / scale]
    for _ in range(int(math.log2(power))):
        terms = _squared(terms)
    weight = weights[records][owner]
    ends = csc_matrix(
        (
            np.column_stack([weight, -weight]).ravel(),
            np.column_stack([begin, end]).ravel(),
            np.arange(len(owner) + 1, dtype=np.int32) * 2,
        ),
        shape=(nodes, len(owner)),
    )
    # whole numbers, so that nothing at all is left where no kernel is at work
    change = np.bincount(begin, minlength=nodes) - np.bincount(end, minlength=nodes)
    return Chords(records, starts, slice(low, high), ends, change, np.stack(terms, axis=-1))


def _strips(row, column, radius, weights, power, shape, progress):
    """Strips of columns with the chords in them: first column, width, and blocks of chords."""
    half = math.ceil(float(radius.max()))
    # a record whose disc meets no row of pixels has no chord
    kept = np.flatnonzero(
        (np.maximum(np.ceil(row - radius), 0) <= np.minimum(np.floor(row + radius), shape[0] - 1))
        & (column > -radius)
        & (column < shape[1] - 1 + radius)
    )
    if not len(kept):
        return
    step = 2 * half + 1
    order = kept[row_order(row[kept])]
    order = order[row_order(column[order] / step)]
    strip = np.floor(column[order] / step).astype(np.int64)
    rows_so_far = np.cumsum(2 * radius[order] + 1)
    ends = np.append(np.flatnonzero(np.diff(strip)) + 1, len(order))
    start = 0
    for end in ends:
        first, width = int(strip[start]) * step - half, step + 2 * half + 1
        # so many records at once that their chords fit into the processor's cache
        share = np.floor((rows_so_far[start:end] - rows_so_far[start]) / _CHORDS)
        cuts = start + np.flatnonzero(np.diff(share, prepend=-1))
        cuts = np.append(cuts, end)
        blocks = (
            _chords(row, column, radius, weights, power, order[begin:stop], shape[0], first, width)
            for begin, stop in zip(cuts[:-1], cuts[1:])
            if progress(begin / len(order)) is None
        )
        yield first, width, blocks
        start = end


def _overlap(first, width, columns):
    """Columns of a strip that lie on the lattice: as counted in the strip, and in the lattice."""
    low, high = max(first, 0), min(first + width, columns)
    return slice(low - first, max(high, low) - first), slice(low, max(high, low))


def _powers(own, width, power):
    """Powers of the columns counted from the middle of the strip, (columns, terms) array."""
    place = (np.arange(own.start, own.stop) - width // 2)[:, None]
    return place ** np.arange(2.0 * power + 1)


def _sum_by_chords(row, column, weights, radius, power, shape, progress):
    total = np.zeros(shape)
    for first, width, blocks in _strips(row, column, radius, weights, power, shape, progress):
        sums = np.zeros((shape[0], width + 1, 2 * power + 1))
        counts = np.zeros((shape[0], width + 1), np.int64)
        for chords in blocks:
            counts[chords.rows] += chords.change.reshape(-1, width + 1)
            window = sums[chords.rows]
            window += (chords.ends @ chords.coefficients).reshape(window.shape)
        own, target = _overlap(first, width, shape[1])
        powers = _powers(own, width, power)
        for start in range(0, shape[0], _ROWS):
            rows = slice(start, start + _ROWS)
            running = np.cumsum(sums[rows, : own.stop], axis=1)[:, own.start :]
            value = np.einsum("rct,ct->rc", running, powers)
            covered = np.cumsum(counts[rows, : own.stop], axis=1)[:, own.start :] > 0
            total[rows, target] += np.where(covered, value, 0.0)
    return total


def _gather_by_chords(row, column, radius, power, raster, progress):
    collected, ones = np.zeros(len(row)), np.ones(len(row))
    for first, width, blocks in _strips(row, column, radius, ones, power, raster.shape, progress):
        own, source = _overlap(first, width, raster.shape[1])
        moments = np.zeros((raster.shape[0], width + 1, 2 * power + 1))
        values = raster[:, source, None] * _powers(own, width, power)
        # a chord sums from where it begins up to where it ends: the difference of two sums
        moments[:, own.start + 1 : own.stop + 1] = -np.cumsum(values, axis=1)
        moments[:, own.stop + 1 :] = moments[:, own.stop : own.stop + 1]
        for chords in blocks:
            window = moments[chords.rows].reshape(-1, 2 * power + 1)
            held = np.einsum("ct,ct->c", chords.ends.T @ window, chords.coefficients)
            collected[chords.records] = np.add.reduceat(held, chords.starts)
    return collected


def _window_values(radius, power):
    def values(row_squared, column_squared, chosen):
        scale = np.square(radius[chosen])[:, None, None]
        return np.maximum(1.0 - (row_squared + column_squared) / scale, 0.0) ** power

    return values


def _groups(radius, power):
    """Records that are summed together, as (records, step of the lattice), from the narrowest."""
    groups = []
    narrow = radius < _WINDOW_RADIUS
    if narrow.any():
        groups.append((np.flatnonzero(narrow), 0.0))
    left = np.flatnonzero(~narrow)
    while len(left):
        least = float(radius[left].min())
        if least * _SUM_RATIO[power] <= _WIDEST or least <= _WIDEST / _COARSE_RATIO:
            ratio, step = min(_SUM_RATIO[power], max(_WIDEST / least, 1.0 + 1e-9)), 1.0
        else:
            ratio, step = _COARSE_RATIO, max(least / _NODES_PER_RADIUS, 1.0)
        chosen = radius[left] <= least * ratio
        groups.append((left[chosen], step))
        left = left[~chosen]
    return groups


def _to_pixels(pixels, step):
    """Sparse matrix of local cubic interpolation from a coarser lattice, and its margin."""
    margin = 2
    nodes = math.ceil((pixels - 1) / step) + 2 * margin + 1
    place = np.arange(pixels) / step + margin
    first = np.clip(np.floor(place).astype(np.int64) - 1, 0, nodes - 4)
    weights = lagrange_weights(place - first, np.arange(4))
    index = first[:, None] + np.arange(4)
    matrix = csr_matrix(
        (weights.ravel(), index.ravel(), np.arange(pixels + 1) * 4), shape=(pixels, nodes)
    )
    return matrix, margin


def disc_sum(row, column, weights, radius, power, shape, progress=silent):
    """Sum of w (1 - (r / a)^2)^power over the discs that cover each pixel centre.

    Parameters
    ----------
    row, column, weights, radius : (n,) arrays
        In pixels; places may lie outside the lattice.
    power : {2, 4}
        2 for the quartic kernel, 4 for its square.
    shape : (int, int)
    progress : callable

    Returns
    -------
    (rows, columns) array
    """
    total = np.zeros(shape)
    done = 0
    for chosen, step in _groups(radius, power):
        report = part(progress, done / len(row), (done + len(chosen)) / len(row))
        done += len(chosen)
        r, c, w, a = row[chosen], column[chosen], weights[chosen], radius[chosen]
        if step == 0:
            reach = np.sqrt(0.5 + np.square(a))
            total += sum_windows(r, c, w, reach, _window_values(a, power), shape, report)
        elif step == 1:
            total += _sum_by_chords(r, c, w, a, power, shape, report)
        else:
            (rise, margin), (run, _) = (_to_pixels(pixels, step) for pixels in shape)
            coarse = _sum_by_chords(
                r / step + margin,
                c / step + margin,
                w,
                a / step,
                power,
                (rise.shape[1], run.shape[1]),
                report,
            )
            total += run.dot((rise @ coarse).T).T
    progress(1.0)
    return total


def disc_mass(row, column, radius, power, raster, progress=silent):
    """Every record's (1 - (r / a)^2)^power summed over a raster: the transpose of disc_sum.

    Parameters
    ----------
    row, column, radius, power, progress
        As for disc_sum.
    raster : (rows, columns) array

    Returns
    -------
    (n,) array
    """
    mass = np.zeros(len(row))
    done = 0
    for chosen, step in _groups(radius, power):
        report = part(progress, done / len(row), (done + len(chosen)) / len(row))
        done += len(chosen)
        r, c, a = row[chosen], column[chosen], radius[chosen]
        if step == 0:
            reach = np.sqrt(0.5 + np.square(a))
            mass[chosen] = gather_windows(r, c, reach, _window_values(a, power), raster, report)
        elif step == 1:
            mass[chosen] = _gather_by_chords(r, c, a, power, raster, report)
        else:
            (rise, margin), (run, _) = (_to_pixels(pixels, step) for pixels in raster.shape)
            coarse = run.T.dot((rise.T @ raster).T).T
            mass[chosen] = _gather_by_chords(
                r / step + margin, c / step + margin, a / step, power, coarse, report
            )
    progress(1.0)
    return mass
