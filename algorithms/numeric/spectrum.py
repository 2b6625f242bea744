"""Sums of Gaussians of many bandwidths over a pixel lattice, and their transpose.

Everything here is in pixels: rows and columns count from 0 at the centre of the first pixel, and
bandwidths are in pixels. Three routes share the work, each band of bandwidths takes the cheapest:

- windows: the pixels around each record are visited, exactly; for narrow kernels and few records;
- spectrum: records are spread on a periodic lattice no finer than the band needs, the spreading
  is divided out in the Fourier domain, where the Gaussian is exact, and the result is added into
  the low-frequency block of one common spectrum, brought back by one inverse transform
  (Greengard & Lee 2004, SIAM Rev. 46:443; partitioned evaluation as in Davies & Baddeley 2018,
  Stat. Comput. 28:937);
- coarse: kernels wider than the lattice itself are summed on a coarser lattice and brought to the
  pixels by a cubic spline, so that their reach need not be padded for.
"""

import math
from dataclasses import dataclass

import numpy as np
from scipy.fft import irfft2, next_fast_len, rfft2
from scipy.interpolate import make_interp_spline

from .kernels import GAUSSIAN
from .ladder import Band, bands
from .progress import part, silent
from .spreading import (
    WIDTH,
    gather,
    gather_gaussians,
    spread,
    sum_gaussians,
    window_spectrum,
)

# a Gaussian this many nodes wide has faded to 2e-5 at the Nyquist frequency
NODES_PER_BANDWIDTH = 1.5
# nodes per bandwidth that a cubic spline needs to stay within 4e-6 of the peak
_SPLINE_NODES = 8
_WORKERS = 2
_ROWS = 32


@dataclass(frozen=True)
class Route:
    """How a set of records is summed: bands by windows, by spectrum, and on a coarser lattice."""

    windows: list
    spectrum: list
    coarse: np.ndarray
    period: tuple


def band_lattice(band, period):
    """Nodes along both axes that the narrowest rung of a band needs over a period.

    Parameters
    ----------
    band : ladder.Band
    period : (int, int)
        Rows and columns in pixels, from `common_period`.

    Returns
    -------
    (int, int)
    """
    nodes = []
    for length, real in zip(period, (False, True)):
        wanted = max(WIDTH, math.ceil(NODES_PER_BANDWIDTH * length / band.rungs[0]))
        nodes.append(min(next_fast_len(wanted, real), length))
    return tuple(nodes)


# The costs are in nanoseconds, measured on one core; only their ratios matter.
def _window_cost(band):
    side = 2 * math.ceil(GAUSSIAN.reach * band.widest) + 1
    return len(band.records) * (200 + 40 * side + 1.5 * side * side)


def _spectrum_cost(band, period):
    nodes = math.prod(band_lattice(band, period))
    return len(band.rungs) * (30 * nodes + 60 * len(band.records)) + 350 * len(band.records) + 1e6


def common_period(row, column, bandwidths, shape):
    """Lengths at which the lattice may repeat without a kernel meeting its own copy.

    Parameters
    ----------
    row, column, bandwidths : (n,) arrays
        In pixels.
    shape : (int, int)

    Returns
    -------
    (int, int)
        Rows and columns in pixels, of sizes that transform fast.
    """
    reach = GAUSSIAN.reach * bandwidths
    lengths = []
    for place, pixels, real in ((row, shape[0], False), (column, shape[1], True)):
        after, before = float((place + reach).max()), float((place - reach).min())
        needed = max(after + 1, pixels - before, pixels, WIDTH)
        lengths.append(next_fast_len(math.ceil(needed), real))
    return tuple(lengths)


def plan(row, column, bandwidths, shape):
    """Choose the route of every record that can reach the lattice.

    Parameters
    ----------
    row, column, bandwidths : (n,) arrays
        In pixels.
    shape : (int, int)

    Returns
    -------
    Route
    """
    reach = GAUSSIAN.reach * bandwidths + 1.0
    kept = np.flatnonzero(
        (row > -reach)
        & (row < shape[0] - 1 + reach)
        & (column > -reach)
        & (column < shape[1] - 1 + reach)
    )
    if not len(kept):
        return Route([], [], kept, shape)
    groups = [
        Band(band.narrowest, band.widest, band.rungs, kept[band.records])
        for band in bands(bandwidths[kept])
    ]
    limit = max(128.0, max(shape) / 2)
    wide = [band for band in groups if GAUSSIAN.reach * band.widest > limit]
    rest = groups[: len(groups) - len(wide)]
    able = [band for band in rest if band.rungs[0] >= NODES_PER_BANDWIDTH]
    period = shape
    if able:
        records = np.concatenate([band.records for band in able])
        period = common_period(row[records], column[records], bandwidths[records], shape)
    chosen = [band for band in able if _spectrum_cost(band, period) < _window_cost(band)]
    saved = sum(_window_cost(band) - _spectrum_cost(band, period) for band in chosen)
    if saved < 30 * math.prod(period):
        chosen = []
    by_spectrum = {id(band) for band in chosen}
    coarse = np.concatenate([band.records for band in wide]) if wide else kept[:0]
    return Route([b for b in rest if id(b) not in by_spectrum], chosen, coarse, period)


