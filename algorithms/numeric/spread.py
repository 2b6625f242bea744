"""Polygons as points: counts and areas spread evenly over the ground of their polygon."""

import math

import numpy as np
import shapely

from .errors import InputError

MOST_POINTS = 2_000_000


def lattice_inside(area, spacing):
    """Centres of the squares of a lattice that lie in an area.

    Parameters
    ----------
    area : shapely polygon or multipolygon
        Units of the working CRS.
    spacing : float
        Side of the squares, whose corners lie on its multiples.

    Returns
    -------
    x, y : (n,) arrays
        None may lie in an area smaller than a square.
    """
    left, bottom, right, top = area.bounds
    first, last = math.floor(left / spacing), math.ceil(right / spacing)
    lowest, highest = math.floor(bottom / spacing), math.ceil(top / spacing)
    if (last - first) * (highest - lowest) > MOST_POINTS * 10:
        raise InputError(
            "The area would be sampled at more than {:,} points; choose larger cells.", MOST_POINTS
        )
    x, y = np.meshgrid(
        (np.arange(first, last) + 0.5) * spacing, (np.arange(lowest, highest) + 0.5) * spacing
    )
    shapely.prepare(area)
    inside = shapely.contains_xy(area, x, y)
    return x[inside], y[inside]


def area_samples(area, spacing):
    """Points that stand for equal shares of an area.

    Parameters
    ----------
    area : shapely polygon or multipolygon
    spacing : float

    Returns
    -------
    x, y, share : (n,) arrays
        `share` is the area that a point stands for; the shares sum to the area.
    """
    x, y = lattice_inside(area, spacing)
    if not len(x):
        point = area.representative_point()
        x, y = np.array([point.x]), np.array([point.y])
    return x, y, np.full(len(x), area.area / len(x))


def spread_evenly(polygons, values, spacing):
    """Points that carry the values of polygons, spread evenly inside each.

    Parameters
    ----------
    polygons : (n,) array of shapely polygons or multipolygons
        Valid ones.
    values : sequence of (n,) arrays
        Counts to spread; each keeps its sum.
    spacing : float
        Distance between points, same units. A polygon that no lattice point falls into
        carries its values on one point inside.

    Returns
    -------
    x, y : (points,) arrays
    spread : list of (points,) arrays, one for each of `values`
    owner : (points,) int array
        Polygon that each point belongs to.
    """
    parts = [lattice_inside(polygon, spacing) for polygon in polygons]
    for index in (i for i, (x, _) in enumerate(parts) if not len(x)):
        point = polygons[index].representative_point()
        parts[index] = np.array([point.x]), np.array([point.y])
    number = np.array([len(x) for x, _ in parts])
    owner = np.repeat(np.arange(len(parts)), number)
    x, y = (np.concatenate([part[axis] for part in parts]) for axis in (0, 1))
    return x, y, [(np.asarray(column, float) / number)[owner] for column in values], owner
