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
from .record_words import of_all, share_words, whole
from .words import Words, joined

FAULT, LOOK, FINE = "fault", "look", "fine"
PLACED, MISSING, EMPTY, NOT_FINITE, UNPLACEABLE = range(5)
SMALL_NUMBER = 30
FAR_RANGES = 10.0


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
        (
            MISSING,
            Words("no geometry"),
            Words("{} have no geometry."),
            Words("Every record has a geometry."),
        ),
        (
            EMPTY,
            Words("empty geometry"),
            Words("{} have an empty geometry."),
            Words("No geometry is empty."),
        ),
        (
            NOT_FINITE,
            Words("not finite"),
            Words("{} have a coordinate that is not a finite number."),
            Words("All coordinates are finite numbers."),
        ),
        (
            UNPLACEABLE,
            Words("outside the CRS"),
            Words("{} lie where their CRS is not defined."),
            Words("All places lie where their CRS is defined."),
        ),
    )
    checks = []
    for state, key, template, fine in kinds:
        found = records.state == state
        if found.any():
            advice = Words(
                "Place them from their source or count them apart: they are left out of every "
                "map, and if they are left out more in some areas than in others the map is "
                "biased."
            )
            if state == UNPLACEABLE:
                advice = Words(
                    "Check that the CRS set for the layer is the one of its coordinates."
                )
            checks.append(Check(key, FAULT, found, template.filled(of_all(found)), advice))
        else:
            checks.append(Check(key, FINE, found, fine))
    return checks


def check_number(records):
    """Whether there are enough placed records to map at all."""
    count = int(records.placed.sum())
    none = np.zeros(len(records.x), bool)
    if count >= SMALL_NUMBER:
        return Check(Words("number"), FINE, none, Words("{} records have a place.", whole(count)))
    return Check(
        Words("number"),
        LOOK,
        none,
        Words("Only {} records have a place.", count),
        Words(
            "Below about {} a density surface or a zoning says little; use counts.", SMALL_NUMBER
        ),
    )


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
        return Check(Words("rounded"), FINE, found, Words("No place to look at.")), 0.0
    x, y = records.stored_x[placed], records.stored_y[placed]
    lattice = find_lattice(x, y, least_step / records.stored_metres, progress)
    if lattice is None:
        stored = resolution(x, y) * records.stored_metres
        words = Words(
            "Coordinates are written to less than a millimetre; no coarser rounding is seen."
        )
        if stored:
            words = Words(
                "Coordinates are written to {:.2g} m; no coarser rounding is seen.", stored
            )
        return Check(Words("rounded"), FINE, found, words), 0.0
    found[placed[lattice.on]] = True
    step = lattice.step * records.stored_metres
    ground = f"{step:.4g} m" if step < 1000 else f"{whole(step)} m"
    if records.stored_metres != 1.0:
        ground = Words("{} ({:.6g} in the units in which they are stored)", ground, lattice.step)
    words = Words(
        "{} lie on a lattice of {}: {} of all distinct places.",
        of_all(found),
        ground,
        share_words(lattice.share),
    )
    advice = Words(
        "Their coordinates were rounded. Choose cells and bandwidths of several times "
        "that step, and cells that are not aligned with it, or get the places before "
        "rounding."
    )
    return Check(Words("rounded"), FAULT, found, words, advice), step


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
        return Check(
            Words("outside"), FINE, found, Words("All placed records lie inside the boundary.")
        )
    away = shapely.distance(boundary, places[found[placed]]) * records.metres
    return Check(
        Words("outside"),
        FAULT,
        found,
        Words(
            "{} lie outside the boundary, the farthest {} m away, half of them within {} m.",
            of_all(found),
            whole(away.max()),
            whole(np.median(away)),
        ),
        Words(
            "Just outside: the boundary may be generalised, or these people came from "
            "elsewhere. Far outside: look for exchanged or mistyped coordinates. They are "
            "left out where a boundary is used."
        ),
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
        return Check(Words("far away"), FINE, found, Words("No record lies far from all others."))
    return Check(
        Words("far away"),
        FAULT,
        found,
        Words("{} lie far from all others.", of_all(found)),
        Words("Look for coordinates that are exchanged, mistyped, zero, or in another CRS."),
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
            Words("distortion"),
            LOOK,
            none,
            Words(
                "The coordinates are stored in degrees or in a CRS whose areas cannot be "
                "measured here."
            ),
            Words(
                "Distances and areas are taken in an equal-area CRS chosen for the data; "
                "nothing to do."
            ),
        )
    worst = max(abs(smallest - 1.0), abs(largest - 1.0))
    if worst <= 0.01:
        words = Words(
            "In the CRS in which they are stored areas are true within {:.2f}\u202f%.", 100 * worst
        )
        return Check(Words("distortion"), FINE, none, words)
    return Check(
        Words("distortion"),
        LOOK,
        none,
        Words(
            "In the CRS in which they are stored an area appears {:.3f} to {:.3f} times its size.",
            smallest,
            largest,
        ),
        Words(
            "Densities taken in that CRS would be off by as much; an equal-area CRS is "
            "used instead."
        ),
    )


def faults_in_words(checks, count):
    """The keys of all faults and looks of each record, (count,) object array; None where none."""
    words = np.full(count, None, object)
    for check in checks:
        if check.severity == FINE:
            continue
        for row in np.flatnonzero(check.found):
            words[row] = str(check.key) if words[row] is None else f"{words[row]}; {check.key}"
    return words


def verdict(checks):
    """The outcome of all checks in one sentence."""
    faults = [check for check in checks if check.severity == FAULT]
    looks = [check for check in checks if check.severity == LOOK]
    words = Words("No fault was found.")
    if faults:
        concerned = np.any([check.found for check in faults], axis=0)
        named = [Words("{} ({})", check.key, whole(check.count)) for check in faults]
        words = Words("{} are concerned by faults: {}.", of_all(concerned), joined(named, ", "))
    if not looks:
        return words
    if len(looks) == 1:
        return Words("{} 1 more thing is worth a look.", words)
    return Words("{} {} more things are worth a look.", words, len(looks))
