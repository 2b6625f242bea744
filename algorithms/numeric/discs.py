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
_EVENTS = 1 << 17


@dataclass(frozen=True)
class Chords:
    """Chords of some records along the rows of one strip of columns.

    Attributes
    ----------
    records : (n,) int array
    ends : sparse matrix
        Nodes of the strip x chords: 1 where a chord begins, -1 where it has ended.
    coefficients : (chords, terms) array
        Of the polynomial in the column counted from the middle of the strip; n chords a row.
    """

    records: np.ndarray
    ends: csc_matrix
    coefficients: np.ndarray


def _squared(terms):
    """Coefficients of the square of a polynomial, lowest power first, each an array."""
    product = [0.0] * (2 * len(terms) - 1)
    for first, one in enumerate(terms):
        for second, other in enumerate(terms):
            product[first + second] = product[first + second] + one * other
    return product


def _chords(row, column, radius, power, chosen, height, first_column, width):
    """Chords of the chosen records; rows are counted from the top of the strip's canvas."""
    half = math.ceil(float(radius[chosen].max()))
    offsets = np.arange(-half, half + 1)
    node = np.rint(row[chosen])
    apart = (node - row[chosen])[:, None] + offsets
    squared = np.square(radius[chosen])[:, None] - np.square(apart)
    line = node.astype(np.int64)[:, None] + offsets
    squared[(squared <= 0) | (line < 0) | (line >= height)] = 0.0
    reach = np.sqrt(squared)
    place = (column[chosen] - first_column)[:, None]
    begin = np.ceil(place - reach)
    # the rim itself has no value, so that it does not matter on which side it falls
    end = np.maximum(np.floor(place + reach) + 1, begin)
    inside = squared > 0
    base = np.clip(line, 0, height - 1) * (width + 1)
    index = np.stack([base + np.where(inside, begin, 0), base + np.where(inside, end, 0)], axis=-1)
    place = np.broadcast_to(place - width // 2, squared.shape)
    scale = np.square(radius[chosen])[:, None]
    terms = [(squared - np.square(place)) / scale, 2 * place / scale, -1.0 / scale]
    for _ in range(int(math.log2(power))):
        terms = _squared(terms)
    terms = [np.broadcast_to(term, squared.shape) for term in terms]
    # counts of the kernels at work are whole numbers, so nothing is left where none is
    terms.append(np.ones(squared.shape))
    chords = squared.size
    ends = csc_matrix(
        (
            np.tile([1.0, -1.0], chords),
            index.astype(np.int32).ravel(),
            np.arange(chords + 1, dtype=np.int32) * 2,
        ),
        shape=(height * (width + 1), chords),
    )
    return Chords(chosen, ends, np.stack(terms, axis=-1).reshape(chords, len(terms)))


def _strips(row, column, radius, power, shape, progress):
    """Strips of columns with the chords in them: (first column, width, chords of one block)."""
    half = math.ceil(float(radius.max()))
    kept = np.flatnonzero(
        (row > -radius)
        & (row < shape[0] - 1 + radius)
        & (column > -radius)
        & (column < shape[1] - 1 + radius)
    )
    if not len(kept):
        return
    step = 2 * half + 1
    order = kept[row_order(row[kept])]
    # records of like radius share a block, so that few of its rows are empty
    order = order[row_order(np.log(radius[order]) * 4)]
    order = order[row_order(column[order] / step)]
    strip = np.floor(column[order] / step).astype(np.int64)
    ends = np.append(np.flatnonzero(np.diff(strip)) + 1, len(order))
    start = 0
    for end in ends:
        first, width = int(strip[start]) * step - half, step + 2 * half + 1
        blocks = []
        while start < end:
            size = 2 * math.ceil(float(radius[order[start]])) + 1
            stop = min(start + max(1, _EVENTS // size), end)
            blocks.append(order[start:stop])
            start = stop
        yield (
            first,
            width,
            (
                _chords(row, column, radius, power, block, shape[0], first, width)
                for block in blocks
                if progress(start / len(order)) is None
            ),
        )


def _overlap(first, width, columns):
    """Columns of a strip that lie on the lattice: as counted in the strip, and in the lattice."""
    low, high = max(first, 0), min(first + width, columns)
    return slice(low - first, max(high, low) - first), slice(low, max(high, low))


def _sum_by_chords(row, column, weights, radius, power, shape, progress):
    total = np.zeros(shape)
    for first, width, blocks in _strips(row, column, radius, power, shape, progress):
        sums = np.zeros((shape[0] * (width + 1), 2 * power + 2))
        for chords in blocks:
            rows = len(chords.coefficients) // len(chords.records)
            chords.coefficients[:, :-1] *= np.repeat(weights[chords.records], rows)[:, None]
            sums += chords.ends @ chords.coefficients
        own, target = _overlap(first, width, shape[1])
        sums = np.cumsum(sums.reshape(shape[0], width + 1, -1), axis=1)[:, own]
        place = np.arange(own.start, own.stop) - width // 2
        value = sums[:, :, 2 * power].copy()
        for term in range(2 * power - 1, -1, -1):
            value *= place
            value += sums[:, :, term]
        total[:, target] += np.where(sums[:, :, -1] > 0.5, value, 0.0)
    return total


def _gather_by_chords(row, column, radius, power, raster, progress):
    collected = np.zeros(len(row))
    for first, width, blocks in _strips(row, column, radius, power, raster.shape, progress):
        own, source = _overlap(first, width, raster.shape[1])
        place = (np.arange(own.start, own.stop) - width // 2)[:, None]
        moments = np.zeros((raster.shape[0], width + 1, 2 * power + 1))
        values = raster[:, source, None] * place ** np.arange(2.0 * power + 1)
        # a chord sums from where it begins up to where it ends: the difference of two sums
        moments[:, own.start + 1 : own.stop + 1] = -np.cumsum(values, axis=1)
        moments[:, own.stop + 1 :] = moments[:, own.stop : own.stop + 1]
        moments = moments.reshape(-1, 2 * power + 1)
        for chords in blocks:
            held = np.einsum("ct,ct->c", chords.ends.T @ moments, chords.coefficients[:, :-1])
            collected[chords.records] = held.reshape(len(chords.records), -1).sum(axis=1)
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
