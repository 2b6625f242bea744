"""What may be wrong with point records before anything is computed from them, and what to do about
it.

Every check looks at one kind of fault and returns a `Check`: how serious it is, which records it
concerns, what was found and what is advised, in words. A ``fault`` changes results; a ``look`` may
be right but is worth a look; ``fine`` is neither.
"""

from dataclasses import dataclass

import numpy as np
import shapely

from .coordinate_lattice import find_lattice, resolution
from .progress import silent
from .record_words import of_all, plural, share_words, whole

FAULT, LOOK, FINE = "fault", "look", "fine"
PLACED, MISSING, EMPTY, NOT_FINITE, UNPLACEABLE = range(5)
SMALL_NUMBER = 30
HOUSE_STACK, CARE_HOME_STACK = 12, 60
STACK_SHARE = 1 / 400
FEW_SPOTS_SHARE = 0.1
CROWDED_SHARE = 0.2
FAR_RANGES = 10.0

STACK_ADVICE = (
    "Look these spots up: a spot that stands for “address unknown” makes a false peak; leave its "
    "records out or place them. A true large home may stay."
)
AREAS_ADVICE = (
    "So many records on so few spots look like the middle points of areas. Map such data by those "
    "areas; a density surface or small cells would show the middle points and not the people."
)


@dataclass(frozen=True)
class Check:
    """The outcome of one check.

    Attributes
    ----------
    key : str
        Short name, as written to the flagged records.
    severity : str
        ``fault``, ``look`` or ``fine``.
    found : (n,) bool array
        Records concerned.
    words : str
        What was found.
    advice : str
        What to do; empty when all is fine.
    """

    key: str
    severity: str
    found: np.ndarray
    words: str
    advice: str = ""

    @property
    def count(self):
        return int(np.count_nonzero(self.found))


@dataclass(frozen=True)
class RawRecords:
    """Records as they are stored, good and bad.

    Attributes
    ----------
    x, y : (n,) arrays
        Places in the working CRS; NaN where there is none.
    stored_x, stored_y : (n,) arrays
        The same in the CRS in which they are stored.
    state : (n,) int array
        PLACED, MISSING, EMPTY, NOT_FINITE or UNPLACEABLE.
    metres : float
        Metres in one unit of the working CRS.
    stored_metres : float
        Metres on the ground of one unit of the stored coordinates, northwards.
    """

    x: np.ndarray
    y: np.ndarray
    stored_x: np.ndarray
    stored_y: np.ndarray
    state: np.ndarray
    metres: float = 1.0
    stored_metres: float = 1.0

    @property
    def placed(self):
        """(n,) bool array."""
        return self.state == PLACED


def check_geometry(records):
    """Records without a usable place: no geometry, an empty one, not finite, or not in the CRS.

    Parameters
    ----------
    records : RawRecords

    Returns
    -------
    list of Check
        One for each of the four kinds.
    """
    kinds = (
        (MISSING, "no geometry", "have no geometry", "Every record has a geometry."),
        (EMPTY, "empty geometry", "have an empty geometry", "No geometry is empty."),
        (
            NOT_FINITE,
            "not finite",
            "have a coordinate that is not a finite number",
            "All coordinates are finite numbers.",
        ),
        (
            UNPLACEABLE,
            "outside the CRS",
            "lie where their CRS is not defined",
            "All places lie where their CRS is defined.",
        ),
    )
    checks = []
    for state, key, words, fine in kinds:
        found = records.state == state
        if found.any():
            advice = (
                "Place them from their source or count them apart: they are left out of every "
                "map, and "
                "if they are left out more in some areas than in others the map is biased."
            )
            if state == UNPLACEABLE:
                advice = "Check that the CRS set for the layer is the one of its coordinates."
            checks.append(Check(key, FAULT, found, f"{of_all(found)} {words}.", advice))
        else:
            checks.append(Check(key, FINE, found, fine))
    return checks


def check_number(records):
    """Whether there are enough placed records to map at all."""
    count = int(records.placed.sum())
    none = np.zeros(len(records.x), bool)
    if count >= SMALL_NUMBER:
        return Check("number", FINE, none, f"{whole(count)} records have a place.")
    return Check(
        "number",
        LOOK,
        none,
        f"Only {count} records have a place.",
        f"Below about {SMALL_NUMBER} a density surface or a zoning says little; use counts.",
    )


