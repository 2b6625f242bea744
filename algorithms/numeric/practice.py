"""The invented district of Ostermoor, made from a seed: practice data whose true risk is known.

Coordinates are metres in ETRS89-LAEA Europe (EPSG:3035), an equal-area reference system that every
program knows by its code; the district lies where the map shows open sea, so that it cannot be
taken for a real place.
"""

import math
from dataclasses import dataclass, replace

import numpy as np
import shapely

from .errors import InputError
from .practice_ground import KILOMETRE, make_ground
from .practice_people import (
    Falls,
    Residents,
    TrueRisk,
    draw_falls,
    home_unit,
    place_risk,
    settle,
    street_places,
)
from .practice_streets import LANE, MAIN_ROAD, Streets, make_addresses, make_streets
from .practice_units import MARSH, dissolve, make_units, make_wards
from .progress import part, silent

CRS = "EPSG:3035"
ORIGIN = (3_846_000.0, 3_562_000.0)
FULL_RESIDENTS = 90_000
FULL_FALLS = 6_000
FULL_UNITS = 900
FULL_MARSH_RESIDENTS = 260
WARD_COUNT = 14
SMALLEST, LARGEST = 0.1, 1.0
# Invented; given from the market square outwards, but for the works and the marsh at the end.
WARD_NAMES = (
    "Bell Quay",
    "Saltgate",
    "Weavers' Rows",
    "Lantern Hill",
    "Ostergate",
    "Ferrymead",
    "Tannerside",
    "Upper Sluice",
    "Gorsebrook",
    "Gullholt",
    "Reedfold",
    "Alderwick",
    "Kilnfield",
    "Heronmarsh",
)


@dataclass(frozen=True)
class Points:
    """Places with a month.

    Attributes
    ----------
    x, y : (m,) arrays
    month : (m,) int array or None
        1 to 12; None where time has no part.
    """

    x: np.ndarray
    y: np.ndarray
    month: np.ndarray


@dataclass(frozen=True)
class Units:
    """Base units, which tile the district exactly.

    Attributes
    ----------
    polygons : (k,) array of Polygons
    ward : (k,) int array
        Index into the wards.
    residents, falls : (k,) int arrays
    true_risk : (k,) array
        Mean over the unit's residents of the true risk, falls per resident and year; where nobody
        lives, the risk at a place inside.
    """

    polygons: np.ndarray
    ward: np.ndarray
    residents: np.ndarray
    falls: np.ndarray
    true_risk: np.ndarray


@dataclass(frozen=True)
class Wards:
    """The official care wards, made of whole base units.

    Attributes
    ----------
    polygons : (14,) array of Polygons
    names : tuple of str
    residents, falls : (14,) int arrays
    small : int
        The ward that looks highest only because of small numbers.
    straddled : (2,) int array
        The two wards that share the second raised-risk area.
    contained : int
        The ward that holds the first.
    """

    polygons: np.ndarray
    names: tuple
    residents: np.ndarray
    falls: np.ndarray
    small: int
    straddled: np.ndarray
    contained: int


@dataclass(frozen=True)
class District:
    """Everything of the practice district, in metres of EPSG:3035.

    Attributes
    ----------
    seed : int
    size : float
    boundary, river, marsh, industry : shapely geometries
    parks : (p,) array of Polygons
    streets : practice_streets.Streets
    residents : practice_people.Residents
    falls : practice_people.Falls
    resident_unit, fall_unit : int arrays
        Base unit of each resident and fall.
    units : Units
    wards : Wards
    resting_places, unlit_paths, icy_paths : Points
    risk : practice_people.TrueRisk
    """

    seed: int
    size: float
    boundary: shapely.Polygon
    river: shapely.Polygon
    marsh: shapely.Polygon
    industry: shapely.Polygon
    parks: np.ndarray
    streets: Streets
    residents: Residents
    falls: Falls
    resident_unit: np.ndarray
    fall_unit: np.ndarray
    units: Units
    wards: Wards
    resting_places: Points
    unlit_paths: Points
    icy_paths: Points
    risk: TrueRisk


