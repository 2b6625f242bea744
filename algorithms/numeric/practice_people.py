"""The people of the invented district: who lives where, their true risk, and their falls."""

import math
from dataclasses import dataclass

import numpy as np
import shapely

from .practice_ground import KILOMETRE
from .practice_streets import CARE_HOME
from .practice_units import MARSH, locate

AGE_BANDS = ("65-74", "75-84", "85+")
SEVERITIES = ("slight", "moderate", "severe")
RESIDENTS_PER_HOUSEHOLD = 1.44
# Shares and factors are made up, of a plausible order; the mean factor over the ages is 1.
AGE_SHARES = np.array([0.55, 0.33, 0.12])
AGE_FACTORS = np.array([0.6, 1.15, 2.4]) / (AGE_SHARES @ np.array([0.6, 1.15, 2.4]))
HOUSEHOLD_SHAPE = 2.0
OUTDOOR_SHARE = 0.38
CONTAINED_SHARE, CONTAINED_FACTOR = 0.022, 1.9
STRADDLING_SHARE, STRADDLING_FACTOR = 0.014, 2.1
LARGEST_DRAWS = 20000


@dataclass(frozen=True)
class Residents:
    """Everyone aged 65 and over, one entry a person.

    Attributes
    ----------
    x, y : (n,) arrays
        The door of the address; people of one house or block share it.
    street_x, street_y : (n,) arrays
        The street in front of the door.
    household : (n,) int array
        From 1 upwards.
    address_kind : (n,) int array
        Index into practice_streets.ADDRESS_KINDS.
    age_band : (n,) int array
        Index into AGE_BANDS.
    """

    x: np.ndarray
    y: np.ndarray
    street_x: np.ndarray
    street_y: np.ndarray
    household: np.ndarray
    address_kind: np.ndarray
    age_band: np.ndarray


@dataclass(frozen=True)
class Falls:
    """Call-outs to residents who fell, one entry a call-out.

    Attributes
    ----------
    x, y : (f,) arrays
        The home, or a place on a street of the same base unit for a fall outdoors.
    resident : (f,) int array
        Index into the residents.
    household : (f,) int array
    age_band : (f,) int array
    month : (f,) int array
        1 to 12.
    severity : (f,) int array
        Index into SEVERITIES.
    outdoors : (f,) bool array
    """

    x: np.ndarray
    y: np.ndarray
    resident: np.ndarray
    household: np.ndarray
    age_band: np.ndarray
    month: np.ndarray
    severity: np.ndarray
    outdoors: np.ndarray


@dataclass(frozen=True)
class TrueRisk:
    """Expected falls per resident and year by place: a base and two round areas where it is higher.

    risk(x) = base * (1 + sum_k (factor_k - 1) exp(-(d_k(x) / radius_k)^6)), with d_k the distance
    to the middle of area k.

    Attributes
    ----------
    base : float
    x, y, radius, factor : (2,) arrays
        The area inside one ward first, then the one that straddles a ward border.
    """

    base: float
    x: np.ndarray
    y: np.ndarray
    radius: np.ndarray
    factor: np.ndarray

    def at(self, x, y):
        """Risk at each place, same shape as x, falls per resident and year averaged over ages."""
        risk = np.ones(np.shape(x))
        for area_x, area_y, radius, factor in zip(self.x, self.y, self.radius, self.factor):
            distance = np.hypot(np.asarray(x) - area_x, np.asarray(y) - area_y)
            risk = risk + (factor - 1.0) * np.exp(-((distance / radius) ** 6))
        return self.base * risk

    def on(self, grid):
        """Risk at the pixel centres of a grid.Grid, (rows, columns) array."""
        return self.at(*grid.centres())

    def areas(self):
        """Outlines where the excess is above 1/e of its height, (2,) array of Polygons."""
        return shapely.buffer(shapely.points(self.x, self.y), self.radius, quad_segs=32)


def settle(rng, ground, addresses, resident_count, marsh_count):
    """Let people aged 65 and over move in.

    Every dwelling holds such a household with one chance in town and another in the marsh, set so
    that the expected numbers are as asked.

    Parameters
    ----------
    rng : numpy.random.Generator
    ground : practice_ground.Ground
    addresses : practice_streets.Addresses
    resident_count, marsh_count : float
        Expected residents in all, and those of them in the marsh.

    Returns
    -------
    Residents
    """
    marsh = shapely.contains_xy(ground.marsh, addresses.x, addresses.y)
    pull = np.where(addresses.kind == CARE_HOME, 2.2, 1.0)
    pull = pull * np.exp(0.25 * ground.unevenness(addresses.y, addresses.x))
    weight = pull * addresses.dwellings
    town_households = (resident_count - marsh_count) / RESIDENTS_PER_HOUSEHOLD
    chance = pull * town_households / weight[~marsh].sum()
    marsh_dwellings = max(addresses.dwellings[marsh].sum(), 1)
    chance[marsh] = marsh_count / RESIDENTS_PER_HOUSEHOLD / marsh_dwellings
    households = rng.binomial(addresses.dwellings, np.minimum(chance, 0.97))
    address = np.repeat(np.arange(len(households)), households)
    size = rng.choice([1, 2, 3], len(address), p=[0.58, 0.40, 0.02])
    size[addresses.kind[address] == CARE_HOME] = 1
    household = np.repeat(np.arange(len(address)), size)
    home = address[household]
    return Residents(
        x=addresses.x[home],
        y=addresses.y[home],
        street_x=addresses.street_x[home],
        street_y=addresses.street_y[home],
        household=household + 1,
        address_kind=addresses.kind[home],
        age_band=rng.choice(len(AGE_BANDS), len(home), p=AGE_SHARES),
    )


