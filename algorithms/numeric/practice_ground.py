"""The ground of the invented district: boundary, river, marsh, works and where people would build.

Coordinates here are local metres, the market square of the old town being (0, 0).
"""

import math
from dataclasses import dataclass

import numpy as np
import shapely

KILOMETRE = 1000.0
BOUNDARY_HALF_WIDTH = 11.2 * KILOMETRE
BOUNDARY_HALF_HEIGHT = 8.6 * KILOMETRE


@dataclass(frozen=True)
class SmoothNoise:
    """A smooth random field: a sum of plane waves with a standard deviation of about 1.

    Attributes
    ----------
    wave_x, wave_y : (m,) arrays
        Angular wave numbers, radians per metre.
    phase : (m,) array
    """

    wave_x: np.ndarray
    wave_y: np.ndarray
    phase: np.ndarray

    def __call__(self, x, y):
        """Value of the field at each place, same shape as x."""
        x, y = np.broadcast_arrays(np.asarray(x, float), np.asarray(y, float))
        total = np.zeros(x.shape)
        for wave_x, wave_y, phase in zip(self.wave_x, self.wave_y, self.phase):
            total += np.cos(wave_x * x + wave_y * y + phase)
        return total * math.sqrt(2.0 / len(self.phase))


def smooth_noise(rng, wavelength, waves=14):
    """Draw a smooth random field with waves of about the given length.

    Parameters
    ----------
    rng : numpy.random.Generator
    wavelength : float
        Metres; the waves spread over 0.6 to 1.6 times this length.
    waves : int

    Returns
    -------
    SmoothNoise
    """
    direction = rng.uniform(0.0, 2.0 * math.pi, waves)
    number = 2.0 * math.pi / (wavelength * rng.uniform(0.6, 1.6, waves))
    return SmoothNoise(
        number * np.cos(direction), number * np.sin(direction), rng.uniform(0, 2 * math.pi, waves)
    )


@dataclass(frozen=True)
class Lobe:
    """A Gaussian swelling of the town: place, spreads, direction (radians) and height."""

    x: float
    y: float
    spread_along: float
    spread_across: float
    direction: float
    height: float

    def __call__(self, x, y):
        along = (x - self.x) * math.cos(self.direction) + (y - self.y) * math.sin(self.direction)
        across = (y - self.y) * math.cos(self.direction) - (x - self.x) * math.sin(self.direction)
        return self.height * np.exp(
            -0.5 * (along / self.spread_along) ** 2 - 0.5 * (across / self.spread_across) ** 2
        )


@dataclass(frozen=True)
class Ground:
    """Everything that was there before the people.

    Attributes
    ----------
    scale : float
        Lengths of the whole against the full-size district; streets and houses keep their size.
    boundary : shapely Polygon
    river_line : shapely LineString
        Runs from west of the boundary to east of it.
    river, marsh, industry : shapely Polygons inside the boundary
        The marsh reaches to the middle of the river, as the units that tile it do.
    parks : (p,) array of Polygons
    marsh_line : shapely LineString
        Where the marsh meets firm ground.
    main_roads : tuple of LineStrings
    lobes : tuple of Lobe
        Relative density of dwellings as a sum of swellings.
    hamlets : (h, 2) array
    unevenness : SmoothNoise
    """

    scale: float
    boundary: shapely.Polygon
    river_line: shapely.LineString
    river: shapely.Polygon
    marsh: shapely.Polygon
    industry: shapely.Polygon
    parks: np.ndarray
    marsh_line: shapely.LineString
    main_roads: tuple
    lobes: tuple
    hamlets: np.ndarray
    unevenness: SmoothNoise

    def density(self, x, y):
        """Relative density of dwellings, 1 in the middle of the old town, never below 0."""
        x, y = np.asarray(x, float), np.asarray(y, float)
        total = sum(lobe(x, y) for lobe in self.lobes)
        density = total * np.exp(0.35 * self.unevenness(x, y))
        for land, share in ((self.industry, 0.02), (self.marsh, 0.01)):
            density = np.where(shapely.contains_xy(land, x, y), density * share, density)
        return density


