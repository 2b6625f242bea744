"""Streets and addresses of the invented district: quarters, each with its own street pattern.

The quarters are Voronoi cells, small where the town is dense; their borders are through roads and
inside each lies a grid of residential streets of its own direction. A smooth displacement then
bends all of it.
"""

import math
from dataclasses import dataclass

import numpy as np
import shapely
from scipy.spatial import cKDTree

from .practice_ground import KILOMETRE, smooth_noise

MAIN_ROAD, THROUGH_ROAD, STREET, LANE = range(4)
STREET_KINDS = ("main road", "through road", "street", "lane")
URBAN_DENSITY = 0.085
BANK = 25.0
HOUSE, FLATS, CARE_HOME = range(3)
ADDRESS_KINDS = ("house", "flats", "care home")


@dataclass(frozen=True)
class Streets:
    """Streets and lanes.

    Attributes
    ----------
    lines : (s,) array of LineStrings
    kind : (s,) int array
        Index into STREET_KINDS.
    """

    lines: np.ndarray
    kind: np.ndarray


@dataclass(frozen=True)
class Addresses:
    """Doors along the streets.

    Attributes
    ----------
    x, y : (a,) arrays
        The door.
    street_x, street_y : (a,) arrays
        The point of the street in front of it.
    kind : (a,) int array
        Index into ADDRESS_KINDS.
    dwellings : (a,) int array
    """

    x: np.ndarray
    y: np.ndarray
    street_x: np.ndarray
    street_y: np.ndarray
    kind: np.ndarray
    dwellings: np.ndarray


def uniform_places(rng, polygon, count):
    """Draw places uniformly inside a polygon, (count,) arrays x and y."""
    left, bottom, right, top = polygon.bounds
    shapely.prepare(polygon)
    x, y = np.empty(0), np.empty(0)
    while len(x) < count:
        more_x = rng.uniform(left, right, 2 * count)
        more_y = rng.uniform(bottom, top, 2 * count)
        inside = shapely.contains_xy(polygon, more_x, more_y)
        x, y = np.append(x, more_x[inside]), np.append(y, more_y[inside])
    return x[:count], y[:count]


def even_out(centres, x, y, weights, rounds):
    """Move centres to the weighted middle of the places nearest to them (Lloyd's iteration, 1982).

    Parameters
    ----------
    centres : (k, 2) array
    x, y, weights : (n,) arrays
    rounds : int

    Returns
    -------
    (k, 2) array
        A centre that no place is nearest to stays where it was.
    """
    places = np.column_stack([x, y])
    for _ in range(rounds):
        nearest = cKDTree(centres).query(places)[1]
        total = np.bincount(nearest, weights, len(centres))
        held = total > 0
        moved = centres.copy()
        for axis in range(2):
            sums = np.bincount(nearest, weights * places[:, axis], len(centres))
            moved[held, axis] = sums[held] / total[held]
        centres = moved
    return centres


def make_streets(rng, ground):
    """Lay out the streets.

    Parameters
    ----------
    rng : numpy.random.Generator
    ground : practice_ground.Ground

    Returns
    -------
    Streets
    """
    centres = _quarter_centres(rng, ground)
    cells = _voronoi_cells(centres, ground.boundary)
    urban = ground.density(*centres.T) > URBAN_DENSITY
    local = _quarter_streets(rng, ground, centres[urban], cells[urban])
    through, lanes = _quarter_edges(rng, centres, cells, urban)
    lanes = np.append(lanes, _dykes(ground))
    lines = np.concatenate([through, local, lanes])
    kind = np.repeat([THROUGH_ROAD, STREET, LANE], [len(through), len(local), len(lanes)])
    lines = _bent(rng, ground.scale, lines)
    water = shapely.buffer(ground.river, BANK)
    barred = shapely.union_all([water, shapely.union_all(shapely.buffer(ground.parks, 5.0))])
    lines, kind = _parts(shapely.difference(lines, barred), kind)
    lines, kind = _parts(shapely.intersection(lines, shapely.buffer(ground.boundary, -40.0)), kind)
    wet = (kind == STREET) & shapely.intersects(lines, ground.marsh)
    lines, kind = lines[~wet], kind[~wet]
    main = shapely.get_parts(np.array(ground.main_roads, dtype=object))
    lines = np.concatenate([main, lines])
    kind = np.concatenate([np.full(len(main), MAIN_ROAD), kind])
    long_enough = shapely.length(lines) > 30.0
    return Streets(lines[long_enough], kind[long_enough])