def _low_block(lattice, period):
    """Frequencies below a lattice's Nyquist: rows here and in the common spectrum, and columns."""
    half = (lattice[0] - 1) // 2
    rows = [(slice(0, half + 1), slice(0, half + 1))]
    if half:
        rows.append((slice(lattice[0] - half, lattice[0]), slice(period[0] - half, period[0])))
    return rows, (lattice[1] - 1) // 2 + 1


def band_transfers(band, lattice, period):
    """What the rungs of a band let pass: Gaussian over spreading window, along each axis.

    Parameters
    ----------
    band : ladder.Band
    lattice, period : (int, int)
        From `band_lattice` and `common_period`.

    Returns
    -------
    along_rows, along_columns : (frequencies, m) arrays
    """
    axes = []
    for nodes, length, frequency in (
        (lattice[0], period[0], np.fft.fftfreq(lattice[0])),
        (lattice[1], period[1], np.fft.rfftfreq(lattice[1])),
    ):
        angle = 2 * np.pi * frequency
        # bandwidth in nodes of this lattice
        width = band.rungs * (nodes / length)
        fade = np.exp(-0.5 * np.square(angle[:, None] * width))
        axes.append(fade / window_spectrum(angle)[:, None])
    return axes


def band_places(row, column, band, lattice, period):
    """Places of a band's records in nodes of its lattice, within one period.

    Parameters
    ----------
    row, column : (n,) arrays
        Of all records, in pixels.
    band : ladder.Band
    lattice, period : (int, int)
        From `band_lattice` and `common_period`.

    Returns
    -------
    row, column : (records of the band,) arrays
        0 to below the number of nodes.
    """
    places = []
    for place, nodes, length in ((row, lattice[0], period[0]), (column, lattice[1], period[1])):
        place = np.mod(place[band.records] * (nodes / length), nodes)
        # a value a rounding error below 0 comes out of the modulus as the length itself
        places.append(np.where(place >= nodes, 0.0, place))
    return places


def _window_reach(bandwidths):
    # a kernel narrower than a pixel still has to reach the centre nearest to it
    return math.sqrt(0.5 + (GAUSSIAN.reach * float(bandwidths.max())) ** 2)


def _coarser(row, column, bandwidths, shape):
    """A coarser lattice for wide kernels: places and bandwidths in its nodes, its shape, and the
    matrices that bring its values to the pixels along rows and along columns."""
    step = float(bandwidths.min()) / _SPLINE_NODES
    margin = 4
    places, matrices = [], []
    for place, pixels in ((row, shape[0]), (column, shape[1])):
        places.append(place / step + margin)
        nodes = math.ceil((pixels - 1) / step) + 2 * margin + 1
        spline = make_interp_spline(np.arange(nodes), np.eye(nodes), k=3)
        matrices.append(spline(np.arange(pixels) / step + margin))
    coarse_shape = tuple(matrix.shape[1] for matrix in matrices)
    return places[0], places[1], bandwidths / step, step, coarse_shape, matrices


def gaussian_sum(row, column, weights, bandwidths, shape, progress=silent):
    """Sum of weighted Gaussian densities at every pixel centre, per pixel area.

    Parameters
    ----------
    row, column, weights, bandwidths : (n,) arrays
        Places and bandwidths in pixels; places may lie outside the lattice.
    shape : (int, int)
    progress : callable

    Returns
    -------
    (rows, columns) array
    """
    route = plan(row, column, bandwidths, shape)
    total = np.zeros(shape)
    work = _steps(route, progress)
    if len(route.coarse):
        chosen = route.coarse
        r, c, h, step, coarse_shape, (rise, run) = _coarser(
            row[chosen], column[chosen], bandwidths[chosen], shape
        )
        coarse = gaussian_sum(r, c, weights[chosen], h, coarse_shape, next(work))
        total += rise @ (coarse / step**2) @ run.T
    for band in route.windows:
        chosen = band.records
        h = bandwidths[chosen]
        total += sum_gaussians(
            row[chosen], column[chosen], weights[chosen], h, _window_reach(h), shape, next(work)
        )
    if route.spectrum:
        total += _by_spectrum(row, column, weights, bandwidths, shape, route, work)
    progress(1.0)
    return total


