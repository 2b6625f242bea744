"""Base units and wards of the invented district, which tile it exactly and stay on one river bank.

Small cells are cut by the river and the marsh edge, noded once, and grown together along their
shared borders. Because every border is one line that both neighbours carry, units and wards meet
without gaps or overlaps.
"""

from dataclasses import dataclass

import numpy as np
import shapely
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components, dijkstra
from scipy.spatial import cKDTree

from .practice_streets import even_out, uniform_places

PRECISION = 0.01
CELLS_PER_UNIT = 7
SOUTH_BANK, NORTH_BANK, MARSH = range(3)


@dataclass(frozen=True)
class Zones:
    """A tiling of the district.

    Attributes
    ----------
    polygons : (k,) array of Polygons
    region : (k,) int array
        SOUTH_BANK, NORTH_BANK or MARSH.
    """

    polygons: np.ndarray
    region: np.ndarray


def make_units(rng, ground, home_x, home_y, unit_count, marsh_unit_count, progress):
    """Cut the district into base units, small where many people live.

    Parameters
    ----------
    rng : numpy.random.Generator
    ground : practice_ground.Ground
    home_x, home_y : (n,) arrays
        Place of every resident.
    unit_count, marsh_unit_count : int
        Units in all, and those of them in the marsh.
    progress : callable

    Returns
    -------
    Zones
    """
    faces = _cells(rng, ground, home_x, home_y, CELLS_PER_UNIT * unit_count)
    progress(0.3)
    graph = shared_borders(faces)
    region, graph = _regions(ground, faces, graph)
    progress(0.5)
    residents = count_inside(faces, home_x, home_y)
    area = shapely.area(faces)
    # Mostly people, with a little ground, decide: open country gets few but large units.
    weight = residents / residents.sum() + 0.16 * area / area.sum()
    label = grow_zones(
        rng, faces, graph, region, weight, _shares(region, weight, unit_count, marsh_unit_count)
    )
    progress(0.7)
    polygons = dissolve(faces, label)
    first = np.unique(label, return_index=True)[1]
    progress(1.0)
    return Zones(polygons, region[first])


def make_wards(rng, units, residents, ward_count):
    """Join base units into wards that stay on one bank, the marsh being one of them, the last.

    Parameters
    ----------
    rng : numpy.random.Generator
    units : Zones
    residents : (k,) array
        Residents of each unit.
    ward_count : int

    Returns
    -------
    (k,) int array
        The ward of every unit, 0 to ward_count - 1.
    """
    graph = within(shared_borders(units.polygons), units.region)
    weight = residents.astype(float) ** 0.9 + 1.0
    counts = _shares(units.region, weight, ward_count, 1)
    return grow_zones(rng, units.polygons, graph, units.region, weight, counts)


def grow_zones(rng, polygons, graph, region, weight, counts):
    """Grow connected zones from evened-out centres, region by region.

    Every polygon joins the centre with the shortest way to it from middle to middle.

    Parameters
    ----------
    rng : numpy.random.Generator
    polygons : (n,) array of Polygons
    graph : (n, n) sparse matrix
        Non-zero where two polygons of one region share a border.
    region : (n,) int array
    weight : (n,) array
        What is to be shared out evenly.
    counts : sequence of int
        Number of zones of each region.

    Returns
    -------
    (n,) int array
        Zone of every polygon; the zones of a region follow those of the regions before it.
    """
    middle = shapely.centroid(polygons)
    x, y = shapely.get_x(middle), shapely.get_y(middle)
    heads = []
    for number, count in enumerate(counts):
        members = np.flatnonzero(region == number)
        share = weight[members] / weight[members].sum()
        start = members[rng.choice(len(members), count, replace=False, p=share)]
        centres = even_out(np.column_stack([x[start], y[start]]), x[members], y[members], share, 10)
        heads.append(_distinct_nearest(centres, x[members], y[members], members))
    heads = np.concatenate(heads)
    links = coo_matrix(graph)
    steps = np.hypot(x[links.row] - x[links.col], y[links.row] - y[links.col])
    roads = coo_matrix((steps, (links.row, links.col)), shape=links.shape).tocsr()
    _, _, source = dijkstra(
        roads, directed=False, indices=heads, min_only=True, return_predecessors=True
    )
    number_of = np.full(len(polygons), -1)
    number_of[heads] = np.arange(len(heads))
    return number_of[source]


def shared_borders(polygons):
    """Length of the border that each pair of polygons shares, as a symmetric sparse matrix.

    The polygons must be noded: a shared border has the same vertices on both sides.
    """
    edges, owner = _edges(polygons)
    unique, inverse, uses = np.unique(edges, axis=0, return_inverse=True, return_counts=True)
    order = np.argsort(inverse.ravel(), kind="stable")
    first = np.concatenate([[0], np.cumsum(uses)[:-1]])[uses == 2]
    left, right = owner[order[first]], owner[order[first + 1]]
    length = np.hypot(unique[:, 2] - unique[:, 0], unique[:, 3] - unique[:, 1])[uses == 2]
    size = (len(polygons), len(polygons))
    half = coo_matrix((length, (left, right)), shape=size).tocsr()
    return half + half.T