def make_ground(rng, scale):
    """Draw the ground of the district.

    Parameters
    ----------
    rng : numpy.random.Generator
    scale : float
        1 for the full district; the ground shrinks with it, the houses do not.

    Returns
    -------
    Ground
    """
    boundary = _boundary(rng, scale)
    river_x, river_y = _river_course(rng, scale)
    river_line = shapely.LineString(np.column_stack([river_x, river_y]))
    river = shapely.intersection(_river_water(river_x, river_y, scale), boundary)
    marsh_line, marsh = _marsh(rng, scale, boundary, river_line)
    industry = _industry(rng, scale, river_x, river_y)
    directions = _road_directions(rng)
    roads = [_main_road(rng, scale, direction) for direction in directions]
    ring = _ring_road(rng, scale)
    hamlets = np.array([_along(road, 7.4 * KILOMETRE * scale) for road in roads[1::2]])
    lobes = _town_lobes(rng, scale, roads, hamlets)
    industry = _largest(shapely.intersection(shapely.difference(industry, river), boundary))
    # Many thousands of places are asked whether they lie in these.
    for land in (boundary, marsh, industry, river):
        shapely.prepare(land)
    open_ground = shapely.difference(boundary, shapely.union_all([river, marsh, industry]))
    return Ground(
        scale=scale,
        boundary=boundary,
        river_line=river_line,
        river=river,
        marsh=marsh,
        industry=industry,
        parks=_parks(rng, scale, open_ground),
        marsh_line=marsh_line,
        main_roads=tuple(shapely.intersection(road, boundary) for road in [*roads, ring]),
        lobes=lobes,
        hamlets=hamlets,
        unevenness=smooth_noise(rng, 1.6 * KILOMETRE * max(scale, 0.4)),
    )


def _largest(geometry):
    parts = shapely.get_parts(geometry)
    return parts[np.argmax(shapely.area(parts))]


def _along(road, distance):
    point = shapely.line_interpolate_point(road, distance)
    return point.x, point.y


def _boundary(rng, scale):
    angle = np.linspace(0.0, 2.0 * math.pi, 320, endpoint=False)
    radius = np.ones_like(angle)
    for order in range(2, 26):
        amplitude = 0.085 / (order - 1.0) ** 1.05
        radius += amplitude * rng.normal() * np.cos(order * angle + rng.uniform(0, 2 * math.pi))
    radius = np.clip(radius, 0.8, 1.22)
    x = scale * BOUNDARY_HALF_WIDTH * radius * np.cos(angle)
    y = scale * BOUNDARY_HALF_HEIGHT * radius * np.sin(angle)
    return shapely.Polygon(np.round(np.column_stack([x, y]), 2))


def _river_course(rng, scale):
    """The middle of the river, from west to east, passing just north of the market square."""
    x = np.linspace(-1.5, 1.5, 241) * BOUNDARY_HALF_WIDTH * scale
    along = x / (scale * KILOMETRE)
    wander = np.zeros_like(along)
    for wavelength, amplitude in ((17.0, 1.3), (7.5, 0.75), (4.1, 0.34), (2.3, 0.1)):
        wander += amplitude * np.sin(2 * math.pi * along / wavelength + rng.uniform(0, 2 * math.pi))
    wander -= np.interp(0.0, along, wander)
    # Downstream it runs straighter and to the south, which leaves room for the marsh north of it.
    downstream = np.clip((along - 3.5) / 4.0, 0.0, 1.0)
    course = 0.55 + wander * (1.0 - 0.65 * downstream) - 0.9 * downstream
    return x, course * KILOMETRE * scale


def _river_water(x, y, scale):
    """The water between the banks, wider downstream, which is in the east."""
    half = np.interp(x, (x[0], x[-1]), (45.0, 130.0)) * max(scale, 0.35)
    dx, dy = np.gradient(x), np.gradient(y)
    length = np.hypot(dx, dy)
    left = np.column_stack([x - half * dy / length, y + half * dx / length])
    right = np.column_stack([x + half * dy / length, y - half * dx / length])
    return _largest(shapely.make_valid(shapely.Polygon(np.vstack([left, right[::-1]]))))


def _marsh(rng, scale, boundary, river_line):
    """The marsh on the northern bank downstream, and the line along which it meets firm ground."""
    start_x = rng.uniform(5.0, 5.7) * KILOMETRE * scale
    river_x, river_y = np.asarray(river_line.coords).T
    start_y = np.interp(start_x, river_x, river_y)
    reach = np.linspace(-0.02, 1.6, 61)
    angle = math.radians(rng.uniform(50.0, 62.0))
    sway = 0.5 * np.sin(reach * rng.uniform(7.0, 9.0)) + 0.14 * np.sin(reach * 25.0)
    length = BOUNDARY_HALF_WIDTH * scale
    sway *= KILOMETRE * scale * np.clip(reach * 5.0, 0.0, 1.0)
    x = start_x + length * reach * math.cos(angle) - sway * math.sin(angle)
    y = start_y + length * reach * math.sin(angle) + sway * math.cos(angle)
    line = shapely.LineString(np.column_stack([x, y]))
    lines = shapely.union_all([boundary.exterior, river_line, line])
    faces = shapely.get_parts(shapely.polygonize(shapely.get_parts(lines)))
    inner = shapely.point_on_surface(faces)
    inner_x, inner_y = shapely.get_x(inner), shapely.get_y(inner)
    downstream = (inner_x - start_x) * math.sin(angle) > (inner_y - start_y) * math.cos(angle)
    north = inner_y > np.interp(inner_x, river_x, river_y)
    marsh = shapely.contains(boundary, inner) & north & downstream
    return line, faces[np.argmax(np.where(marsh, shapely.area(faces), -1.0))]


