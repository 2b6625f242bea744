"""A density surface whole: kernels summed, edges corrected, error and support beside it."""

from dataclasses import dataclass, replace

import numpy as np

from . import edges, surface
from .errors import InputError
from .progress import part, silent

EDGES = ("none", "record", "place")


@dataclass(frozen=True)
class Estimate:
    """A density surface and what is known of its error.

    Attributes
    ----------
    density : (rows, columns) array
        Sum of weighted kernels, corrected at the edges, per unit of the CRS squared.
    squares : (rows, columns) array
        Its variance under Poisson sampling with the bandwidths given, per unit to the fourth.
    inflation : (rows, columns) array or 1.0
        Factor by which the variance is larger because the bandwidths follow the records.
    mask : (rows, columns) array or None
        Share of each pixel inside the boundary.
    inside : (rows, columns) bool array
        Pixels at least half inside the boundary: those that get a value.
    mass : float
        Sum of the weights that the surface holds inside the boundary.
    """

    density: np.ndarray
    squares: np.ndarray
    inflation: np.ndarray
    mask: np.ndarray
    inside: np.ndarray
    mass: float

    @property
    def effective(self):
        """Effective number of records behind each pixel, see surface.effective_records."""
        return surface.effective_records(self.density, self.squares)

    @property
    def relative_error(self):
        """Standard error over density, (rows, columns) array; NaN where nothing reaches.

        That of surface.relative_standard_error times the root of the inflation, so with adaptive
        bandwidths above the effective records to the power of -1/2.
        """
        plain = surface.relative_standard_error(self.density, self.squares)
        return plain * np.sqrt(self.inflation)


def estimate(
    x, y, weights, bandwidths, grid, kernel="gaussian", mask=None, edge="none", inflation=1.0,
    progress=silent,
):  # fmt: skip
    """Density surface with its error, corrected at the boundary.

    Parameters
    ----------
    x, y, weights, bandwidths : (n,) arrays
        Units of the working CRS; weights not negative.
    grid : Grid
    kernel : {"gaussian", "quartic"}
    mask : (rows, columns) array, optional
        From edges.boundary_mask.
    edge : {"none", "record", "place"}
        By record: record i weighs w_i / q_i, which keeps the total (Diggle 1985, Appl. Stat.
        34:138). By place: the sum is divided by q at the pixel, which keeps a uniform pattern flat
        up to the border (Jones 1993, Stat. Comput. 3:135). Both need a mask.
    inflation : (n,) array or float
        Of the variance around each record, from adaptation.adapt_bandwidths.
    progress : callable

    Returns
    -------
    Estimate
    """
    if edge not in EDGES:
        raise InputError("EDGE must be none, record or place; found {!r}.", edge)
    edge = "none" if mask is None else edge
    weights = np.broadcast_to(np.asarray(weights, float), np.shape(x))
    # shares of the work: factors, density, squares, inflation, shares at places
    begins = {"none": (0.0, 0.3), "record": (0.3, 0.5), "place": (0.0, 0.2)}[edge]
    ends = {"none": (0.8, 1.0), "record": (0.85, 1.0), "place": (0.5, 0.65)}[edge]
    if edge == "record":
        report = part(progress, 0.0, begins[0])
        weights = weights / edges.record_factors(x, y, bandwidths, mask, grid, kernel, report)
    records = (x, y, weights, bandwidths)
    density = surface.adaptive_surface(*records, grid, kernel, part(progress, *begins))
    report = part(progress, begins[1], ends[0])
    squares = surface.sampling_variance(*records, density, grid, kernel, report)
    inflation = _at_places(inflation, records, density, grid, kernel, part(progress, *ends))
    if mask is None:
        mass = float(density.sum()) * grid.cell_area
        return Estimate(density, squares, inflation, None, np.ones(grid.shape, bool), mass)
    if edge == "place":
        share = _share_at_places(records, density, mask, grid, kernel, part(progress, ends[1], 1.0))
        density = density / share
        squares = squares / np.square(share)
    mass = float((density * mask).sum()) * grid.cell_area
    return Estimate(density, squares, inflation, mask, mask >= 0.5, mass)


def _at_places(inflation, records, density, grid, kernel, progress):
    """Mean inflation over the records that make up the surface, at every pixel."""
    x, y, weights, bandwidths = records
    inflation = np.broadcast_to(np.asarray(inflation, float), np.shape(x))
    least, most = float(inflation.min()), float(inflation.max())
    if least == most:
        return most
    moments = surface.adaptive_surface(
        x, y, weights * inflation, bandwidths, grid, kernel, progress
    )
    mean = np.divide(moments, density, out=np.full(grid.shape, most), where=density > 0)
    return np.clip(mean, least, most, out=mean)


def _share_at_places(records, density, mask, grid, kernel, progress):
    bandwidths = edges.bandwidth_at_places(
        *records, density, grid, kernel, part(progress, 0.0, 0.5)
    )
    share = edges.place_factors(bandwidths, mask, grid, kernel, part(progress, 0.5, 1.0))
    # far outside the boundary the share vanishes, and nothing there is shown
    return np.maximum(share, 0.05)


def without_noise(found, limit):
    """An estimate that has a value only where its relative standard error is within a limit.

    Parameters
    ----------
    found : Estimate
    limit : float
        Above 0; 0.3 keeps pixels with at least 1 / 0.3^2 = 11.1 effective records.

    Returns
    -------
    Estimate
    """
    if not limit > 0:
        raise InputError("MOST_ERROR must be above 0; found {}.", limit)
    with np.errstate(invalid="ignore"):
        steady = found.relative_error <= limit
    return replace(found, inside=found.inside & steady)