def check_stacks(records, largest=0):
    """Many records on exactly one spot, beyond what a block of flats or a care home explains.

    People who share an address share a place, so stacks as such are no fault. By default a spot is
    too full when it holds more records than the largest of 12, one in 400 of all records and, where
    most records share their spot anyway as in a register of residents, 60, a large care home. When
    a fifth of all records lies on spots of more than 12, or there are ten records to a spot, the
    places are those of areas and not of addresses. Common practice, no source.

    Parameters
    ----------
    records : RawRecords
    largest : int
        The most records that one address may truly have; 0 for the default.

    Returns
    -------
    Check
    sizes : (n,) int array
        Records on the spot of each record, 0 for those without a place.
    """
    sizes = stack_sizes(records)
    placed = sizes[records.placed]
    count = len(placed)
    if count == 0:
        return Check("stacked", FINE, sizes > 0, "No place to look at."), sizes
    spots = _spots(placed)
    summary = (
        f"{whole(count)} records lie on {whole(spots)} {plural(spots, 'spot')}; "
        f"{share_words(np.mean(placed > 1))} share theirs with another."
    )
    crowded = sizes > (largest or HOUSE_STACK)
    if count >= SMALL_NUMBER and (
        spots < FEW_SPOTS_SHARE * count or crowded.sum() > CROWDED_SHARE * count
    ):
        return Check("stacked", FAULT, sizes > 1, summary, AREAS_ADVICE), sizes
    limit = largest or _usual_limit(placed)
    found = sizes > limit
    if found.any():
        full = _spots(sizes[found])
        words = (
            f"{of_all(found)} lie on {whole(full)} {plural(full, 'spot')} of more than "
            f"{whole(limit)} "
            f"records each, the fullest with {whole(sizes.max())}. {summary}"
        )
        return Check("stacked", FAULT, found, words, STACK_ADVICE), sizes
    words = (
        f"{summary} The fullest spot has {whole(placed.max())}, as homes, flats or a care home may."
    )
    return Check("stacked", FINE, found, words), sizes


def check_rounding(records, least_step=5.0, progress=silent):
    """Coordinates rounded to a lattice so coarse that maps would show it.

    Parameters
    ----------
    records : RawRecords
    least_step : float
        Metres on the ground from which rounding matters.
    progress : callable

    Returns
    -------
    Check
    step : float
        Step of the lattice on the ground, metres; 0 when none was found.
    """
    found = np.zeros(len(records.x), bool)
    placed = np.flatnonzero(records.placed)
    if len(placed) == 0:
        return Check("rounded", FINE, found, "No place to look at."), 0.0
    x, y = records.stored_x[placed], records.stored_y[placed]
    lattice = find_lattice(x, y, least_step / records.stored_metres, progress)
    if lattice is None:
        stored = resolution(x, y) * records.stored_metres
        precision = f"to {stored:.2g} m" if stored else "to less than a millimetre"
        words = f"Coordinates are written {precision}; no coarser rounding is seen."
        return Check("rounded", FINE, found, words), 0.0
    found[placed[lattice.on]] = True
    step = lattice.step * records.stored_metres
    ground = f"{step:.4g} m" if step < 1000 else f"{whole(step)} m"
    if records.stored_metres != 1.0:
        ground += f" ({lattice.step:.6g} in the units in which they are stored)"
    words = (
        f"{of_all(found)} lie on a lattice of {ground}: "
        f"{share_words(lattice.share)} of all distinct places."
    )
    advice = (
        "Their coordinates were rounded. Choose cells and bandwidths of several times that step, "
        "and cells that are not aligned with it, or get the places before rounding."
    )
    return Check("rounded", FAULT, found, words, advice), step


def check_boundary(records, boundary, progress=silent):
    """Records outside the study area.

    Parameters
    ----------
    records : RawRecords
    boundary : shapely Polygon or MultiPolygon
        In the working CRS.
    progress : callable

    Returns
    -------
    Check
    """
    found = np.zeros(len(records.x), bool)
    placed = np.flatnonzero(records.placed)
    shapely.prepare(boundary)
    places = shapely.points(records.x[placed], records.y[placed])
    for start in range(0, len(placed), 20_000):
        stop = start + 20_000
        found[placed[start:stop]] = ~shapely.intersects(boundary, places[start:stop])
        progress(min(stop / max(len(placed), 1), 1.0))
    if not found.any():
        return Check("outside", FINE, found, "All placed records lie inside the boundary.")
    away = shapely.distance(boundary, places[found[placed]]) * records.metres
    return Check(
        "outside",
        FAULT,
        found,
        f"{of_all(found)} lie outside the boundary, the farthest {whole(away.max())} m away, "
        f"half of them within {whole(np.median(away))} m.",
        "Just outside: the boundary may be generalised, or these people came from elsewhere. Far "
        "outside: "
        "look for exchanged or mistyped coordinates. They are left out where a boundary is used.",
    )


