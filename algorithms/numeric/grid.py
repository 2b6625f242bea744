"""The lattice of square pixels that surfaces and evaluation maps live on."""

import math
from dataclasses import dataclass

import numpy as np

from .errors import InputError


@dataclass(frozen=True)
class Grid:
    """A north-up lattice of square pixels; row 0 is the northernmost.

    Attributes
    ----------
    left, top : float
        Outer corner of the first pixel, in units of the working CRS.
    cell : float
        Side of a pixel, same units.
    rows, columns : int
    """

    left: float
    top: float
    cell: float
    rows: int
    columns: int

    def __post_init__(self):
        if not (math.isfinite(self.cell) and self.cell > 0):
            raise InputError("Cell size must be above 0; found {}.", self.cell)
        if self.rows < 1 or self.columns < 1:
            raise InputError(
                "A grid needs pixels; found {} rows x {} columns.", self.rows, self.columns
            )

    @property
    def shape(self):
        return self.rows, self.columns

    @property
    def right(self):
        return self.left + self.columns * self.cell

    @property
    def bottom(self):
        return self.top - self.rows * self.cell

    @property
    def bounds(self):
        """(left, bottom, right, top)."""
        return self.left, self.bottom, self.right, self.top

    @property
    def cell_area(self):
        return self.cell * self.cell

    def x_centres(self):
        """Pixel centres from west to east, (columns,) array."""
        return self.left + (np.arange(self.columns) + 0.5) * self.cell

    def y_centres(self):
        """Pixel centres from north to south, (rows,) array."""
        return self.top - (np.arange(self.rows) + 0.5) * self.cell

    def centres(self):
        """Pixel centres as two (rows, columns) arrays, x and y."""
        return np.meshgrid(self.x_centres(), self.y_centres())

    def pixels(self, x, y):
        """Row and column that hold each point, and whether they lie inside the grid.

        Parameters
        ----------
        x, y : (n,) arrays
            Places, units of the working CRS.

        Returns
        -------
        rows, columns : (n,) int64 arrays
        inside : (n,) bool array
        """
        columns = np.floor((np.asarray(x, float) - self.left) / self.cell).astype(np.int64)
        rows = np.floor((self.top - np.asarray(y, float)) / self.cell).astype(np.int64)
        inside = (rows >= 0) & (rows < self.rows) & (columns >= 0) & (columns < self.columns)
        return rows, columns, inside


def covering(bounds, cell, margin=0.0):
    """The smallest grid with edges on multiples of the cell size that covers an extent.

    Edges on multiples make two runs with one cell size line up.

    Parameters
    ----------
    bounds : (left, bottom, right, top)
    cell : float
        Side of a pixel, above 0, same units.
    margin : float
        Added on every side before the edges are moved outwards.

    Returns
    -------
    Grid
    """
    if not (math.isfinite(cell) and cell > 0):
        raise InputError("Cell size must be above 0; found {}.", cell)
    left, bottom, right, top = (float(value) for value in bounds)
    if not all(math.isfinite(value) for value in (left, bottom, right, top)):
        raise InputError(
            "The extent of the data is empty or not finite; check the layer's geometry."
        )
    first_column = math.floor((left - margin) / cell)
    last_column = max(math.ceil((right + margin) / cell), first_column + 1)
    first_row = math.floor((bottom - margin) / cell)
    last_row = max(math.ceil((top + margin) / cell), first_row + 1)
    return Grid(
        first_column * cell, last_row * cell, cell, last_row - first_row, last_column - first_column
    )
