"""Whether two layers are dense in the same places more than unrelated layers would be."""

from dataclasses import dataclass

import numpy as np
from scipy import fft

from .errors import InputError

MOST_SHIFTED_PIXELS = 1 << 20
# A shift counts when at least this share of the pixels compared without a shift still meet.
LEAST_OVERLAP = 0.5


@dataclass(frozen=True)
class ShiftTest:
    """Shared area of two cores against all shifts of one of them.

    Attributes
    ----------
    shared : int
        Pixels in both cores.
    expected : float
        Mean over the shifts, for the area that is compared without a shift.
    low, high : float
        2.5 % and 97.5 % quantiles over the shifts, likewise.
    p_value : float
        Share of shifts, none included, with at least as close a meeting: small when the cores
        meet more than unrelated ones would.
    shifts : int
        Number of shifts compared.
    """

    shared: int
    expected: float
    low: float
    high: float
    p_value: float
    shifts: int


def shift_test(first, second, first_known=None, second_known=None):
    """Whether two cores meet more than they would by chance, by shifts on a torus.

    One layer is shifted against the other over the grid, whose opposite edges are joined; that
    keeps each layer's own clustering and breaks what relates the two. Every shift is counted, not
    a sample: shared areas under all of them are one cross-correlation, by Fourier transform.

    Where the known area is not the whole grid, a shift compares only the pixels that are known in
    both. What is compared is then the correlation of the two cores over those pixels times the
    root of their number, so that shifts that compare fewer pixels do not vary more (variance
    correction), and shifts that compare less than half of the pixels are left out. On a wholly
    known grid that orders the shifts exactly as the shared area does.

    Parameters
    ----------
    first, second : (rows, columns) bool array
        Cores of two layers.
    first_known, second_known : (rows, columns) bool array or None
        Where the layers have data; everywhere by default.

    Returns
    -------
    ShiftTest
        Grids of more than a million pixels are thinned to rows and columns at equal steps for the
        shifts; ``shared`` is always of all pixels and the rest is given in the same scale.

    Raises
    ------
    InputError
        The layers have no pixel in common.

    References
    ----------
    Lotwick & Silverman (1982), J. R. Stat. Soc. B 44:406: shifts on a torus. Mrkvička, Dvořák,
    González & Mateu (2021), Spat. Stat. 42:100430: variance correction.
    """
    whole = np.ones(np.shape(first), bool)
    first_known = whole if first_known is None else np.asarray(first_known, bool)
    second_known = whole if second_known is None else np.asarray(second_known, bool)
    first, second = np.asarray(first, bool) & first_known, np.asarray(second, bool) & second_known
    shared = int(np.count_nonzero(first & second))
    if not (first_known & second_known).any():
        raise InputError(
            "Two layers have no pixel with data in common; choose layers that overlap."
        )
    box = _box(first_known | second_known)
    step = int(np.ceil(np.sqrt(first[box].size / MOST_SHIFTED_PIXELS)))
    thinned = [one[box][::step, ::step] for one in (first, second, first_known, second_known)]
    known, first_in, second_in, both_in = _shifted_counts(*thinned)
    compared = known >= LEAST_OVERLAP * known[0, 0]
    compared[0, 0] = True
    closeness = _closeness(known, first_in, second_in, both_in)
    known = np.maximum(known, 1.0)
    # area that meets, brought to the number of pixels compared without a shift
    areas = (both_in * known[0, 0] / known)[compared] * step**2
    low, high = np.quantile(areas, [0.025, 0.975])
    at_least = closeness[compared] >= closeness[0, 0] - 1e-9
    return ShiftTest(
        shared,
        float(areas.mean()),
        float(low),
        float(high),
        float(at_least.mean()),
        int(compared.sum()),
    )


def _closeness(known, first_in, second_in, both_in):
    """Correlation of two cores over the pixels compared, times the root of their number."""
    known = np.maximum(known, 1.0)
    first_share, second_share = first_in / known, second_in / known
    variance = first_share * (1 - first_share) * second_share * (1 - second_share)
    covariance = both_in / known - first_share * second_share
    return covariance / np.sqrt(np.maximum(variance, 1 / known**2)) * np.sqrt(known)


def _box(mask):
    """Slices of the smallest rectangle that holds all true pixels."""
    rows, columns = np.flatnonzero(mask.any(axis=1)), np.flatnonzero(mask.any(axis=0))
    return slice(rows[0], rows[-1] + 1), slice(columns[0], columns[-1] + 1)


def _shifted_counts(first, second, first_known, second_known):
    """For every shift: pixels known in both, in the first core, in the second, in both cores."""
    shape = first.shape
    still = [fft.rfft2(one.astype(float)).conj() for one in (first_known, first)]
    moved = [fft.rfft2(one.astype(float)) for one in (second_known, second)]

    def counts(one, other):
        return np.rint(fft.irfft2(one * other, shape))

    return (
        counts(still[0], moved[0]),
        counts(still[1], moved[0]),
        counts(still[0], moved[1]),
        counts(still[1], moved[1]),
    )