def make_district(seed, size=1.0, progress=silent):
    """Make the practice district.

    Parameters
    ----------
    seed : int
        Not below 0. The same seed and size give the same district, to the bit, on the same versions
        of the libraries.
    size : float
        Share of the full district, 0.1 to 1: people, falls, units and ground shrink alike, so
        densities stay. At 1 there are about 90,000 residents and 6,000 falls, and exactly 900 base
        units; always 14 wards.
    progress : callable

    Returns
    -------
    District

    Raises
    ------
    InputError
        For a seed or size out of range.
    """
    _check(seed, size)
    rng = np.random.default_rng(seed)
    ground = make_ground(rng, math.sqrt(size))
    streets = make_streets(rng, ground)
    progress(0.15)
    addresses = make_addresses(rng, ground, streets, part(progress, 0.15, 0.4))
    marsh_residents = max(FULL_MARSH_RESIDENTS * size, 60.0)
    residents = settle(rng, ground, addresses, FULL_RESIDENTS * size, marsh_residents)
    unit_count = round(FULL_UNITS * size)
    zones = make_units(
        rng,
        ground,
        residents.x,
        residents.y,
        unit_count,
        max(4, round(0.013 * unit_count)),
        part(progress, 0.4, 0.65),
    )
    unit_of = home_unit(zones, residents)
    people = np.bincount(unit_of, minlength=unit_count)
    ward = _named_order(zones, make_wards(rng, zones, people, WARD_COUNT), ground.industry)
    ward_polygons = dissolve(zones.polygons, ward)
    progress(0.7)
    risk, straddled, contained = place_risk(
        rng, ground, zones, ward, ward_polygons, residents, unit_of, FULL_FALLS * size
    )
    progress(0.9)
    falls = draw_falls(rng, risk, zones, residents, unit_of, ward[unit_of], WARD_COUNT - 1)
    fall_unit = unit_of[falls.resident]
    fallen = np.bincount(fall_unit, minlength=unit_count)
    unit_risk = _unit_risk(zones, residents, unit_of, people, risk)
    points = _further_points(rng, ground, streets, risk, size)
    progress(0.97)
    district = District(
        seed=int(seed),
        size=float(size),
        boundary=shapely.coverage_union_all(ward_polygons),
        river=ground.river,
        marsh=shapely.difference(ground.marsh, ground.river),
        industry=ground.industry,
        parks=ground.parks,
        streets=streets,
        residents=residents,
        falls=falls,
        resident_unit=unit_of,
        fall_unit=fall_unit,
        units=Units(zones.polygons, ward, people, fallen, unit_risk),
        wards=Wards(
            ward_polygons,
            WARD_NAMES,
            np.bincount(ward, people, WARD_COUNT).astype(np.int64),
            np.bincount(ward, fallen, WARD_COUNT).astype(np.int64),
            WARD_COUNT - 1,
            straddled,
            contained,
        ),
        resting_places=points[0],
        unlit_paths=points[1],
        icy_paths=points[2],
        risk=risk,
    )
    progress(1.0)
    return _moved(district, *ORIGIN)


def _check(seed, size):
    if not (float(seed).is_integer() and seed >= 0):
        raise InputError("SEED must be a whole number not below 0; found {}.", seed)
    if not SMALLEST <= size <= LARGEST:
        raise InputError("SIZE must lie between {} and {}; found {}.", SMALLEST, LARGEST, size)


def _named_order(zones, ward, industry):
    """Number the wards from the market square outwards, the works and the marsh last."""
    polygons = dissolve(zones.polygons, ward)
    middle = shapely.centroid(polygons)
    distance = np.hypot(shapely.get_x(middle), shapely.get_y(middle))
    distance[np.argmax(shapely.area(shapely.intersection(polygons, industry)))] = 1e9
    distance[ward[zones.region == MARSH]] = np.inf
    rank = np.empty(len(distance), dtype=np.int64)
    rank[np.argsort(distance)] = np.arange(len(distance))
    return rank[ward]