def place_risk(rng, ground, units, ward, ward_polygons, residents, unit_of, fall_count):
    """Choose where the risk is truly raised, and the base that gives the expected number of falls.

    One area lies inside a single ward. The other is centred on the border of two wards with about
    half of its people in each, so that neither ward shows it plainly.

    Returns
    -------
    TrueRisk
    straddled : (2,) int array
        The two wards that share the second area.
    contained : int
        The ward of the first.
    """
    ward_of = ward[unit_of]
    candidates = _border_places(ward_polygons)
    x, y, radius, straddled = _straddling_area(
        candidates, residents, ward_of, 0.45 * KILOMETRE * ground.scale
    )
    inner = shapely.point_on_surface(units.polygons)
    inner_x, inner_y = shapely.get_x(inner), shapely.get_y(inner)
    away = np.hypot(inner_x - x, inner_y - y)
    elsewhere = ~np.isin(ward, straddled) & (units.region != MARSH)
    apart = away >= min(5.0 * radius, np.median(away[elsewhere]))
    allowed = np.flatnonzero(elsewhere & apart)
    at, contained_radius = _contained_area(rng, inner_x, inner_y, ward, allowed, residents, ward_of)
    shape = TrueRisk(
        base=1.0,
        x=np.array([inner_x[at], x]),
        y=np.array([inner_y[at], y]),
        radius=np.array([contained_radius, radius]),
        factor=np.array([CONTAINED_FACTOR, STRADDLING_FACTOR]),
    )
    expected = shape.at(residents.x, residents.y) * AGE_FACTORS[residents.age_band]
    risk = TrueRisk(fall_count / expected.sum(), shape.x, shape.y, shape.radius, shape.factor)
    return risk, np.sort(straddled), int(ward[at])


def draw_falls(rng, risk, units, residents, unit_of, ward_of, small_ward):
    """Draw the falls of one year from the true risk.

    A person's falls are Poisson with mean risk x age factor x a factor of the household, gamma with
    mean 1 and variance 1/2, so that some households call more than once. The draw is conditional on
    one event: the small ward, whose true risk is the base, ends up with the highest rate of all
    wards. Its falls are drawn again until that holds, so it is a year that chance does bring, if
    not every year; every other ward is drawn once.

    Returns
    -------
    Falls
        In random order.
    """
    mean = risk.at(residents.x, residents.y) * AGE_FACTORS[residents.age_band]
    count = _counts(rng, mean, residents.household)
    wards = ward_of.max() + 1
    people = np.bincount(ward_of, minlength=wards)
    rate = np.bincount(ward_of, count, wards) / np.maximum(people, 1)
    here = np.flatnonzero(ward_of == small_ward)
    highest = np.delete(rate, small_ward).max()
    for _ in range(LARGEST_DRAWS):
        again = _counts(rng, mean[here], residents.household[here])
        if again.sum() > highest * len(here):
            break
    count[here] = again
    who = rng.permutation(np.repeat(np.arange(len(count)), count))
    return _details(rng, units, residents, unit_of, who)


def _counts(rng, mean, household):
    _, member = np.unique(household, return_inverse=True)
    proneness = rng.gamma(HOUSEHOLD_SHAPE, 1.0 / HOUSEHOLD_SHAPE, member.max() + 1)
    return rng.poisson(mean * proneness[member])


def _details(rng, units, residents, unit_of, who):
    outdoors = rng.uniform(size=len(who)) < OUTDOOR_SHARE
    x, y = residents.x[who].copy(), residents.y[who].copy()
    out = np.flatnonzero(outdoors)
    x[out], y[out] = _nearby_street(rng, units, residents, unit_of, who[out])
    moved = (x != residents.x[who]) | (y != residents.y[who])
    winter = 1.0 + 0.45 * np.cos(2 * math.pi * np.arange(12) / 12.0)
    month = np.where(
        outdoors,
        rng.choice(12, len(who), p=winter / winter.sum()),
        rng.integers(0, 12, len(who)),
    )
    severe = np.array([[0.62, 0.30, 0.08], [0.54, 0.33, 0.13], [0.44, 0.36, 0.20]])
    limits = np.cumsum(severe, axis=1)[residents.age_band[who]]
    severity = (rng.uniform(size=len(who))[:, None] > limits[:, :2]).sum(axis=1)
    return Falls(
        x=x,
        y=y,
        resident=who,
        household=residents.household[who],
        age_band=residents.age_band[who],
        month=month + 1,
        severity=severity,
        outdoors=outdoors & moved,
    )