def make_addresses(rng, ground, streets, progress):
    """Place doors along both sides of the streets.

    Parameters
    ----------
    rng : numpy.random.Generator
    ground : practice_ground.Ground
    streets : Streets
    progress : callable

    Returns
    -------
    Addresses
        Coordinates rounded to a centimetre, as a land registry gives them.
    """
    middle = shapely.line_interpolate_point(streets.lines, 0.5, normalized=True)
    density = ground.density(shapely.get_x(middle), shapely.get_y(middle))
    spacing = np.clip(30.0 - 32.0 * density, 13.0, 30.0)
    spacing = np.where(density < URBAN_DENSITY, 90.0, spacing)
    spacing = np.where(shapely.intersects(middle, ground.marsh), 30.0, spacing)
    spacing = np.where(streets.kind == MAIN_ROAD, spacing * 1.6, spacing)
    length = shapely.length(streets.lines)
    count = np.maximum((length / spacing).astype(int), 1)
    street = np.repeat(np.arange(len(count)), count)
    step = np.arange(len(street)) - np.repeat(np.cumsum(count) - count, count)
    progress(0.2)
    street = np.repeat(street, 2)
    along = (np.repeat(step, 2) + rng.uniform(0.15, 0.85, len(street))) * (length / count)[street]
    side = np.where(np.arange(len(street)) % 2 == 0, 1.0, -1.0)
    front_x, front_y, across_x, across_y = _frontage(streets.lines[street], along)
    progress(0.5)
    setback = side * rng.uniform(9.0, 17.0, len(street))
    x = np.round(front_x + setback * across_x, 2)
    y = np.round(front_y + setback * across_y, 2)
    kept = _habitable(ground, x, y)
    progress(0.9)
    x, y, front_x, front_y = x[kept], y[kept], front_x[kept], front_y[kept]
    kind, dwellings = _buildings(rng, ground.density(x, y))
    return Addresses(x, y, front_x, front_y, kind, dwellings)


def _quarter_centres(rng, ground):
    x, y = uniform_places(rng, ground.boundary, 12000)
    density = ground.density(x, y)
    radius = np.interp(density, (0.03, URBAN_DENSITY, 0.35, 1.0), (900.0, 330.0, 230.0, 150.0))
    weights = 1.0 / (math.pi * radius**2)
    expected = ground.boundary.area * weights.mean()
    chosen = rng.choice(len(x), max(int(expected), 40), replace=False, p=weights / weights.sum())
    centres = np.column_stack([x[chosen], y[chosen]])
    return even_out(centres, x, y, weights, 4)


def _voronoi_cells(centres, boundary):
    """Voronoi cells in the order of their centres."""
    cells = shapely.get_parts(
        shapely.voronoi_polygons(shapely.MultiPoint(centres), extend_to=boundary)
    )
    inner = np.asarray(shapely.STRtree(cells).query(shapely.points(centres), predicate="within"))
    ordered = np.empty(len(centres), dtype=object)
    ordered[inner[0]] = cells[inner[1]]
    return ordered


def _quarter_streets(rng, ground, centres, cells):
    """Residential streets of every quarter, cut to its cell."""
    lines, owner = [], []
    density = ground.density(*centres.T)
    works = shapely.contains_xy(ground.industry, *centres.T)
    for quarter, (x, y) in enumerate(centres):
        reach = math.sqrt(shapely.area(cells[quarter])) * 0.9
        depth = np.interp(density[quarter], (URBAN_DENSITY, 0.6), (92.0, 62.0))
        block = np.interp(density[quarter], (URBAN_DENSITY, 0.6), (210.0, 120.0))
        if works[quarter]:
            depth, block = 260.0, 420.0
        direction = math.atan2(y, x) + rng.normal(0, 0.22) + rng.integers(2) * math.pi / 2
        segments = _staggered_grid(rng, reach, depth, block)
        turn = np.array(
            [
                [math.cos(direction), math.sin(direction)],
                [-math.sin(direction), math.cos(direction)],
            ]
        )
        lines.append(segments @ turn + (x, y))
        owner.append(np.full(len(segments), quarter))
    lines = shapely.linestrings(np.concatenate(lines))
    owner = np.concatenate(owner)
    return _parts(shapely.intersection(lines, cells[owner]), owner)[0]


def _staggered_grid(rng, reach, depth, block):
    """Parallel streets a block's depth apart and cross streets that rarely line up, (m, 2, 2)."""
    rows = np.arange(-reach, reach, depth) + rng.uniform(0, depth)
    segments = [[(-reach, row), (reach, row)] for row in rows if rng.uniform() < 0.93]
    for row in np.append(rows[0] - depth, rows):
        columns = np.arange(-reach, reach, block) + rng.uniform(0, block)
        for column in columns[rng.uniform(size=len(columns)) < 0.85]:
            segments.append([(column, row), (column, row + depth)])
    return np.array(segments)


