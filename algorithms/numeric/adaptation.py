"""Bandwidths that follow the density: wide where records are sparse, narrow where they crowd."""

import math
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import map_coordinates
from scipy.spatial import cKDTree

from .errors import InputError
from .grid import covering
from .kernels import GAUSSIAN
from .progress import part, silent
from .surface import adaptive_surface, kernel_mass

_BLOCK = 50_000
# a cubic spline on a sixth of the bandwidth follows a Gaussian within 1e-5 of its peak
_PILOT_PIXELS = 6
_MOST_PILOT_PIXELS = 4096 * 4096
# pixels over which the end of a spline is felt
_PILOT_MARGIN = 10


@dataclass(frozen=True)
class Adaptation:
    """Bandwidths of records and how they came about.

    Attributes
    ----------
    bandwidths : (n,) array
        Units of the working CRS.
    pilot : (n,) array
        Pilot density at the records, per unit squared; empty where none was needed.
    mean : float
        Weighted geometric mean of the pilot density.
    narrowest, widest : int
        Records held at the lower and upper limit that trim sets.
    raised : int
        Records whose bandwidth the nearest records or the least bandwidth raised.
    inflation : (n,) array
        Variance of a surface around a record over what it would be had the bandwidths been given
        beforehand, see variance_inflation; 1 where the bandwidth does not follow the pilot.
    """

    bandwidths: np.ndarray
    pilot: np.ndarray
    mean: float
    narrowest: int
    widest: int
    raised: int
    inflation: np.ndarray


def adapt_bandwidths(
    x,
    y,
    weights,
    pilot_bandwidth,
    adapt=0.5,
    trim=5.0,
    least_records=0,
    mask=None,
    grid=None,
    least_bandwidth=0.0,
    progress=silent,
):
    """Bandwidth of every record from a pilot density.

    h_i = h0 (p(x_i) / G)^-a: p a Gaussian surface of the one bandwidth h0, divided by the share of
    the kernel inside the boundary when a mask is given, G its weighted geometric mean over the
    records. Held within h0 / trim and h0 * trim; afterwards no bandwidth is left below the
    distance to the k-th nearest other record, nor below least_bandwidth.

    Parameters
    ----------
    x, y, weights : (n,) arrays
        Places in units of the working CRS; weights not negative, with a sum above 0.
    pilot_bandwidth : float
        h0, above 0; also the bandwidth that a record of middling density gets.
    adapt : float
        a, 0 (one bandwidth everywhere) to 1; 0.5 is the square-root law.
    trim : float
        At least 1.
    least_records : int
        k, counting records and not weights; 0 for no such floor.
    mask, grid : (rows, columns) array and Grid, optional
        Share of each pixel inside the boundary, from edges.boundary_mask, and its grid.
    least_bandwidth : float
        Same units; 0 for no such floor.
    progress : callable

    Returns
    -------
    Adaptation

    Raises
    ------
    InputError
        For settings outside their range, or weights without a positive sum.

    References
    ----------
    Abramson (1982), Ann. Stat. 10:1217; Silverman (1986), Density Estimation, section 5.3.
    """
    x, y = np.asarray(x, float), np.asarray(y, float)
    weights = np.broadcast_to(np.asarray(weights, float), x.shape)
    _check(weights, pilot_bandwidth, adapt, trim, least_records)
    bandwidths, pilot, mean = np.full(x.shape, float(pilot_bandwidth)), np.empty(0), math.nan
    narrowest = widest = 0
    inflation = np.ones(x.shape)
    if adapt > 0:
        report = part(progress, 0.0, 0.5)
        pilot = pilot_density(x, y, weights, pilot_bandwidth, mask, grid, report)
        mean = math.exp(np.average(np.log(pilot), weights=weights))
        wanted = (pilot / mean) ** -adapt
        narrowest = int(np.count_nonzero(wanted < 1 / trim))
        widest = int(np.count_nonzero(wanted > trim))
        follows = (wanted >= 1 / trim) & (wanted <= trim)
        bandwidths *= np.clip(wanted, 1 / trim, trim)
        alone = weights * GAUSSIAN.peak / (pilot_bandwidth**2 * pilot)
        inflation = variance_inflation(bandwidths / pilot_bandwidth, adapt, alone)
    least = np.full(x.shape, float(least_bandwidth))
    if least_records > 0:
        distances = neighbour_distances(x, y, least_records, part(progress, 0.5, 1.0))
        least = np.maximum(least, distances)
    raised = least > bandwidths
    if adapt > 0:
        inflation = np.where(follows & ~raised, inflation, 1.0)
    progress(1.0)
    return Adaptation(
        np.maximum(bandwidths, least),
        pilot,
        mean,
        narrowest,
        widest,
        int(np.count_nonzero(raised)),
        inflation,
    )