def _nearby_street(rng, units, residents, unit_of, who):
    """A place on a street of the same base unit, so that the home and the fall count alike."""
    order = np.argsort(unit_of, kind="stable")
    start = np.searchsorted(unit_of[order], np.arange(len(units.polygons)))
    size = np.bincount(unit_of, minlength=len(units.polygons))
    x, y = residents.x[who].copy(), residents.y[who].copy()
    shapely.prepare(units.polygons)
    for _ in range(4):
        still = np.flatnonzero((x == residents.x[who]) & (y == residents.y[who]))
        unit = unit_of[who[still]]
        door = order[start[unit] + rng.integers(0, size[unit])]
        there_x = np.round(residents.street_x[door] + rng.normal(0, 2.0, len(door)), 2)
        there_y = np.round(residents.street_y[door] + rng.normal(0, 2.0, len(door)), 2)
        near = np.hypot(there_x - x[still], there_y - y[still]) < 400.0
        near &= shapely.contains_xy(units.polygons[unit], there_x, there_y)
        x[still[near]], y[still[near]] = there_x[near], there_y[near]
    return x, y


def _border_places(ward_polygons):
    """Places every 60 m along the borders of wards, (m, 2)."""
    borders = shapely.union_all(shapely.boundary(ward_polygons), grid_size=0.01)
    borders = shapely.line_merge(borders)
    lines = shapely.get_parts(borders)
    return np.concatenate(
        [
            shapely.get_coordinates(
                shapely.line_interpolate_point(line, np.arange(30.0, max(line.length, 31.0), 60.0))
            )
            for line in lines
        ]
    )


def _straddling_area(candidates, residents, ward_of, least_radius):
    """The border place whose nearest people are split most evenly over two wards of many people.

    An area of less than the least radius, in the densest streets, would be too small to see on a
    map of the whole.
    """
    people = np.bincount(ward_of)
    # Every fourth resident places the area well enough.
    home_x, home_y, ward_of = residents.x[::4], residents.y[::4], ward_of[::4]
    count = int(STRADDLING_SHARE * len(home_x))
    usual = np.median(people)
    best, answer = -1.0, None
    for x, y in candidates:
        distance = (home_x - x) ** 2 + (home_y - y) ** 2
        near = np.argpartition(distance, count)[:count]
        share = np.bincount(ward_of[near], minlength=len(people)) / count
        first, second = np.argsort(share)[-1:-3:-1]
        radius = math.sqrt(distance[near].max())
        size = min(people[first], people[second]) / usual
        others = 1.0 - share[first] - share[second]
        score = share[second] + 0.3 * min(size, 1.3) - 0.5 * others
        score += 0.3 * min(radius / least_radius, 1.0)
        if score > best:
            best, answer = score, (x, y, radius, np.array([first, second]))
    return answer


def _contained_area(rng, inner_x, inner_y, ward, allowed, residents, ward_of):
    """A unit, drawn from those whose nearest people all live in the unit's ward."""
    count = int(CONTAINED_SHARE * len(residents.x))
    share, radius = np.zeros(len(allowed)), np.zeros(len(allowed))
    for number, unit in enumerate(allowed):
        distance = (residents.x - inner_x[unit]) ** 2 + (residents.y - inner_y[unit]) ** 2
        near = np.argpartition(distance, count)[:count]
        share[number] = np.mean(ward_of[near] == ward[unit])
        radius[number] = math.sqrt(distance[near].max())
    typical = radius <= np.quantile(radius, 0.6)
    wanted = min(0.97, np.max(share[typical]))
    chosen = rng.choice(np.flatnonzero(typical & (share >= wanted)))
    return allowed[chosen], radius[chosen]


def street_places(rng, streets, weight, count):
    """Draw places along the streets with probability proportional to length x weight.

    Parameters
    ----------
    rng : numpy.random.Generator
    streets : practice_streets.Streets
    weight : callable
        weight(x, y, kind), (s,) array at the middle of each street.
    count : int

    Returns
    -------
    x, y : (count,) arrays
        Within about three metres of the street, rounded to a centimetre.
    """
    pieces = shapely.segmentize(streets.lines, 120.0)
    start = shapely.get_coordinates(pieces)
    line = shapely.get_coordinates(pieces, return_index=True)[1]
    joined = np.flatnonzero(line[1:] == line[:-1])
    middle = 0.5 * (start[joined] + start[joined + 1])
    length = np.hypot(*(start[joined + 1] - start[joined]).T)
    chance = length * weight(middle[:, 0], middle[:, 1], streets.kind[line[joined]])
    chosen = joined[rng.choice(len(joined), count, p=chance / chance.sum())]
    share = rng.uniform(size=count)[:, None]
    places = (
        start[chosen] * (1 - share) + start[chosen + 1] * share + rng.normal(0, 2.0, (count, 2))
    )
    return np.round(places[:, 0], 2), np.round(places[:, 1], 2)


def home_unit(units, residents):
    """Base unit of every resident."""
    return locate(units.polygons, residents.x, residents.y)
