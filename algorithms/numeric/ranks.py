"""Mass ranks: how much of a layer's total lies in pixels no denser than a given one.

`mass_rank` is exact and holds the layer in memory. For layers that do not fit, masses are summed
in narrow bins of the value (`add_to_masses`, block by block) and turned into a table of strengths
(`strength_table`), which `look_up` applies to each block.

A bin is the sign, the exponent and the first 11 binary digits of a 32-bit float, so that two
values in one bin differ by less than 1 part in 2048, at any magnitude. Ranks from a table are
therefore the exact ranks of values that were rounded by less than 0.05 %.
"""

import numpy as np

from .errors import InputError

STRETCHES = ("share", "linear", "logarithmic")
# Range of the logarithmic stretch: the ratio of the values that read as full and as faint.
LOGARITHMIC_RANGE = 1000.0

_DROPPED_BITS = 12
BINS = 1 << (32 - _DROPPED_BITS)
_FIRST_NOT_FINITE = 0x7F800000 >> _DROPPED_BITS
_FIRST_NEGATIVE = 0x80000000 >> _DROPPED_BITS
_FIRST_NEGATIVE_NOT_FINITE = 0xFF800000 >> _DROPPED_BITS


def mass_rank(values):
    """Share of the total that lies in pixels no denser than each pixel.

    Parameters
    ----------
    values : array of any shape
        Densities; NaN for no data, negative values count as 0.

    Returns
    -------
    array of the same shape
        0 for a value of 0 and for no data, 1 at the densest; equal values share a rank.

    Raises
    ------
    InputError
        No value is above 0.
    """
    values = np.asarray(values, float)
    clean = np.where(np.isfinite(values) & (values > 0), values, 0.0)
    distinct, place = np.unique(clean, return_inverse=True)
    masses = np.bincount(place.ravel(), minlength=len(distinct)) * distinct
    cumulated = np.cumsum(masses)
    if not cumulated[-1] > 0:
        raise InputError("The layer has no value above 0 here; nothing can be ranked.")
    return (cumulated / cumulated[-1])[place].reshape(values.shape)


def _bin_of(values):
    """Bin of each value, any shape; the bit pattern of positive floats rises with the value."""
    values = np.ascontiguousarray(values, np.float32)
    return (values.view(np.uint32) >> _DROPPED_BITS).astype(np.intp)


def new_masses():
    """Masses of an empty layer, for `add_to_masses`; 8 MB."""
    return np.zeros(BINS)


def add_to_masses(masses, values):
    """Add the pixels of one block to the masses of a layer.

    Parameters
    ----------
    masses : (BINS,) float array
        Sum of the values in each bin; changed in place.
    values : array of any shape
        Densities; NaN for no data.
    """
    values = np.ascontiguousarray(values, np.float32).ravel()
    if len(values) == 0:
        return
    bins = _bin_of(values)
    # the bins of one block are few; counting from the first spares passes over all of them
    first = int(bins.min())
    bins -= first
    found = np.bincount(bins, weights=values)
    masses[first : first + len(found)] += found


def negative_mass(masses):
    """Sum of the negative values of a layer, 0 or less; they count as 0 everywhere else."""
    return float(masses[_FIRST_NEGATIVE:_FIRST_NEGATIVE_NOT_FINITE].sum())


def coarsest_rank_step(masses):
    """Largest share of the total in one bin: ranks from a table are this close to exact ones."""
    usable = _usable(masses)
    return float(usable.max() / usable.sum())


def strength_table(masses, stretch="share"):
    """Strength for every bin of values.

    Parameters
    ----------
    masses : (BINS,) float array
        From `add_to_masses` over the whole layer.
    stretch : str
        ``share``: mass rank, the share of the total in pixels no denser than the value;
        ``linear``: value / largest; ``logarithmic``: log(1 + R value / largest) / log(1 + R) with
        R = 1000 (common practice, no source).

    Returns
    -------
    (BINS,) float32 array
        0 to 1; 0 for no data, 0 and negative values, 1 for the largest value.

    Raises
    ------
    InputError
        The layer has no value above 0, or the stretch is unknown.
    """
    if stretch not in STRETCHES:
        raise InputError("Stretch must be one of {}; found “{}”.", ", ".join(STRETCHES), stretch)
    usable = _usable(masses)
    occupied = np.flatnonzero(usable)
    if len(occupied) == 0:
        raise InputError("The layer has no value above 0 here; nothing can be shown.")
    top = occupied[-1]
    if stretch == "share":
        rising = np.cumsum(usable[: top + 1])
        rising /= rising[-1]
    else:
        rising = _bin_values(top)
        rising /= rising[-1]
        if stretch == "logarithmic":
            rising = np.log1p(LOGARITHMIC_RANGE * rising) / np.log1p(LOGARITHMIC_RANGE)
    table = np.zeros(BINS, np.float32)
    table[: top + 1] = rising
    table[top:_FIRST_NOT_FINITE] = 1.0
    table[0] = 0.0
    return table


def _usable(masses):
    usable = masses[:_FIRST_NOT_FINITE].copy()
    usable[0] = 0.0
    return usable


def _bin_values(top):
    """The value in the middle of each bin up to one."""
    edges = (np.arange(top + 2, dtype=np.uint32) << _DROPPED_BITS).view(np.float32).astype(float)
    return (edges[:-1] + edges[1:]) / 2


def look_up(table, values, out=None):
    """Strength of each pixel of a block.

    Parameters
    ----------
    table : (BINS,) float32 array
        From `strength_table`.
    values : array of any shape
    out : float32 array of that shape or None

    Returns
    -------
    float32 array of the same shape
    """
    return np.take(table, _bin_of(values), out=out, mode="clip")
