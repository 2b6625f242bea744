"""Gaussian sums over pairs of records at any bandwidth, from one Fourier transform."""

import math
from dataclasses import dataclass

import numpy as np
from scipy import fft
from scipy.ndimage import map_coordinates

from .bandwidth import checked_records
from .errors import InputError
from .progress import silent

# Eight nodes keep 1e-6 even where all records sit on a lattice of this very step
SPREADING_ORDER = 8
READING_ORDER = 6
STEPS_PER_BANDWIDTH = 3.0
LARGEST_LATTICE = 4608 * 4608
# A Gaussian at this many standard deviations is 2e-8 of its peak, in space and in frequency
REACH = 6.0
CHUNK = 200_000


@dataclass(frozen=True)
class RecordSpectrum:
    """Fourier sums of weighted records on a periodic rectangle with room around them.

    Empty strips across the rectangle, wider than any kernel reaches, are narrowed, so that a
    far record costs nothing. Within reach of each other records keep their distances.

    Attributes
    ----------
    values : (2 q - 1, p) complex array
        sum_i w_i exp(-i k x_i) for the frequencies that a kernel lets pass: p from 0 on along x;
        along y q from 0 on, then the negative ones, nearest to 0 last.
    x, y : (n,) arrays
        Places of the records in the rectangle, units of the working CRS.
    step : float
        Distance of lattice nodes, same units.
    rows, columns : int
        Nodes along y and x.
    total, squares : float
        Sum of the weights and of their squares.
    narrowest, widest : float
        Bandwidths between which the sums serve.
    """

    values: np.ndarray
    x: np.ndarray
    y: np.ndarray
    step: float
    rows: int
    columns: int
    total: float
    squares: float
    narrowest: float
    widest: float

    @property
    def area(self):
        return self.rows * self.columns * self.step**2


def narrowest_bandwidth(x, y, widest):
    """The narrowest bandwidth that fits one lattice of bearable size beside the widest.

    Parameters
    ----------
    x, y : (n,) arrays
    widest : float
        Widest bandwidth, same units.

    Returns
    -------
    float
    """
    room = _room(widest)
    width, height = (_without_gaps(values, room).max() + room for values in (x, y))
    return 1.01 * STEPS_PER_BANDWIDTH * math.sqrt(width * height / LARGEST_LATTICE)


def record_spectrum(x, y, weights, narrowest, widest, progress=silent):
    """Fourier sums of the records, exact to about 1e-7 where a Gaussian kernel lets them pass.

    The records are spread with a B-spline of eight nodes on a lattice with a third of the
    narrowest bandwidth as its step, and the spline is divided out of the transform.

    Parameters
    ----------
    x, y, weights : (n,) arrays
    narrowest, widest : float
        The bandwidths of interest, units of the working CRS.
    progress : callable

    Returns
    -------
    RecordSpectrum

    Raises
    ------
    InputError
        The lattice would be larger than ``LARGEST_LATTICE`` nodes.

    References
    ----------
    Greengard & Lee (2004), SIAM Review 46:443-454 (non-uniform transform; Gaussian there).
    """
    x, y, weights = checked_records(x, y, weights)
    step, room = narrowest / STEPS_PER_BANDWIDTH, _room(widest)
    x, y = _without_gaps(x, room), _without_gaps(y, room)
    columns, rows = (math.ceil((values.max() + room) / step) for values in (x, y))
    if rows * columns > LARGEST_LATTICE:
        raise InputError(
            f"Bandwidths from {narrowest:.6g} up to {widest:.6g} need {rows} x {columns} nodes "
            f"to cover the records; start at {narrowest_bandwidth(x, y, widest):.6g} or above."
        )
    columns, rows = (fft.next_fast_len(max(count, 16), real=True) for count in (columns, rows))
    lattice = _spread(x / step, y / step, weights, (rows, columns), progress)
    kept_x, kept_y = (_passing(count, step, narrowest) for count in (columns, rows))
    values = fft.rfft(lattice, axis=1, overwrite_x=True, workers=-1)[:, :kept_x]
    values = _both_ends(fft.fft(values, axis=0, workers=-1), kept_y)
    values /= np.sinc(fft.rfftfreq(columns)[:kept_x]) ** SPREADING_ORDER
    values /= _both_ends(np.sinc(fft.fftfreq(rows)), kept_y)[:, None] ** SPREADING_ORDER
    progress(1.0)
    total, squares = float(weights.sum()), float((weights**2).sum())
    return RecordSpectrum(values, x, y, step, rows, columns, total, squares, narrowest, widest)


def pair_sums(spectrum, widths):
    """Sum over all pairs of records, each with itself too, of w_i w_j G_t(x_i - x_j).

    With power P(k) = |sum_i w_i exp(-i k x_i)|^2 the sum is
    sum_k P(k) exp(-t^2 k^2 / 2) / area, and the exponential splits into its two axes, so that
    all widths take one matrix product.

    Parameters
    ----------
    spectrum : RecordSpectrum
    widths : (m,) array
        Standard deviations t of the Gaussian, at least ``spectrum.narrowest``.

    Returns
    -------
    (m,) array
        Per unit of area of the working CRS.
    """
    widths = np.asarray(widths, float)
    kept_x, kept_y = (
        _passing(count, spectrum.step, widths.min()) for count in (spectrum.columns, spectrum.rows)
    )
    along_x = 2 * math.pi * np.arange(kept_x) / (spectrum.columns * spectrum.step)
    along_y = 2 * math.pi * np.arange(kept_y) / (spectrum.rows * spectrum.step)
    block = spectrum.values[:kept_y, :kept_x]
    power = block.real**2 + block.imag**2
    mirrored = spectrum.values[:-kept_y:-1, :kept_x]
    power[1:] += mirrored.real**2 + mirrored.imag**2
    power[:, 1:] *= 2.0
    decay_x, decay_y = (
        np.exp(-0.5 * np.multiply.outer(axis**2, widths**2)) for axis in (along_x, along_y)
    )
    return np.einsum("kt,kt->t", decay_y, power @ decay_x) / spectrum.area


