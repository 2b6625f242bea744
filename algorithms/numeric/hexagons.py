"""Tilings by regular hexagons and by squares: which cell holds a point, and what it looks like.

The size of a cell is the distance between the centres of neighbouring cells: for a hexagon the
width across flats, for a square the side. A hexagon of size d has side d / sqrt(3) and area
sqrt(3)/2 d^2. Hexagons are named by axial coordinates (q, r), squares by (column, row).
Every function takes the same frame: an origin, where the cell (0, 0) has its centre (hexagons)
or its lower left corner (squares), and an angle by which the tiling is turned anticlockwise
about the origin, in radians.
"""

import math

import numpy as np
import shapely

from .errors import InputError

POINTY = "pointy"
FLAT = "flat"
HEXAGON = "hexagon"
SQUARE = "square"

HEXAGON_NEIGHBOURS = np.array([(1, 0), (0, 1), (-1, 1), (-1, 0), (0, -1), (1, -1)])

# Corners about the centre, anticlockwise, in half widths (x) and half sides (y) of a pointy-top
# hexagon. On that lattice every corner and centre is a pair of integers, so that neighbouring
# cells compute a shared corner from the same numbers and get the same bits.
_POINTY_CORNERS = np.array([(1, -1), (1, 1), (0, 2), (-1, 1), (-1, -1), (0, -2)])
_FLAT_CORNERS = np.array([(2, 0), (1, 1), (-1, 1), (-2, 0), (-1, -1), (1, -1)])
_SQUARE_CORNERS = np.array([(0, 0), (1, 0), (1, 1), (0, 1)])

MOST_CELLS = 5_000_000


def hexagon_area(size):
    """Area of a hexagon of the given size: sqrt(3)/2 size^2 = 3 sqrt(3)/2 side^2."""
    return math.sqrt(3) / 2 * size * size


def cell_area(size, shape):
    """Area of one cell of either shape, squared units of the size."""
    return hexagon_area(size) if shape == HEXAGON else size * size


def hexagon_cells(x, y, size, orientation=POINTY, origin=(0.0, 0.0), angle=0.0):
    """The hexagon whose centre is nearest to each point, by cube rounding.

    The axial coordinates are completed to three that sum to 0, each is rounded, and the one that
    was moved furthest is replaced by what the other two leave.

    Parameters
    ----------
    x, y : arrays of one shape
        Places, units of the working CRS.
    size : float
        Distance between centres of neighbouring cells, same units.
    orientation : {"pointy", "flat"}
        Which way a corner points before the tiling is turned: north, or east.
    origin : (float, float)
        Centre of the cell (0, 0).
    angle : float
        Turn of the tiling about the origin, radians anticlockwise.

    Returns
    -------
    q, r : int64 arrays of the same shape
    """
    _check(size, orientation)
    u, v = _into_frame(x, y, origin, angle)
    if orientation == POINTY:
        r = v / (math.sqrt(3) / 2 * size)
        q = u / size - r / 2
    else:
        q = u / (math.sqrt(3) / 2 * size)
        r = v / size - q / 2
    third = -q - r
    rounded_q, rounded_r, rounded_third = np.rint(q), np.rint(r), np.rint(third)
    moved_q = np.abs(rounded_q - q)
    moved_r = np.abs(rounded_r - r)
    moved_third = np.abs(rounded_third - third)
    replace_q = (moved_q > moved_r) & (moved_q > moved_third)
    replace_r = ~replace_q & (moved_r > moved_third)
    exact_q = np.where(replace_q, -rounded_r - rounded_third, rounded_q)
    exact_r = np.where(replace_r, -rounded_q - rounded_third, rounded_r)
    return exact_q.astype(np.int64), exact_r.astype(np.int64)


def hexagon_centres(q, r, size, orientation=POINTY, origin=(0.0, 0.0), angle=0.0):
    """Centres of hexagons as two arrays, x and y; parameters as in `hexagon_cells`."""
    _check(size, orientation)
    a, b = _hexagon_lattice(q, r, orientation)
    return _out_of_frame(a, b, _hexagon_units(size, orientation), origin, angle)


def hexagon_polygons(q, r, size, orientation=POINTY, origin=(0.0, 0.0), angle=0.0):
    """Hexagons as polygons whose shared corners are equal to the bit.

    Parameters
    ----------
    q, r : (n,) int arrays
        Axial coordinates; the other parameters as in `hexagon_cells`.

    Returns
    -------
    (n,) array of shapely polygons, corners anticlockwise
    """
    _check(size, orientation)
    a, b = _hexagon_lattice(q, r, orientation)
    corners = _POINTY_CORNERS if orientation == POINTY else _FLAT_CORNERS
    return _polygons(a, b, corners, _hexagon_units(size, orientation), origin, angle)


def square_cells(x, y, size, origin=(0.0, 0.0), angle=0.0):
    """Column and row of the square that holds each point, int64 arrays.

    Parameters
    ----------
    x, y : arrays of one shape
        Places, units of the working CRS.
    size : float
        Side of a square, same units.
    origin : (float, float)
        Lower left corner of the cell (0, 0).
    angle : float
        Turn of the tiling about the origin, radians anticlockwise.
    """
    _check(size)
    u, v = _into_frame(x, y, origin, angle)
    return np.floor(u / size).astype(np.int64), np.floor(v / size).astype(np.int64)