def _steps(route, progress):
    """One progress callable after another, for the parts of a route in their order."""
    sizes = [len(route.coarse)] if len(route.coarse) else []
    sizes += [len(band.records) for band in route.windows]
    sizes += [len(band.records) for band in route.spectrum]
    ends = np.cumsum(sizes) / max(sum(sizes), 1)
    return iter([part(progress, *stretch) for stretch in zip(np.append(0.0, ends), ends)])


def _by_spectrum(row, column, weights, bandwidths, shape, route, work):
    period = route.period
    common = np.zeros((period[0], period[1] // 2 + 1), complex)
    for band in route.spectrum:
        progress = next(work)
        lattice = band_lattice(band, period)
        shares = band.shares(bandwidths[band.records]) * weights[band.records][:, None]
        planes = spread(*band_places(row, column, band, lattice, period), shares, lattice, progress)
        _add_rungs(common, planes, band, period, progress)
    surface = irfft2(common, s=period, workers=_WORKERS, overwrite_x=True)
    return surface[: shape[0], : shape[1]]


def _add_rungs(common, planes, band, period, progress):
    """Add the smoothed spectra of a band's planes into the low block of the common spectrum."""
    lattice = planes.shape[:2]
    along_rows, along_columns = band_transfers(band, lattice, period)
    blocks, width = _low_block(lattice, period)
    for rung in range(planes.shape[2]):
        progress(1.0)
        transform = rfft2(planes[:, :, rung], workers=_WORKERS)
        for source, target in blocks:
            # a few rows at a time, so that they are still in the cache for the second step
            for start in range(0, source.stop - source.start, _ROWS):
                own = slice(source.start + start, min(source.start + start + _ROWS, source.stop))
                shift = target.start - source.start
                common[own.start + shift : own.stop + shift, :width] += transform[own, :width] * (
                    along_rows[own, rung][:, None] * along_columns[:width, rung]
                )


def gaussian_mass(row, column, bandwidths, raster, progress=silent):
    """Mass of each record's Gaussian that falls on a raster: the transpose of gaussian_sum.

    Parameters
    ----------
    row, column, bandwidths : (n,) arrays
        Places and bandwidths in pixels.
    raster : (rows, columns) array
        Share of each pixel that counts, 0 to 1.

    Returns
    -------
    (n,) array
        sum over pixels of raster * K_h(pixel - place); equal to the sum of the raster times
        gaussian_sum of that record alone to rounding error.
    """
    shape = raster.shape
    route = plan(row, column, bandwidths, shape)
    mass = np.zeros(len(row))
    work = _steps(route, progress)
    if len(route.coarse):
        chosen = route.coarse
        r, c, h, step, _, (rise, run) = _coarser(
            row[chosen], column[chosen], bandwidths[chosen], shape
        )
        mass[chosen] = gaussian_mass(r, c, h, rise.T @ raster @ run / step**2, next(work))
    for band in route.windows:
        chosen = band.records
        h = bandwidths[chosen]
        mass[chosen] = gather_gaussians(
            row[chosen], column[chosen], h, _window_reach(h), raster, next(work)
        )
    if route.spectrum:
        period = route.period
        common = rfft2(raster, s=period, workers=_WORKERS)
        for band in route.spectrum:
            mass[band.records] = _mass_of_band(
                row, column, bandwidths, band, common, period, next(work)
            )
    progress(1.0)
    return mass


def _mass_of_band(row, column, bandwidths, band, common, period, progress):
    lattice = band_lattice(band, period)
    along_rows, along_columns = band_transfers(band, lattice, period)
    blocks, width = _low_block(lattice, period)
    planes = np.empty((*lattice, len(band.rungs)))
    scale = math.prod(lattice) / math.prod(period)
    for rung in range(len(band.rungs)):
        progress(0.0)
        low = np.zeros((lattice[0], lattice[1] // 2 + 1), complex)
        for source, target in blocks:
            low[source, :width] = common[target, :width]
        low[:, :width] *= along_columns[:width, rung]
        low *= along_rows[:, rung][:, None] * scale
        planes[:, :, rung] = irfft2(low, s=lattice, workers=_WORKERS)
    places = band_places(row, column, band, lattice, period)
    return gather(*places, band.shares(bandwidths[band.records]), planes, progress)