def check_far(records):
    """Records far from all others, as exchanged or mistyped coordinates are.

    Far is more than ten times the range of the middle nine tenths of the records away from their
    median, eastwards or northwards (common practice, no source).
    """
    found = np.zeros(len(records.x), bool)
    placed = np.flatnonzero(records.placed)
    for values in (records.x, records.y):
        if len(placed) < SMALL_NUMBER:
            break
        low, middle, high = np.quantile(values[placed], (0.05, 0.5, 0.95))
        found[placed] |= np.abs(values[placed] - middle) > FAR_RANGES * max(high - low, 1e-9)
    if not found.any():
        return Check("far away", FINE, found, "No record lies far from all others.")
    return Check(
        "far away",
        FAULT,
        found,
        f"{of_all(found)} lie far from all others.",
        "Look for coordinates that are exchanged, mistyped, zero, or in another CRS.",
    )


def check_distortion(smallest, largest, count):
    """What the stored CRS does to areas over the extent of the records.

    Parameters
    ----------
    smallest, largest : float
        Area in the plane over area on the ellipsoid at places of the extent; NaN where unknown, as
        for a CRS in degrees.
    count : int
        Number of records, for the size of the mask.

    Returns
    -------
    Check
    """
    none = np.zeros(count, bool)
    if not (np.isfinite(smallest) and np.isfinite(largest)):
        return Check(
            "distortion",
            LOOK,
            none,
            "The coordinates are stored in degrees or in a CRS whose areas cannot be measured "
            "here.",
            "Distances and areas are taken in an equal-area CRS chosen for the data; nothing to "
            "do.",
        )
    worst = max(abs(smallest - 1.0), abs(largest - 1.0))
    if worst <= 0.01:
        words = (
            f"In the CRS in which they are stored areas are true within {100 * worst:.2f}\u2009%."
        )
        return Check("distortion", FINE, none, words)
    return Check(
        "distortion",
        LOOK,
        none,
        f"In the CRS in which they are stored an area appears {smallest:.3f} to {largest:.3f} "
        f"times "
        "its size.",
        "Densities taken in that CRS would be off by as much; an equal-area CRS is used instead.",
    )


def stack_sizes(records):
    """Number of records on the spot of each record, 0 for those without a place, (n,) int array."""
    sizes = np.zeros(len(records.x), np.int64)
    placed = records.placed
    places = np.column_stack([records.stored_x[placed], records.stored_y[placed]])
    if len(places):
        _, inverse, times = np.unique(places, axis=0, return_inverse=True, return_counts=True)
        sizes[placed] = times[inverse.ravel()]
    return sizes


def faults_in_words(checks, count):
    """The keys of all faults and looks of each record, (count,) object array; None where none."""
    words = np.full(count, None, object)
    for check in checks:
        if check.severity == FINE:
            continue
        for row in np.flatnonzero(check.found):
            words[row] = check.key if words[row] is None else f"{words[row]}; {check.key}"
    return words


def verdict(checks):
    """The outcome of all checks in one sentence."""
    faults = [check for check in checks if check.severity == FAULT]
    looks = [check for check in checks if check.severity == LOOK]
    also = f"; {len(looks)} more {plural(len(looks), 'thing')} worth a look" if looks else ""
    if not faults:
        return f"No fault was found{also}."
    concerned = np.any([check.found for check in faults], axis=0)
    named = ", ".join(f"{check.key} ({whole(check.count)})" for check in faults)
    return f"{of_all(concerned)} are concerned by faults: {named}{also}."


def _spots(sizes):
    """Number of spots behind the stack sizes of records."""
    return int(np.round(np.sum(1.0 / sizes)))


def _usual_limit(sizes):
    """The most records on one spot that homes explain, from the stack sizes of placed records."""
    shared = CARE_HOME_STACK if np.median(sizes) >= 2 else HOUSE_STACK
    return max(shared, int(np.ceil(STACK_SHARE * len(sizes))))