def square_centres(column, row, size, origin=(0.0, 0.0), angle=0.0):
    """Centres of squares as two arrays, x and y; parameters as in `square_cells`."""
    _check(size)
    a, b = np.asarray(column) + 0.5, np.asarray(row) + 0.5
    return _out_of_frame(a, b, (size, size), origin, angle)


def square_polygons(column, row, size, origin=(0.0, 0.0), angle=0.0):
    """Squares as an array of shapely polygons whose shared corners are equal to the bit."""
    _check(size)
    return _polygons(
        np.asarray(column), np.asarray(row), _SQUARE_CORNERS, (size, size), origin, angle
    )


def cells_covering(
    area, size, shape=HEXAGON, orientation=POINTY, origin=(0.0, 0.0), angle=0.0, most=MOST_CELLS
):
    """The cells whose interior meets an area.

    Parameters
    ----------
    area : shapely geometry or (left, bottom, right, top)
        Polygonal, units of the working CRS.
    size : float
        Distance between centres of neighbouring cells, same units.
    shape : {"hexagon", "square"}
    orientation, origin, angle
        As in `hexagon_cells` and `square_cells`.
    most : int
        Refuse to make more candidate cells than this.

    Returns
    -------
    q, r : (n,) int64 arrays
        Axial coordinates, or column and row, ordered by r and then q.

    Raises
    ------
    InputError
        If the area is empty, or the size so small that it would take more than `most` cells.
    """
    _check(size, orientation)
    geometry = area if isinstance(area, shapely.Geometry) else shapely.box(*area)
    if geometry.is_empty:
        raise InputError("The area to cover with cells is empty; check the boundary's geometry.")
    q, r = _candidates(geometry.bounds, size, shape, orientation, origin, angle, most)
    if shape == SQUARE:
        polygons = square_polygons(q, r, size, origin, angle)
    else:
        polygons = hexagon_polygons(q, r, size, orientation, origin, angle)
    shapely.prepare(geometry)
    kept = shapely.intersects(geometry, polygons)
    on_the_edge = np.flatnonzero(kept & ~shapely.contains_properly(geometry, polygons))
    kept[on_the_edge] = shapely.relate_pattern(polygons[on_the_edge], geometry, "T********")
    return q[kept], r[kept]


def _candidates(bounds, size, shape, orientation, origin, angle, most):
    """Every cell that could meet an upright rectangle, by its box in the turned frame."""
    left, bottom, right, top = bounds
    u, v = _into_frame(
        np.array([left, right, right, left]), np.array([bottom, bottom, top, top]), origin, angle
    )
    if shape == HEXAGON and orientation == FLAT:
        u, v = v, u
    step = size if shape == SQUARE else math.sqrt(3) / 2 * size
    first_column, last_column = math.floor(u.min() / size) - 1, math.ceil(u.max() / size) + 1
    first_row, last_row = math.floor(v.min() / step) - 1, math.ceil(v.max() / step) + 1
    number = (last_column - first_column + 1) * (last_row - first_row + 1)
    if number > most:
        raise InputError(
            "Cells of size {:g} would cover the area with {:,} cells, more than {:,}; "
            "choose a size of {:.3g} or more.",
            size,
            number,
            most,
            size * math.sqrt(number / most) * 1.05,
        )
    row, column = np.meshgrid(
        np.arange(first_row, last_row + 1), np.arange(first_column, last_column + 1), indexing="ij"
    )
    row, column = row.ravel(), column.ravel()
    if shape == SQUARE:
        return column, row
    along = column - row // 2
    if orientation == POINTY:
        return along, row
    ordered = np.lexsort((row, along))
    return row[ordered], along[ordered]


def _check(size, orientation=POINTY):
    if not (math.isfinite(size) and size > 0):
        raise InputError("Cell size must be above 0; found {}.", size)
    if orientation not in (POINTY, FLAT):
        raise InputError("A hexagon's orientation is 'pointy' or 'flat'; found {!r}.", orientation)


def _into_frame(x, y, origin, angle):
    x = np.asarray(x, float) - origin[0]
    y = np.asarray(y, float) - origin[1]
    if angle == 0:
        return x, y
    cosine, sine = math.cos(angle), math.sin(angle)
    return cosine * x + sine * y, cosine * y - sine * x


def _out_of_frame(a, b, units, origin, angle):
    u, v = a * units[0], b * units[1]
    if angle != 0:
        cosine, sine = math.cos(angle), math.sin(angle)
        u, v = cosine * u - sine * v, sine * u + cosine * v
    return u + origin[0], v + origin[1]


def _hexagon_lattice(q, r, orientation):
    """Centres on the lattice of half widths and half sides, as integers."""
    q, r = np.asarray(q), np.asarray(r)
    return (2 * q + r, 3 * r) if orientation == POINTY else (3 * q, 2 * r + q)


def _hexagon_units(size, orientation):
    half_width, half_side = size / 2, size / (2 * math.sqrt(3))
    return (half_width, half_side) if orientation == POINTY else (half_side, half_width)


def _polygons(a, b, corners, units, origin, angle):
    """Polygons from corner offsets on an integer lattice."""
    a = a.reshape(-1, 1) + corners[:, 0]
    b = b.reshape(-1, 1) + corners[:, 1]
    x, y = _out_of_frame(a, b, units, origin, angle)
    return shapely.polygons(np.stack([x, y], axis=-1))