def _unit_risk(zones, residents, unit_of, people, risk):
    sums = np.bincount(unit_of, risk.at(residents.x, residents.y), len(people))
    inner = shapely.point_on_surface(zones.polygons)
    empty = risk.at(shapely.get_x(inner), shapely.get_y(inner))
    return np.where(people > 0, sums / np.maximum(people, 1), empty)


def _further_points(rng, ground, streets, risk, size):
    """Resting places, reports of unlit paths and reports of icy paths."""
    unit = KILOMETRE * ground.scale
    green = shapely.union_all([ground.river, *ground.parks])

    def raised(x, y):
        return risk.at(x, y) / risk.base - 1.0

    def near_green(x, y, reach):
        return np.exp(-((shapely.distance(shapely.points(x, y), green) / reach) ** 2))

    def resting(x, y, kind):
        pull = np.sqrt(ground.density(x, y)) * (0.25 + 1.6 * near_green(x, y, 180.0))
        return pull * np.where(kind == LANE, 0.1, 1.0) * np.exp(-0.5 * raised(x, y))

    def unlit(x, y, kind):
        edge = np.exp(-((np.hypot(x, y) - 3.6 * unit) ** 2) / (2 * (1.1 * unit) ** 2))
        pull = ground.density(x, y) ** 0.6 * (0.2 + edge) * (1.0 + 3.0 * raised(x, y))
        return pull * np.where(kind == MAIN_ROAD, 0.15, 1.0)

    def icy(x, y, kind):
        pull = ground.density(x, y) ** 0.7 * (0.5 + 1.2 * near_green(x, y, 450.0))
        return pull * np.where(y > 0, 1.25, 0.8) * (1.0 + 2.2 * raised(x, y))

    nights = np.array([9, 8, 6, 4, 2, 1, 1, 2, 5, 7, 9, 10]) / 64.0
    frost = np.array([30, 26, 10, 2, 0, 0, 0, 0, 0, 2, 9, 24]) / 103.0
    layers = []
    for weight, count, months in (
        (resting, 900, None),
        (unlit, 2100, nights),
        (icy, 1500, frost),
    ):
        count = round(count * size)
        x, y = street_places(rng, streets, weight, count)
        inside = shapely.contains_xy(ground.boundary, x, y)
        month = None if months is None else rng.choice(12, count, p=months)[inside] + 1
        layers.append(Points(x[inside], y[inside], month))
    return layers


def _moved(district, east, north):
    """The district carried from local metres to its place in the reference system."""

    origin = np.array([east, north])

    def shifted(geometry):
        return shapely.transform(geometry, lambda places: places + origin)

    def shifted_points(points, *pairs):
        pairs = pairs or (("x", "y"),)
        changes = {}
        for across, up in pairs:
            changes[across] = np.round(getattr(points, across) + east, 2)
            changes[up] = np.round(getattr(points, up) + north, 2)
        return replace(points, **changes)

    return replace(
        district,
        boundary=shifted(district.boundary),
        river=shifted(district.river),
        marsh=shifted(district.marsh),
        industry=shifted(district.industry),
        parks=shifted(district.parks),
        streets=replace(district.streets, lines=shifted(district.streets.lines)),
        residents=shifted_points(district.residents, ("x", "y"), ("street_x", "street_y")),
        falls=shifted_points(district.falls),
        units=replace(district.units, polygons=shifted(district.units.polygons)),
        wards=replace(district.wards, polygons=shifted(district.wards.polygons)),
        resting_places=shifted_points(district.resting_places),
        unlit_paths=shifted_points(district.unlit_paths),
        icy_paths=shifted_points(district.icy_paths),
        risk=replace(district.risk, x=district.risk.x + east, y=district.risk.y + north),
    )
