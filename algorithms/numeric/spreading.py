"""Records moved onto the nodes of a lattice, the loop that every surface spends its time in.

The scatter of a block of records is one sparse matrix product: a column per record, a row per
node, so that the inner loop is compiled and several weights per record travel together.
"""

import math
from dataclasses import dataclass

import numpy as np
from scipy.sparse import csc_matrix

from .progress import silent

# Kaiser-Bessel window: nodes that a record is shared among along an axis, and its shape. With
# these a Gaussian of 1.5 nodes or more comes out within 4e-5 of its peak (tests/numeric).
WIDTH = 6
SHAPE = 2.1 * WIDTH
_STEPS = 1 << 15
# records, and values, that are worked on at once: as many as the processor's cache holds
_BLOCK = 8192
_ELEMENTS = 1 << 19


def _window(distance):
    inside = np.maximum(1.0 - (2.0 * distance / WIDTH) ** 2, 0.0)
    return np.i0(SHAPE * np.sqrt(inside)) * (np.abs(distance) < WIDTH / 2)


def _window_table():
    fraction = (np.arange(_STEPS) + 0.5) / _STEPS
    return _window(fraction[:, None] + (WIDTH // 2 - 1) - np.arange(WIDTH))


_TABLE = _window_table()


def window_spectrum(frequency):
    """Fourier transform of the spreading window.

    Parameters
    ----------
    frequency : array
        Radians per node, -pi to pi.

    Returns
    -------
    array of the same shape

    References
    ----------
    Kaiser & Schafer (1980), IEEE Trans. ASSP 28:105; Fessler & Sutton (2003), IEEE Trans.
    Signal Process. 51:560.
    """
    argument = np.sqrt((SHAPE**2 - (0.5 * WIDTH * frequency) ** 2).astype(complex))
    return (WIDTH * np.sinh(argument) / argument).real


def row_order(row):
    """Order that sorts records by the row they lie in; neighbours in memory stay neighbours."""
    whole = np.floor(row)
    key = whole - whole.min()
    # numpy sorts 16-bit keys by radix, several times faster than wider ones
    key = key.astype(np.uint16 if key.max() < 65536 else np.int64)
    return np.argsort(key, kind="stable")


@dataclass(frozen=True)
class Block:
    """Some records and the nodes that they touch, as a sparse matrix of a column per record."""

    records: np.ndarray
    first_row: int
    span: int
    matrix: csc_matrix

    @classmethod
    def of(cls, records, rows, columns, values, width):
        """rows, columns: (n, k) and (n, l) nodes of a canvas so wide; values: (n, k, l)."""
        first = int(rows[:, 0].min())
        span = int(rows[:, -1].max()) + 1 - first
        index = ((rows - first) * width)[:, :, None] + columns[:, None, :]
        ends = np.arange(len(records) + 1, dtype=np.int32) * (rows.shape[1] * columns.shape[1])
        matrix = csc_matrix(
            (values.ravel(), index.ravel(), ends), shape=(span * width, len(records))
        )
        return cls(records, first, span, matrix)

    def add_to(self, canvas, weights):
        """Add every record's values times its weights, (n, planes), to (rows, columns, planes)."""
        own = weights[self.records]
        # the sparse product of a single column has a faster loop of its own
        added = self.matrix @ (own[:, 0] if own.shape[1] == 1 else own)
        window = canvas[self.first_row : self.first_row + self.span]
        window += added.reshape(window.shape)

    def collect(self, canvas):
        """Sum the canvas times every record's values, (n, planes)."""
        window = canvas[self.first_row : self.first_row + self.span]
        return self.matrix.T @ window.reshape(-1, canvas.shape[2])


def _spread_blocks(row, column, width, progress):
    """Blocks of records with the nodes of the Kaiser-Bessel window around them."""
    order = row_order(row)
    offsets = np.arange(WIDTH, dtype=np.int32)
    for start in range(0, len(order), _BLOCK):
        progress(start / len(order))
        chosen = order[start : start + _BLOCK]
        rows, columns = row[chosen], column[chosen]
        row_node, column_node = rows.astype(np.int32), columns.astype(np.int32)
        row_share = _TABLE[((rows - row_node) * _STEPS).astype(np.int32)]
        column_share = _TABLE[((columns - column_node) * _STEPS).astype(np.int32)]
        yield Block.of(
            chosen,
            row_node[:, None] + offsets,
            column_node[:, None] + offsets,
            row_share[:, :, None] * column_share[:, None, :],
            width,
        )


_BEFORE, _AFTER = WIDTH // 2 - 1, WIDTH // 2


def spread(row, column, weights, shape, progress=silent):
    """Spread records over a periodic lattice with the Kaiser-Bessel window.

    Parameters
    ----------
    row, column : (n,) arrays
        Places in nodes, 0 at the first node; rows in [0, shape[0]), columns in [0, shape[1]).
    weights : (n, planes) array
        Weights of each record, one per plane.
    shape : (int, int)
        Nodes of the lattice, each at least WIDTH.

    Returns
    -------
    (rows, columns, planes) array
    """
    canvas = np.zeros((shape[0] + WIDTH - 1, shape[1] + WIDTH - 1, weights.shape[1]))
    for block in _spread_blocks(row, column, canvas.shape[1], progress):
        block.add_to(canvas, weights)
    for axis in (0, 1):
        along = np.moveaxis(canvas, axis, 0)
        along[-_AFTER - _BEFORE : -_AFTER] += along[:_BEFORE]
        along[_BEFORE : _BEFORE + _AFTER] += along[-_AFTER:]
    return canvas[_BEFORE:-_AFTER, _BEFORE:-_AFTER]


def gather(row, column, weights, planes, progress=silent):
    """The transpose of spread: a weighted sum of the planes around every record.

    Parameters
    ----------
    row, column, weights
        As for spread.
    planes : (rows, columns, planes) array

    Returns
    -------
    (n,) array
    """
    canvas = np.pad(planes, ((_BEFORE, _AFTER), (_BEFORE, _AFTER), (0, 0)), mode="wrap")
    collected = np.empty(len(row))
    for block in _spread_blocks(row, column, canvas.shape[1], progress):
        own = weights[block.records]
        collected[block.records] = np.einsum("np,np->n", block.collect(canvas), own)
    return collected


def _window_blocks(row, column, reach, values, shape, margin, progress):
    """Blocks of records with the square of pixels that each can reach."""
    half = np.ceil(reach).astype(np.int64)
    kept = np.flatnonzero(
        (row > -half - 0.5)
        & (row < shape[0] + half)
        & (column > -half - 0.5)
        & (column < shape[1] + half)
    )
    if not len(kept):
        return
    order = kept[row_order(row[kept])]
    start = 0
    while start < len(order):
        progress(start / len(order))
        largest = int(half[order[start : start + _BLOCK]].max())
        offsets = np.arange(-largest, largest + 1, dtype=np.int32)
        stop = start + max(1, min(_BLOCK, _ELEMENTS // len(offsets) ** 2))
        chosen = order[start:stop]
        row_node = np.rint(row[chosen]).astype(np.int32)
        column_node = np.rint(column[chosen]).astype(np.int32)
        row_apart = offsets - (row[chosen] - row_node)[:, None]
        column_apart = offsets - (column[chosen] - column_node)[:, None]
        yield Block.of(
            chosen,
            row_node[:, None] + offsets + margin,
            column_node[:, None] + offsets + margin,
            values(np.square(row_apart)[:, :, None], np.square(column_apart)[:, None, :], chosen),
            shape[1] + 2 * margin,
        )
        start = stop


def _margin(reach):
    return 2 * math.ceil(reach.max()) + 1


def sum_windows(row, column, weights, reach, values, shape, progress=silent):
    """Sum functions of small reach over the pixels around each record.

    Parameters
    ----------
    row, column : (n,) arrays
        Places in pixels, 0 at the centre of the first pixel; they may lie outside the lattice.
    weights : (n,) array
    reach : (n,) array
        Distance in pixels within which pixels are visited; any further pixel may be too.
    values : callable
        Of the squared distances along rows (m, k, 1) and columns (m, 1, k) and the records'
        numbers (m,); gives (m, k, k) values.
    shape : (int, int)

    Returns
    -------
    (rows, columns) array
    """
    margin = _margin(reach)
    canvas = np.zeros((shape[0] + 2 * margin, shape[1] + 2 * margin, 1))
    weights = weights[:, None]
    for block in _window_blocks(row, column, reach, values, shape, margin, progress):
        block.add_to(canvas, weights)
    return canvas[margin:-margin, margin:-margin, 0]


def gather_windows(row, column, reach, values, raster, progress=silent):
    """The transpose of sum_windows: every record's function summed over a raster, (n,) array."""
    margin = _margin(reach)
    canvas = np.pad(raster, margin)[:, :, None]
    collected = np.zeros(len(row))
    for block in _window_blocks(row, column, reach, values, raster.shape, margin, progress):
        collected[block.records] = block.collect(canvas)[:, 0]
    return collected


@dataclass(frozen=True)
class Strip:
    """Some records of one strip of columns: Gaussians along rows and along columns apart."""

    records: np.ndarray
    rows: slice
    columns: slice
    along_rows: csc_matrix
    along_columns: np.ndarray


def _strips(row, column, bandwidths, reach, shape, margin, progress):
    """Records strip by strip; along the columns of a strip every value is worked out, so that
    the sum over records is a product of a sparse and a dense matrix."""
    half = math.ceil(reach)
    kept = np.flatnonzero(
        (row > -half - 0.5)
        & (row < shape[0] + half)
        & (column > -half - 0.5)
        & (column < shape[1] + half)
    )
    if not len(kept):
        return
    width = 2 * half + 1
    order = kept[row_order(row[kept])]
    order = order[row_order(column[order] / width)]
    strip = np.floor(column[order] / width).astype(np.int64)
    ends = np.append(np.flatnonzero(np.diff(strip)) + 1, len(order))
    offsets = np.arange(-half, half + 1, dtype=np.int32)
    step = max(64, _ELEMENTS // (4 * width))
    start = 0
    for end in ends:
        first = int(strip[start]) * width
        columns = slice(max(first - half, 0), min(first + width + half + 1, shape[1]))
        while start < end:
            progress(start / len(order))
            chosen = order[start : min(start + step, end)]
            start += len(chosen)
            if columns.stop <= columns.start:
                continue
            scale = (-0.5 / np.square(bandwidths[chosen]))[:, None]
            row_node = np.rint(row[chosen]).astype(np.int32)
            apart = offsets - (row[chosen] - row_node)[:, None]
            values = np.exp(scale * np.square(apart)) * (-scale / np.pi)
            low = int(row_node.min()) - half
            span = int(row_node.max()) + half + 1 - low
            matrix = csc_matrix(
                (
                    values.ravel(),
                    ((row_node - low)[:, None] + offsets).ravel(),
                    np.arange(len(chosen) + 1, dtype=np.int32) * width,
                ),
                shape=(span, len(chosen)),
            )
            apart = np.arange(columns.start, columns.stop) - column[chosen][:, None]
            rows = slice(low + margin, low + margin + span)
            yield Strip(chosen, rows, columns, matrix, np.exp(scale * np.square(apart)))


def sum_gaussians(row, column, weights, bandwidths, reach, shape, progress=silent):
    """Sum narrow Gaussians of unit mass over the pixels around each record.

    Parameters
    ----------
    row, column, weights, bandwidths : (n,) arrays
        In pixels, 0 at the centre of the first pixel; places may lie outside the lattice.
    reach : float
        Distance in pixels within which pixels are visited; any further pixel may be too.
    shape : (int, int)

    Returns
    -------
    (rows, columns) array
    """
    margin = 2 * math.ceil(reach) + 1
    canvas = np.zeros((shape[0] + 2 * margin, shape[1]))
    for strip in _strips(row, column, bandwidths, reach, shape, margin, progress):
        weighted = strip.along_columns * weights[strip.records][:, None]
        canvas[strip.rows, strip.columns] += strip.along_rows @ weighted
    return canvas[margin:-margin]


def gather_gaussians(row, column, bandwidths, reach, raster, progress=silent):
    """The transpose of sum_gaussians: every record's Gaussian summed over a raster, (n,) array."""
    margin = 2 * math.ceil(reach) + 1
    canvas = np.pad(raster, ((margin, margin), (0, 0)))
    collected = np.zeros(len(row))
    for strip in _strips(row, column, bandwidths, reach, raster.shape, margin, progress):
        along_rows = strip.along_rows.T @ np.ascontiguousarray(canvas[strip.rows, strip.columns])
        collected[strip.records] = np.einsum("nc,nc->n", along_rows, strip.along_columns)
    return collected