def _industry(rng, scale, river_x, river_y):
    """A works area on the southern bank downstream."""
    along = np.linspace(3.4, 6.6, 26) * KILOMETRE * scale
    bank = np.interp(along, river_x, river_y)
    depth = 1.5 + 0.25 * np.sin(np.linspace(0, 9, 26) + rng.uniform(0, 6))
    depth *= np.sqrt(np.sin(np.linspace(0.12, math.pi - 0.12, 26)))
    far = np.column_stack([along, bank - depth * KILOMETRE * scale])
    near = np.column_stack([along, bank])
    return _largest(shapely.make_valid(shapely.Polygon(np.vstack([near, far[::-1]]))))


def _road_directions(rng):
    """Directions of the roads out of town, north-east spared because of the marsh."""
    return np.radians(np.array([8.0, 75.0, 128.0, 176.0, 214.0, 262.0, 318.0])) + rng.uniform(
        -0.12, 0.12, 7
    )


def _main_road(rng, scale, direction):
    distance = np.linspace(0.0, 1.35, 60) * BOUNDARY_HALF_WIDTH * scale
    bend = rng.normal(0, 0.10) * np.sin(distance / distance[-1] * math.pi * 2.1)
    bend += rng.normal(0, 0.05) * np.sin(distance / distance[-1] * math.pi * 5.3)
    angle = direction + bend
    return shapely.LineString(
        np.column_stack([distance * np.cos(angle), distance * np.sin(angle) * 0.92])
    )


def _ring_road(rng, scale):
    angle = np.linspace(0.0, 2.0 * math.pi, 121)
    radius = np.full_like(angle, 2.7)
    for order, amplitude in ((2, 0.24), (3, 0.2), (5, 0.12), (8, 0.05)):
        radius += amplitude * np.sin(order * angle + rng.uniform(0, 2 * math.pi))
    radius *= KILOMETRE * scale
    return shapely.LineString(
        np.column_stack([radius * np.cos(angle), radius * np.sin(angle) * 0.9])
    )


def _town_lobes(rng, scale, roads, hamlets):
    unit = KILOMETRE * scale
    lobes = [
        Lobe(0.0, -0.2 * unit, 0.85 * unit, 0.7 * unit, rng.uniform(0, 3), 0.62),
        Lobe(0.0, 0.0, 2.5 * unit, 1.9 * unit, 0.1, 0.36),
    ]
    for road in roads:
        points = np.asarray(road.coords)
        distance = np.hypot(points[:, 0], points[:, 1])
        for reach, height in ((3.1, 0.24), (4.9, 0.15)):
            nearest = int(np.argmin(np.abs(distance - reach * unit * rng.uniform(0.9, 1.1))))
            x, y = points[nearest]
            spread = rng.uniform(0.8, 1.15) * unit
            lobes.append(
                Lobe(x, y, spread, 0.6 * spread, math.atan2(y, x), height * rng.uniform(0.75, 1.25))
            )
    for x, y in hamlets:
        spread = rng.uniform(0.24, 0.34) * unit
        lobes.append(Lobe(x, y, spread, 0.8 * spread, rng.uniform(0, 3), 0.16))
    return tuple(lobes)


def _parks(rng, scale, open_ground):
    """Parks of uneven outline around the old town."""
    parks = []
    for turn in np.linspace(0, 2 * math.pi, 6, endpoint=False) + rng.uniform(0, 1):
        reach = rng.uniform(1.3, 3.6) * KILOMETRE * scale
        angle = np.linspace(0, 2 * math.pi, 40, endpoint=False)
        radius = rng.uniform(0.2, 0.38) * KILOMETRE * max(scale, 0.4)
        outline = radius * (
            1 + 0.25 * np.sin(2 * angle + rng.uniform(0, 6)) + 0.12 * np.sin(5 * angle)
        )
        park = shapely.Polygon(
            np.column_stack(
                [
                    reach * math.cos(turn) + outline * np.cos(angle),
                    reach * math.sin(turn) + outline * np.sin(angle) * 0.7,
                ]
            )
        )
        park = shapely.intersection(park, open_ground)
        if not park.is_empty:
            parks.append(_largest(park))
    return np.array(parks, dtype=object)
