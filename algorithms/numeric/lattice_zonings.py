"""Zonings of a plane by one regular tiling laid down anywhere, at any angle.

Cells are numbered densely over an extent, so that the counts of a zoning are one
``numpy.bincount`` and its values one table look-up. Numbers are row-major: row r of the tiling,
then column q; for hexagons these are the axial coordinates of `hexagons`.
"""

import math
from dataclasses import dataclass

import numpy as np

from .errors import InputError
from .hexagons import HEXAGON, SQUARE

# Points that fit the processor's nearest caches with the few buffers that numbering takes.
_BLOCK = 32768

# Neighbours of one half plane, as steps in (row, column), so that each pair is met once.
_HALF_NEIGHBOURS = {HEXAGON: ((0, 1), (1, 0), (1, -1)), SQUARE: ((0, 1), (1, 0))}


@dataclass(frozen=True)
class Tiling:
    """One tiling of the plane; the frame is that of the module `hexagons`, pointy-top.

    Attributes
    ----------
    shape : {"hexagon", "square"}
    size : float
        Distance between centres of neighbouring cells, units of the working CRS.
    origin : (float, float)
    angle : float
        Radians anticlockwise.
    """

    shape: str
    size: float
    origin: tuple
    angle: float


@dataclass(frozen=True)
class CellBlock:
    """The cells of a tiling that can hold a point of an extent, numbered row by row."""

    tiling: Tiling
    first_row: int
    first_column: int
    rows: int
    columns: int

    @property
    def cells(self):
        return self.rows * self.columns


def random_tiling(shape, size, rotate, generator):
    """A tiling with an offset uniform over one cell and, if wanted, a uniform turn.

    Parameters
    ----------
    shape : {"hexagon", "square"}
    size : float
    rotate : bool
    generator : numpy.random.Generator

    Returns
    -------
    Tiling
    """
    if shape not in _HALF_NEIGHBOURS:
        raise InputError("A cell's shape is 'hexagon' or 'square'; found {!r}.", shape)
    first, second, turn = generator.random(3)
    # Where the lattice spanned by the two shifts to a neighbour repeats, so does the tiling.
    if shape == HEXAGON:
        shift = (first + second / 2) * size, second * math.sqrt(3) / 2 * size
        symmetry = math.pi / 3
    else:
        shift = first * size, second * size
        symmetry = math.pi / 2
    angle = turn * symmetry if rotate else 0.0
    cosine, sine = math.cos(angle), math.sin(angle)
    origin = cosine * shift[0] - sine * shift[1], sine * shift[0] + cosine * shift[1]
    return Tiling(shape, size, origin, angle)


def cell_block(tiling, bounds):
    """The block of cells that holds every point of an upright rectangle.

    Parameters
    ----------
    tiling : Tiling
    bounds : (left, bottom, right, top)

    Returns
    -------
    CellBlock
    """
    left, bottom, right, top = bounds
    x = np.array([left, right, right, left])
    y = np.array([bottom, bottom, top, top])
    u, v = _in_frame(tiling, x, y)
    if tiling.shape == HEXAGON:
        row = v / (math.sqrt(3) / 2 * tiling.size)
        column = u / tiling.size - row / 2
    else:
        row, column = v / tiling.size, u / tiling.size
    # A hexagon reaches 2/3 of a row beyond its centre; one more cell covers that and rounding.
    first_row, last_row = math.floor(row.min()) - 1, math.ceil(row.max()) + 1
    first_column, last_column = math.floor(column.min()) - 1, math.ceil(column.max()) + 1
    return CellBlock(
        tiling, first_row, first_column, last_row - first_row + 1, last_column - first_column + 1
    )


def cell_numbers(block, x, y):
    """Number of the cell that holds each point.

    Three families of lines cut the plane into triangles, six of which make a hexagon; which strip
    of each family a point lies in names its triangle, and sums of the strips divided by three
    name the hexagon. Unlike cube rounding that takes no comparisons.

    Parameters
    ----------
    block : CellBlock
    x, y : (n,) float arrays
        Inside the extent that the block was made for.

    Returns
    -------
    (n,) intp array, 0 to cells - 1
    """
    numbers = np.empty(len(x), np.intp)
    fill = _fill_hexagons if block.tiling.shape == HEXAGON else _fill_squares
    buffers = np.empty((4, min(_BLOCK, len(x))))
    for start in range(0, len(x), _BLOCK):
        part = slice(start, start + _BLOCK)
        fill(block, x[part], y[part], buffers[:, : len(x[part])], numbers[part])
    return numbers


