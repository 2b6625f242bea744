"""Gaussian sums over pairs of records at any bandwidth, from one Fourier transform."""

import math
from dataclasses import dataclass

import numpy as np
from scipy import fft
from scipy.ndimage import map_coordinates
from scipy.sparse import csc_matrix

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
# Records that are spread at once: their nodes fit into the processor's cache
CHUNK = 8192


@dataclass(frozen=True)
class RecordSpectrum:
    """Fourier sums of weighted records on a periodic rectangle with room around them.

    Empty strips across the rectangle, wider than any kernel reaches, are narrowed, so that a
    far record costs nothing. Within reach of each other records keep their distances.

    Attributes
    ----------
    values : (rows, p) complex array
        Transform of the lattice that the records are spread on, for the p frequencies from 0 on
        along x that a kernel lets pass: sum_i w_i exp(-i k x_i) times ``spread_response`` of
        both axes.
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
    # Half a spline away from the edge no record is spread across it
    x, y = (_without_gaps(values, room) + SPREADING_ORDER / 2 * step for values in (x, y))
    columns, rows = (math.ceil((values.max() + room) / step) for values in (x, y))
    if rows * columns > LARGEST_LATTICE:
        raise InputError(
            "Bandwidths from {:.6g} up to {:.6g} need {} x {} nodes to cover the records; "
            "start at {:.6g} or above.",
            narrowest,
            widest,
            rows,
            columns,
            narrowest_bandwidth(x, y, widest),
        )
    columns, rows = (fft.next_fast_len(max(count, 16), real=True) for count in (columns, rows))
    lattice = _spread(x / step, y / step, weights, (rows, columns), progress)
    kept = _passing(columns, step, narrowest)
    values = fft.rfft(lattice, axis=1, overwrite_x=True, workers=-1)[:, :kept]
    values = fft.fft(values, axis=0, workers=-1)
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
    power = _power(spectrum.values[:kept_y, :kept_x])
    power[1:] += _power(spectrum.values[1 - kept_y :, :kept_x])[::-1]
    power[:, 1:] *= 2.0
    decay_x, decay_y = (
        np.exp(-0.5 * np.multiply.outer(axis**2, widths**2))
        / _spread_response(axis * spectrum.step)[:, None] ** 2
        for axis in (along_x, along_y)
    )
    return np.einsum("kt,kt->t", decay_y, power @ decay_x) / spectrum.area


def _power(values):
    power = np.square(values.real)
    power += np.square(values.imag)
    return power


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
    factor_x = _smoothing(kept_x, columns, width, bandwidth, spectrum.step)
    factor_y = _smoothing(kept_y, rows, height, bandwidth, spectrum.step)[:, None]
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


def _smoothing(kept, nodes, side, bandwidth, step):
    """Gaussian over the responses of spreading and of reading from a lattice of other step."""
    cycles = np.arange(kept) / side
    gaussian = np.exp(-0.5 * (2 * math.pi * bandwidth * cycles) ** 2)
    reading = np.sinc(cycles * side / nodes) ** READING_ORDER
    return gaussian / (reading * _spread_response(2 * math.pi * cycles * step))


def _spread_response(radians):
    """Fourier transform of the spreading spline at frequencies in radians per node."""
    return np.sinc(radians / (2 * math.pi)) ** SPREADING_ORDER


def _without_gaps(values, room):
    """Places from 0 on, every empty stretch between neighbours narrowed to the room."""
    order = np.argsort(values)
    steps = np.minimum(np.diff(values[order]), room)
    places = np.zeros(values.size)
    places[order[1:]] = np.cumsum(steps)
    return places


def _spread(columns, rows, weights, shape, progress):
    """Spread records to the nodes of a lattice with a centred B-spline."""
    lattice = np.zeros(shape[0] * shape[1])
    # Neighbours in memory are worth the sort
    order = np.lexsort((columns, rows.astype(np.int64)))
    for start in range(0, order.size, CHUNK):
        part = order[start : start + CHUNK]
        column_nodes, column_shares = _spline_shares(columns[part])
        row_nodes, row_shares = _spline_shares(rows[part])
        first = row_nodes.min() * shape[1]
        nodes = (row_nodes * shape[1] - first)[:, :, None] + column_nodes[:, None, :]
        shares = (row_shares * weights[part, None])[:, :, None] * column_shares[:, None, :]
        # The product of a sparse matrix of a column per record is the quickest loop at hand
        ends = np.arange(len(part) + 1, dtype=np.int32) * SPREADING_ORDER**2
        reach = int(nodes.max()) + 1
        matrix = csc_matrix((shares.ravel(), nodes.ravel(), ends), shape=(reach, len(part)))
        lattice[first : first + reach] += matrix @ np.ones(len(part))
        progress(start / order.size)
    return lattice.reshape(shape)


def _spline_shares(places):
    """Nodes that a centred B-spline reaches from each place, and what each receives.

    The order of the spline is raised one by one (de Boor 1978, A Practical Guide to Splines).
    """
    base = np.floor(places)
    offset = (places - base)[:, None]
    shares = np.ones((places.size, 1))
    for order in range(1, SPREADING_ORDER):
        raised = np.zeros((places.size, order + 1))
        positions = offset + np.arange(order + 1)
        raised[:, :-1] = positions[:, :-1] * shares
        raised[:, 1:] += (order + 1 - positions[:, 1:]) * shares
        shares = raised / order
    taps = SPREADING_ORDER // 2 - np.arange(SPREADING_ORDER)
    return base.astype(np.int32)[:, None] + taps.astype(np.int32), shares