def variance_inflation(ratio, adapt, alone):
    """How much more a surface varies because its bandwidths follow the same records.

    One more record at distance r adds its kernel and, through the pilot, narrows those around it.
    With a bandwidth h that changes slowly and a pilot of bandwidth h0, both Gaussian, it changes
    the surface by K_h(r) - a h^2 lap K_s(r) in all, s^2 = h^2 + h0^2: the derivative of a
    Gaussian by log h is h^2 times its Laplacian, and the pilot in the denominator of
    d log h = -a dp / p cancels the density of the records that are narrowed. The integrated
    square, over that of K_h alone, is

        1 + 8 a h^4 / (2 h^2 + h0^2)^2 + 2 a^2 h^6 / (h^2 + h0^2)^3,

    1.51 for a = 0.5 and 2.14 for a = 1 where h = h0. What a record's own kernel adds to the pilot
    at its place is no chance, so a is lessened by that share.

    Parameters
    ----------
    ratio : (n,) array
        h / h0.
    adapt : float
        a.
    alone : (n,) array
        Share of the pilot at a record that its own kernel makes up, 0 to 1.

    Returns
    -------
    (n,) array
        1 or more. To first order in the noise of the pilot; derived for this program, and checked
        by simulation in its tests.
    """
    power = adapt * (1.0 - np.clip(alone, 0.0, 1.0))
    square = np.square(ratio)
    return (
        1.0
        + 8.0 * power * np.square(square / (2.0 * square + 1.0))
        + 2.0 * np.square(power) * (square / (square + 1.0)) ** 3
    )


def _check(weights, pilot_bandwidth, adapt, trim, least_records):
    if not (math.isfinite(pilot_bandwidth) and pilot_bandwidth > 0):
        raise InputError("BANDWIDTH must be above 0; found {}.", pilot_bandwidth)
    if not 0 <= adapt <= 1:
        raise InputError("ADAPT must lie between 0 and 1; found {}.", adapt)
    if not trim >= 1:
        raise InputError("TRIM must be 1 or more; found {}.", trim)
    if least_records < 0:
        raise InputError("LEAST_RECORDS must be 0 or more; found {}.", least_records)
    if not len(weights):
        raise InputError("There are no records to work with.")
    if not (weights.min() >= 0 and weights.sum() > 0):
        raise InputError("Weights must not be negative and must have a sum above 0.")


def pilot_density(x, y, weights, bandwidth, mask=None, grid=None, progress=silent):
    """Density of one Gaussian bandwidth at the records themselves.

    Parameters
    ----------
    x, y, weights, bandwidth, mask, grid
        As for adapt_bandwidths.

    Returns
    -------
    (n,) array
        Per unit of the CRS squared, above 0; with a mask divided by the share of the kernel
        inside it (Jones 1993, Stat. Comput. 3:135).
    """
    bounds = x.min(), y.min(), x.max(), y.max()
    cell = bandwidth / _PILOT_PIXELS
    area = (bounds[2] - bounds[0] + 2 * _PILOT_MARGIN * cell) * (
        bounds[3] - bounds[1] + 2 * _PILOT_MARGIN * cell
    )
    cell = max(cell, math.sqrt(area / _MOST_PILOT_PIXELS))
    own = covering(bounds, cell, margin=_PILOT_MARGIN * cell)
    surface = adaptive_surface(
        x,
        y,
        weights,
        bandwidth,
        own,
        "gaussian",
        part(progress, 0.0, 0.6 if mask is not None else 1),
    )
    places = (own.top - y) / cell - 0.5, (x - own.left) / cell - 0.5
    density = map_coordinates(surface, places, order=3, mode="nearest")
    if mask is not None:
        share = kernel_mass(x, y, bandwidth, mask, grid, "gaussian", part(progress, 0.6, 1.0))
        # a record outside the boundary keeps a density that stays finite
        density /= np.maximum(share, 0.05)
    return np.maximum(density, surface.max() * 1e-12)


def neighbour_distances(x, y, count, progress=silent):
    """Distance from every record to its k-th nearest other record.

    Parameters
    ----------
    x, y : (n,) arrays
    count : int
        k; the farthest record where there are not so many others.

    Returns
    -------
    (n,) array
        Same units; 0 where k others share the place, or for a single record.
    """
    places = np.column_stack([x, y])
    nearest = min(int(count), len(places) - 1)
    if nearest < 1:
        return np.zeros(len(places))
    tree = cKDTree(places)
    distances = np.empty(len(places))
    for start in range(0, len(places), _BLOCK):
        progress(start / len(places))
        chosen = slice(start, start + _BLOCK)
        # the nearest of all is the record itself
        distances[chosen] = tree.query(places[chosen], k=[nearest + 1], workers=2)[0][:, 0]
    return distances