def lattice_morans_i(value, block):
    """Moran's I over the cells of a block, neighbours sharing a side; as `morans_i`.

    Parameters
    ----------
    value : (cells,) array
        NaN where a cell has no value.
    block : CellBlock

    Returns
    -------
    float
    """
    value = value.reshape(block.rows, block.columns)
    present = ~np.isnan(value)
    number = np.count_nonzero(present)
    if number == 0:
        return math.nan
    mean = value[present].sum() / number
    deviation = np.where(present, value - mean, 0.0)
    squares = np.vdot(deviation, deviation)
    # Rounding leaves equal values a few bits apart; that is not a spread.
    if squares <= number * (1e-12 * np.abs(value[present]).max()) ** 2:
        return math.nan
    cross, pairs = 0.0, 0
    for down, along in _HALF_NEIGHBOURS[block.tiling.shape]:
        here, there = _shifted(down, along)
        cross += (deviation[here] * deviation[there]).sum()
        pairs += np.count_nonzero(present[here] & present[there])
    return number * cross / (pairs * squares) if pairs else math.nan


def _shifted(down, along):
    """Slices that bring each cell together with its neighbour a step away."""
    here_row, there_row = (slice(None, -1), slice(1, None)) if down else (slice(None), slice(None))
    if along == 0:
        here_column = there_column = slice(None)
    else:
        here_column, there_column = slice(None, -1), slice(1, None)
        if along < 0:
            here_column, there_column = there_column, here_column
    return (here_row, here_column), (there_row, there_column)


def _in_frame(tiling, x, y):
    x, y = x - tiling.origin[0], y - tiling.origin[1]
    cosine, sine = math.cos(tiling.angle), math.sin(tiling.angle)
    return cosine * x + sine * y, cosine * y - sine * x


def _linear(tiling, along_u, along_v):
    """along_u * u + along_v * v as a function of x and y: factor of x, factor of y, constant."""
    cosine, sine = math.cos(tiling.angle), math.sin(tiling.angle)
    for_x = along_u * cosine - along_v * sine
    for_y = along_u * sine + along_v * cosine
    return for_x, for_y, -(for_x * tiling.origin[0] + for_y * tiling.origin[1])


def _evaluate(coefficients, x, y, out, scratch):
    for_x, for_y, constant = coefficients
    np.multiply(x, for_x, out=out)
    np.multiply(y, for_y, out=scratch)
    out += scratch
    out += constant


def _fill_hexagons(block, x, y, buffers, numbers):
    rising, falling, upright, scratch = buffers
    side, width = block.tiling.size / math.sqrt(3), block.tiling.size
    _evaluate(_linear(block.tiling, 1 / width, 1 / side), x, y, rising, scratch)
    _evaluate(_linear(block.tiling, -1 / width, 1 / side), x, y, falling, scratch)
    np.subtract(rising, falling, out=upright)
    for strips in (rising, falling, upright):
        np.floor(strips, out=strips)
    # Of the six triangles of the hexagon (0, 0): rising + falling is -2 to 0 and
    # upright - falling is -1 to 1; half a unit more keeps the quotient clear of whole numbers.
    rising += falling
    rising += 2.5
    upright -= falling
    upright += 1.5
    for coordinate in (rising, upright):
        coordinate *= 1 / 3
        np.floor(coordinate, out=coordinate)
    _number(block, rising, upright, numbers)


def _fill_squares(block, x, y, buffers, numbers):
    row, column, scratch = buffers[:3]
    size = block.tiling.size
    _evaluate(_linear(block.tiling, 0.0, 1 / size), x, y, row, scratch)
    _evaluate(_linear(block.tiling, 1 / size, 0.0), x, y, column, scratch)
    np.floor(row, out=row)
    np.floor(column, out=column)
    _number(block, row, column, numbers)


def _number(block, row, column, numbers):
    row *= block.columns
    row += column
    row -= block.first_row * block.columns + block.first_column
    np.copyto(numbers, row, casting="unsafe")