def _quarter_edges(rng, centres, cells, urban):
    """Borders of the quarters: through roads in town, some of the others as lanes."""
    rings = np.concatenate([np.asarray(cell.exterior.coords)[:-1] for cell in cells])
    sizes = shapely.get_num_coordinates(cells) - 1
    owner = np.repeat(np.arange(len(cells)), sizes)
    following = np.arange(len(rings)) + 1
    following[np.cumsum(sizes) - 1] -= sizes
    ends = np.round(np.stack([rings, rings[following]], axis=1), 3)
    swapped = (ends[:, 0, 0] > ends[:, 1, 0]) | (
        (ends[:, 0, 0] == ends[:, 1, 0]) & (ends[:, 0, 1] > ends[:, 1, 1])
    )
    ends[swapped] = ends[swapped][:, ::-1]
    unique, inverse = np.unique(ends.reshape(-1, 4), axis=0, return_inverse=True)
    built = np.bincount(inverse.ravel(), urban[owner], len(unique)) > 0
    lines = shapely.linestrings(unique.reshape(-1, 2, 2))
    lanes = lines[~built]
    return lines[built], lanes[rng.uniform(size=len(lanes)) < 0.62]


def _dykes(ground):
    """Lanes through the marsh, on dykes that follow the river."""
    shifts = np.array([0.3, 1.0, 2.1]) * KILOMETRE * ground.scale
    course = np.asarray(ground.river_line.coords)
    lines = [shapely.LineString(course + np.array([0.0, shift])) for shift in shifts]
    return shapely.get_parts(shapely.intersection(lines, shapely.buffer(ground.marsh, -BANK)))


def _bent(rng, scale, lines):
    """Displace lines by a smooth field so that nothing stays quite straight."""
    shift_x = smooth_noise(rng, 1.9 * KILOMETRE * max(scale, 0.4))
    shift_y = smooth_noise(rng, 1.9 * KILOMETRE * max(scale, 0.4))
    strength = 62.0 * max(scale, 0.4)

    def displace(places):
        x, y = places.T
        return places + strength * np.column_stack([shift_x(x, y), shift_y(x, y)])

    return shapely.transform(shapely.segmentize(lines, 60.0), displace)


def _parts(geometries, kind):
    parts, source = shapely.get_parts(geometries, return_index=True)
    lines = (shapely.get_type_id(parts) == 1) & ~shapely.is_empty(parts)
    return parts[lines], kind[source[lines]]


def _frontage(lines, along):
    """Point of each line at a distance from its start, and the unit vector to its left."""
    here = shapely.line_interpolate_point(lines, along)
    before = shapely.line_interpolate_point(lines, np.maximum(along - 1.0, 0.0))
    after = shapely.line_interpolate_point(lines, np.minimum(along + 1.0, shapely.length(lines)))
    dx = shapely.get_x(after) - shapely.get_x(before)
    dy = shapely.get_y(after) - shapely.get_y(before)
    length = np.hypot(dx, dy)
    return shapely.get_x(here), shapely.get_y(here), -dy / length, dx / length


def _habitable(ground, x, y):
    """Whether a door may stand at each place: inside, dry, and no park."""
    inland = shapely.buffer(ground.boundary, -20.0)
    shapely.prepare(inland)
    kept = shapely.contains_xy(inland, x, y)
    barred = shapely.union_all([shapely.buffer(ground.river, 18.0), *ground.parks])
    shapely.prepare(barred)
    kept &= ~shapely.contains_xy(barred, x, y)
    return kept


def _buildings(rng, density):
    """Kind and number of dwellings of each address; blocks of flats mostly in the old town."""
    draw = rng.uniform(size=len(density))
    flats_share = np.interp(density, (URBAN_DENSITY, 0.3, 0.9), (0.004, 0.05, 0.3))
    home_share = np.where(density > URBAN_DENSITY, 0.0006, 0.0)
    kind = np.where(draw < flats_share, FLATS, HOUSE)
    kind = np.where(draw > 1.0 - home_share, CARE_HOME, kind)
    dwellings = np.ones(len(density), dtype=np.int64)
    dwellings[kind == FLATS] = 4 + rng.poisson(7.0, np.count_nonzero(kind == FLATS))
    dwellings[kind == CARE_HOME] = rng.integers(30, 61, np.count_nonzero(kind == CARE_HOME))
    return kind, dwellings
