"""A density surface behind every pixel of which enough contributors stand, and the check of it."""

from dataclasses import dataclass

import numpy as np

from .edges import bandwidth_at_places, place_factors
from .errors import InputError
from .microaggregation import Groups, moved, neighbour_groups
from .pinpoint import Attack, attack
from .progress import part, silent
from .surface import adaptive_surface, effective_records, sampling_variance

# Below this share of the peak lies the error of the surface; what is there is set to zero.
FAINT = 2e-4
# The effective contributors are worked out from two such surfaces.
ACCURACY = 1e-3
# A kernel that loses more than this beyond the boundary is not made up for in full.
LEAST_KEPT = 0.1
# Kernels wider than the least bandwidth come in such steps: a radius tells how far one record lies.
STEP = 2.0**0.5


class PointsAtAddressesError(InputError):
    """The attack on the finished surface found more single addresses than chance explains."""


@dataclass(frozen=True)
class SafeSurface:
    """The surface and what was found about it.

    Attributes
    ----------
    density : (rows, columns) float array
        Per unit of the CRS squared; NaN outside the area and where too few contributors stand.
    groups : microaggregation.Groups
        Confidential.
    bandwidths : (groups,) float array
    least_effective : float
        Fewest effective contributors behind a pixel with a value above zero.
    refused : int
        Pixels that lost their value because too few contributors stand behind them.
    attack : pinpoint.Attack
        What the search for single addresses found.
    """

    density: np.ndarray
    groups: Groups
    bandwidths: np.ndarray
    least_effective: float
    refused: int
    attack: Attack


def hidden_groups(x, y, least, weights=None, contributors=None, progress=silent):
    """Groups of neighbours with their places moved; see `microaggregation`."""
    return moved(neighbour_groups(x, y, least, weights, contributors, progress), x, y)


def kernel_widths(bandwidth, groups):
    """The least bandwidth, widened in steps until it reaches over each group.

    Parameters
    ----------
    bandwidth : float
    groups : microaggregation.Groups

    Returns
    -------
    (groups,) float array
    """
    wider = np.maximum(groups.radius / bandwidth, 1.0)
    return bandwidth * STEP ** np.ceil(np.log(wider) / np.log(STEP) - 1e-9)


def effective_behind(groups, widths, density, grid, progress=silent):
    """At least so many effective contributors stand behind each pixel.

    With S_g = sum_c w_gc^2 and e_g = W_g^2 / S_g, (sum k W)^2 / sum k^2 S is not below
    sum k W / sum (k W / e), the harmonic mean of the groups' own effective contributors, as no
    k_g W_g exceeds their sum. Sums of squares tell of several groups together, but in tails they
    drown in the error of narrower kernels; the mean does not, and lets the tail of a group keep
    what the group has. So the larger of the two counts, squares only where they are certain.

    Parameters
    ----------
    groups : microaggregation.Groups
    widths : (groups,) float array
        Bandwidths, units of the CRS.
    density : (rows, columns) float array
        The surface of the groups.
    grid : Grid
    progress : callable

    Returns
    -------
    (rows, columns) float array
        0 where nothing reaches.
    """
    squares = sampling_variance(
        groups.x, groups.y, np.sqrt(groups.squares), widths, density, grid,
        progress=part(progress, 0.0, 0.7),
    )  # fmt: skip
    thinned = adaptive_surface(
        groups.x, groups.y, groups.total / groups.effective(), widths, grid,
        progress=part(progress, 0.7, 1.0),
    )  # fmt: skip
    mean = np.divide(density, thinned, out=np.zeros_like(density), where=thinned > 0)
    # no mean leaves the range of what it is of, whatever rounding makes of the tails
    mean = np.clip(mean, 0.0, groups.effective().max(initial=0.0))
    return np.maximum(mean, effective_records(density, squares))


def safe_surface(
    x, y, least, bandwidth, grid, rng, weights=None, contributors=None, mask=None, progress=silent
):
    """Make the surface, check it and attack it.

    Every kernel stands near the mean place of a group of at least `least` effective contributors
    and is at least as wide as the group reaches, so no further from its `least`-th nearest
    contributor. Behind a pixel with kernel values k_g stand (sum k W)^2 / sum_c (sum_g k_g w_gc)^2
    effective contributors (Kish 1965), which is not below the least of the groups' own.

    Parameters
    ----------
    x, y : (n,) float arrays
    least : int
    bandwidth : float
        Least bandwidth, units of the CRS.
    grid : Grid
    rng : numpy.random.Generator
        Moves the peaks about to reckon with chance.
    weights, contributors : arrays or None
        As for `microaggregation.neighbour_groups`.
    mask : (rows, columns) float array or None
        Share of each pixel inside the area; the loss beyond it is made up for.
    progress : callable

    Returns
    -------
    SafeSurface

    Raises
    ------
    PointsAtAddressesError
        If the attack finds more single addresses than chance explains.
    InputError
        If nothing is left.
    """
    groups = hidden_groups(x, y, least, weights, contributors, part(progress, 0.0, 0.2))
    widths = kernel_widths(bandwidth, groups)
    density = adaptive_surface(
        groups.x, groups.y, groups.total, widths, grid, progress=part(progress, 0.2, 0.4)
    )
    effective = effective_behind(groups, widths, density, grid, part(progress, 0.4, 0.55))
    # the squares hold every contributor's groups together, so the ratio is not below this
    floor = float(groups.effective().min())
    few = (effective < least * (1 - ACCURACY)) if floor < least else np.zeros(grid.shape, bool)
    faint = density <= FAINT * density.max(initial=0.0)
    if mask is not None:
        inside = mask > 0
        at_places = bandwidth_at_places(
            groups.x, groups.y, groups.total, widths, density, grid, progress=silent
        )
        kept = place_factors(at_places, mask, grid)
        density = np.where(inside, density / np.maximum(kept, LEAST_KEPT), np.nan)
    refused = few & ~faint
    density[faint & ~np.isnan(density)] = 0.0
    density[refused] = np.nan
    valued = np.isfinite(density) & (density > 0)
    if not valued.any():
        raise InputError(
            "No pixel has enough contributors behind it; choose a larger BANDWIDTH or a lower "
            "LEAST_COUNT that the data's owner allows."
        )
    tried = np.unique([bandwidth, max(np.median(widths), 1.5 * bandwidth)])
    result = attack(
        density, grid, tried, x, y, contributors, max(bandwidth / 3, grid.cell), rng,
        part(progress, 0.55, 1.0),
    )  # fmt: skip
    if result.succeeded:
        raise PointsAtAddressesError(
            "The finished surface points at {} of {} addresses that lie by themselves, "
            "against {:.1f} by chance; nothing is released. Choose a larger BANDWIDTH or "
            "LEAST_COUNT, and name the CONTRIBUTOR where one stands behind several records.",
            result.found,
            result.addresses,
            result.by_chance,
        )
    return SafeSurface(
        density, groups, widths, float(max(effective[valued].min(), floor)), int(refused.sum()),
        result,
    )  # fmt: skip