def within(graph, region):
    """The same graph without the edges that run between different regions."""
    links = coo_matrix(graph)
    kept = region[links.row] == region[links.col]
    return coo_matrix(
        (links.data[kept], (links.row[kept], links.col[kept])), shape=links.shape
    ).tocsr()


def dissolve(polygons, label):
    """Join the polygons of each label, 0 to the largest, by their shared borders."""
    order = np.argsort(label, kind="stable")
    groups = np.split(polygons[order], np.cumsum(np.bincount(label))[:-1])
    return np.array([shapely.coverage_union_all(group) for group in groups], dtype=object)


def locate(polygons, x, y):
    """Index of the polygon that holds each place; -1 outside all, the first of two on a border."""
    point, polygon = shapely.STRtree(polygons).query(shapely.points(x, y), predicate="intersects")
    found = np.full(len(x), len(polygons))
    np.minimum.at(found, point, polygon)
    return np.where(found == len(polygons), -1, found)


def count_inside(polygons, x, y):
    """Number of places in each polygon."""
    found = locate(polygons, x, y)
    return np.bincount(found[found >= 0], minlength=len(polygons))


def _cells(rng, ground, home_x, home_y, count):
    """Voronoi cells around homes and open ground, noded with boundary, river and marsh edge."""
    people = int(0.8 * count)
    chosen = rng.choice(len(home_x), people, replace=len(home_x) < people)
    wild_x, wild_y = uniform_places(rng, ground.boundary, count - people)
    x = np.append(home_x[chosen] + rng.normal(0, 20.0, people), wild_x)
    y = np.append(home_y[chosen] + rng.normal(0, 20.0, people), wild_y)
    weights = np.ones(len(home_x))
    centres = even_out(np.column_stack([x, y]), home_x, home_y, weights, 1)
    edges = shapely.voronoi_polygons(
        shapely.multipoints(centres), extend_to=ground.boundary, only_edges=True
    )
    hard = [ground.boundary.exterior, ground.river_line, ground.marsh_line]
    lines = shapely.union_all([edges, *hard], grid_size=PRECISION)
    faces = shapely.get_parts(shapely.polygonize(shapely.get_parts(lines)))
    outline = shapely.set_precision(ground.boundary, PRECISION)
    shapely.prepare(outline)
    return faces[shapely.contains(outline, shapely.point_on_surface(faces))]


def _regions(ground, faces, graph):
    """Bank or marsh of every cell, strays joined to what they touch; the graph within regions."""
    inner = shapely.point_on_surface(faces)
    x, y = shapely.get_x(inner), shapely.get_y(inner)
    river_x, river_y = np.asarray(ground.river_line.coords).T
    region = np.where(y > np.interp(x, river_x, river_y), NORTH_BANK, SOUTH_BANK)
    region[shapely.contains_xy(ground.marsh, x, y) & (region == NORTH_BANK)] = MARSH
    for _ in range(5):
        pieces, piece = connected_components(within(graph, region), directed=False)
        size = np.bincount(piece, minlength=pieces)
        largest = np.zeros(pieces, dtype=bool)
        for number in range(3):
            members = np.unique(piece[region == number])
            largest[members[np.argmax(size[members])]] = True
        strays = np.flatnonzero(~largest[piece])
        if len(strays) == 0:
            break
        for stray in strays:
            start, stop = graph.indptr[stray], graph.indptr[stray + 1]
            others = graph.indices[start:stop]
            firm = largest[piece[others]]
            if firm.any():
                longest = np.argmax(np.where(firm, graph.data[start:stop], -1.0))
                region[stray] = region[others[longest]]
    return region, within(graph, region)


def _shares(region, weight, count, marsh_count):
    """Zones for each region: the marsh as told, the banks by their weight."""
    south, north = weight[region == SOUTH_BANK].sum(), weight[region == NORTH_BANK].sum()
    for_south = round((count - marsh_count) * south / (south + north))
    return for_south, count - marsh_count - for_south, marsh_count


def _distinct_nearest(centres, x, y, members):
    """The member nearest to each centre, no member twice."""
    near = min(len(members), 40)
    options = cKDTree(np.column_stack([x, y])).query(centres, k=near)[1].reshape(len(centres), -1)
    taken, heads = set(), []
    for row in options:
        free = next(choice for choice in row if choice not in taken)
        taken.add(free)
        heads.append(members[free])
    return np.array(heads)


def _edges(polygons):
    """Every straight piece of every ring, its ends in a fixed order, and the polygon it bounds."""
    rings, owner = shapely.get_rings(polygons, return_index=True)
    places, ring = shapely.get_coordinates(rings, return_index=True)
    joined = ring[1:] == ring[:-1]
    start, stop = places[:-1][joined], places[1:][joined]
    swapped = (start[:, 0] > stop[:, 0]) | (
        (start[:, 0] == stop[:, 0]) & (start[:, 1] > stop[:, 1])
    )
    ends = np.where(swapped[:, None], np.hstack([stop, start]), np.hstack([start, stop]))
    return ends, owner[ring[:-1][joined]]