def smoothed_at_records(spectrum, bandwidth):
    """Sum of w_j G_h(x_i - x_j) over all records j at each record i, from their Fourier sums.

    Parameters
    ----------
    spectrum : RecordSpectrum
    bandwidth : float
        At least ``spectrum.narrowest``.

    Returns
    -------
    (n,) array
        Per unit of area; absolute error about 1e-6 of one record's peak.
    """
    width, height = spectrum.columns * spectrum.step, spectrum.rows * spectrum.step
    rows, columns = reading_lattice(spectrum, bandwidth)
    kept_x, kept_y = (
        min(_passing(count, spectrum.step, bandwidth), (nodes - 1) // 2)
        for count, nodes in ((spectrum.columns, columns), (spectrum.rows, rows))
    )
    factor_x = _smoothing(kept_x, columns, width, bandwidth)
    factor_y = _smoothing(kept_y, rows, height, bandwidth)[:, None]
    block = np.zeros((rows, kept_x), complex)
    block[:kept_y] = spectrum.values[:kept_y, :kept_x] * factor_x * factor_y
    block[:-kept_y:-1] = spectrum.values[:-kept_y:-1, :kept_x] * factor_x * factor_y[1:]
    block = fft.ifft(block, axis=0, overwrite_x=True, workers=-1)
    surface = fft.irfft(block, n=columns, axis=1, overwrite_x=True, workers=-1)
    places = [spectrum.y * (rows / height), spectrum.x * (columns / width)]
    read = map_coordinates(
        surface, places, order=READING_ORDER - 1, mode="grid-wrap", prefilter=False
    )
    return read * (rows * columns / spectrum.area)


def reading_lattice(spectrum, bandwidth):
    """Rows and columns of the lattice that a surface of this bandwidth is read from."""
    return tuple(
        fft.next_fast_len(math.ceil(STEPS_PER_BANDWIDTH * nodes * spectrum.step / bandwidth), True)
        for nodes in (spectrum.rows, spectrum.columns)
    )


def _room(widest):
    # The squared estimate has a kernel wider by sqrt(2)
    return REACH * math.sqrt(2.0) * widest


def _passing(nodes, step, bandwidth):
    """How many frequencies from 0 on a Gaussian lets pass, of a lattice of so many nodes."""
    highest = REACH / (2 * math.pi * bandwidth) * nodes * step
    return max(min(int(highest) + 2, (nodes - 1) // 2), 2)


def _both_ends(values, kept):
    return np.concatenate([values[:kept], values[1 - kept :]])


def _smoothing(kept, nodes, side, bandwidth):
    """Gaussian response over spline response on a lattice of other step."""
    cycles = np.arange(kept) / side
    gaussian = np.exp(-0.5 * (2 * math.pi * bandwidth * cycles) ** 2)
    return gaussian / np.sinc(cycles * side / nodes) ** READING_ORDER


def _without_gaps(values, room):
    """Places from 0 on, every empty stretch between neighbours narrowed to the room."""
    order = np.argsort(values)
    steps = np.minimum(np.diff(values[order]), room)
    places = np.zeros(values.size)
    places[order[1:]] = np.cumsum(steps)
    return places


def _spread(columns, rows, weights, shape, progress):
    """Spread records to the nodes of a periodic lattice with a centred B-spline."""
    lattice = np.zeros(shape[0] * shape[1])
    # Neighbours in memory are worth the sort
    order = np.lexsort((columns, rows.astype(np.int64)))
    for start in range(0, order.size, CHUNK):
        part = order[start : start + CHUNK]
        column_nodes, column_shares = _spline_shares(columns[part], shape[1])
        row_nodes, row_shares = _spline_shares(rows[part], shape[0])
        nodes = row_nodes[:, None] * shape[1] + column_nodes
        shares = (row_shares * weights[part])[:, None] * column_shares
        first = nodes.min()
        counted = np.bincount((nodes - first).ravel(), shares.ravel())
        lattice[first : first + counted.size] += counted
        progress(start / order.size)
    return lattice.reshape(shape)


def _spline_shares(places, count):
    """Nodes that a centred B-spline reaches from each place, and what each receives.

    The order of the spline is raised one by one (de Boor 1978, A Practical Guide to Splines).
    """
    base = np.floor(places)
    offset = places - base
    shares = np.ones((1, places.size))
    for order in range(1, SPREADING_ORDER):
        raised = np.zeros((order + 1, places.size))
        positions = offset + np.arange(order + 1)[:, None]
        raised[:-1] = positions[:-1] * shares
        raised[1:] += (order + 1 - positions[1:]) * shares
        shares = raised / order
    taps = SPREADING_ORDER // 2 - np.arange(SPREADING_ORDER)[:, None]
    return (base.astype(np.int64) + taps) % count, shares
