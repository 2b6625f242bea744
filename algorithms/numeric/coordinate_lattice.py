"""Coordinates that were rounded to a lattice: the step, its start, and which places lie on it."""

import math
from dataclasses import dataclass

import numpy as np

from .progress import silent

MANTISSAS = (1.0, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 7.5)
LEAST_PLACES = 8
LEAST_SHARE = 0.01
EVIDENT = 6.0
MOST = 0.5


@dataclass(frozen=True)
class Lattice:
    """Places that lie on multiples of a step.

    Attributes
    ----------
    step : float
        Units of the coordinates.
    offset_x, offset_y : float
        Coordinates of the lattice modulo the step, 0 to below the step.
    on : (n,) bool array
        Places on the lattice.
    share : float
        Share of the distinct places that lie on it beyond what chance would put there.
    """

    step: float
    offset_x: float
    offset_y: float
    on: np.ndarray
    share: float


def resolution(x, y):
    """The coarsest step, 1, 2 or 5 times a power of ten, that the coordinates are multiples of.

    Parameters
    ----------
    x, y : (n,) arrays
        Finite coordinates as they are stored; one in 200 may be an exception.

    Returns
    -------
    float
        0 when the coordinates are finer than one part in 10^11 of their size.
    """
    size = max(np.abs(x).max(), np.abs(y).max(), 1e-300)
    highest = math.ceil(math.log10(size))
    for exponent in range(highest, highest - 12, -1):
        for mantissa in (5.0, 2.0, 1.0):
            step = mantissa * 10.0**exponent
            on = _near_multiple(x, step) & _near_multiple(y, step)
            if np.mean(on) >= 0.995:
                return step
    return 0.0


def find_lattice(x, y, least_step, progress=silent):
    """Find the coarsest lattice that evidently more places lie on than chance would put there.

    Steps of 1, 2, 2.5, 3, 4, 5, 6 and 7.5 times powers of ten and the commonest gap between
    neighbouring coordinates are tried, each with the offset that most places share. Places that are
    stored to a resolution r lie on a given lattice of step g by chance with probability (r/g)^2; a
    lattice counts when its share of the distinct places exceeds that by 1 % and six standard
    errors. Of the lattices that explain nearly as many places as the best one, the coarsest is
    taken.

    Parameters
    ----------
    x, y : (n,) arrays
        Finite coordinates in the CRS in which they are stored.
    least_step : float
        Finer rounding is not looked for; units of the coordinates.
    progress : callable

    Returns
    -------
    Lattice or None
    """
    places, inverse = np.unique(np.column_stack([x, y]), axis=0, return_inverse=True)
    if len(places) < LEAST_PLACES:
        return None
    distinct_x, distinct_y = places.T
    stored = resolution(distinct_x, distinct_y)
    found = []
    steps = _steps(distinct_x, distinct_y, least_step)
    for number, step in enumerate(steps):
        progress(number / len(steps))
        lattice = _on_lattice(distinct_x, distinct_y, step, stored)
        if lattice is not None:
            found.append(lattice)
    if not found:
        return None
    best = max(lattice.share for lattice in found)
    coarsest = max(
        (lattice for lattice in found if lattice.share >= 0.9 * best),
        key=lambda lattice: lattice.step,
    )
    return Lattice(
        coarsest.step,
        coarsest.offset_x,
        coarsest.offset_y,
        coarsest.on[inverse.ravel()],
        coarsest.share,
    )


def lattice_spacing(x, y, nearest, least_step):
    """Spacing of the lattice that most places lie on, 0 where they do not.

    Where `find_lattice` sees none, the lattice may have been turned or bent by reprojection:
    most places then have their nearest neighbour at nearly one distance, which at random hardly
    two have. Such a lattice so sparsely used that this fails is not seen.

    Parameters
    ----------
    x, y : (n,) arrays
        Different places.
    nearest : (m,) array
        Distances from these places, or more of them, to the nearest other place.
    least_step : float
        Finer rounding does not matter; units of the coordinates.

    Returns
    -------
    float
    """
    lattice = find_lattice(x, y, least_step)
    if lattice is not None and lattice.share > MOST:
        return lattice.step
    if nearest.size < 20:
        return 0.0
    spacing = np.quantile(nearest, 0.05)
    alike = np.abs(nearest - spacing) <= 0.02 * spacing
    return float(np.median(nearest[alike])) if alike.mean() > MOST else 0.0


def _tolerance(values, step):
    """How far from a multiple a stored double may lie and still mean it."""
    return 1e-6 * step + 8 * np.finfo(float).eps * np.abs(values).max()


def _near_multiple(values, step):
    return np.abs(values - step * np.round(values / step)) <= _tolerance(values, step)


def _steps(x, y, least_step):
    """Steps to try, rising: round ones up to a quarter of the extent, and the commonest gaps."""
    extent = max(np.ptp(x), np.ptp(y))
    largest = max(extent / 4.0, least_step)
    first, last = math.floor(math.log10(least_step)), math.ceil(math.log10(largest))
    steps = {
        mantissa * 10.0**exponent
        for exponent in range(first, last + 1)
        for mantissa in MANTISSAS
        if least_step * (1 - 1e-9) <= mantissa * 10.0**exponent <= largest
    }
    for values in (x, y):
        gaps = np.diff(np.unique(values))
        gaps = gaps[gaps >= least_step * (1 - 1e-9)]
        if len(gaps):
            rounded, times = np.unique(np.round(gaps / (1e-6 * least_step)), return_counts=True)
            gap = rounded[np.argmax(times)] * 1e-6 * least_step
            if not any(math.isclose(gap, step, rel_tol=1e-5) for step in steps):
                steps.add(gap)
    return sorted(steps)


def _on_lattice(x, y, step, stored):
    offset_x, on_x = _commonest_remainder(x, step)
    offset_y, on_y = _commonest_remainder(y[on_x], step)
    on = on_x.copy()
    on[on_x] = on_y
    share = on.mean()
    # Coordinates all stored to this step, or a coarser one, are not there by chance.
    chance = (stored / step) ** 2 if step > stored * (1 + 1e-9) else 0.0
    error = math.sqrt(max(chance * (1 - chance), 1.0 / len(x) ** 2) / len(x))
    excess = share - chance
    if excess < max(LEAST_SHARE, EVIDENT * error) or on.sum() < LEAST_PLACES:
        return None
    return Lattice(step, offset_x, offset_y, on, excess / (1.0 - chance))


def _commonest_remainder(values, step):
    """The remainder modulo the step that most values share, and which values do."""
    width = 2 * _tolerance(values, step)
    remainder = np.mod(values, step)
    # Just below the step means just above 0.
    remainder = np.where(step - remainder <= width, remainder - step, remainder)
    ordered = np.sort(remainder)
    first = np.searchsorted(ordered, ordered - width, side="left")
    last = int(np.argmax(np.arange(len(ordered)) - first))
    low, high = ordered[first[last]], ordered[last]
    on = (remainder >= low) & (remainder <= high)
    return float(0.5 * (low + high) % step), on
