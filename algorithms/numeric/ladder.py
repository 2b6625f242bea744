"""Bandwidths grouped into bands, each served by a short ladder of rungs.

Within a band a Gaussian of any bandwidth is a blend of the Gaussians at the rungs: Lagrange
interpolation in log h over Chebyshev nodes, whose weights add up to 1, so that mass is kept
exactly. A band of ratio 1.55 needs five rungs for an error below 5e-5 of the kernel's own peak.
"""

from dataclasses import dataclass

import numpy as np

BAND_RATIO = 1.55
# widest ratio of bandwidths that 1, 2, ... rungs serve within 5e-5 of a Gaussian's peak; found
# by bisection on the largest error over bandwidths and distances, and checked by a test
RUNG_RATIOS = (1.0 + 1e-7, 1.014, 1.109, 1.318, BAND_RATIO)


@dataclass(frozen=True)
class Band:
    """Bandwidths that one set of rungs serves.

    Attributes
    ----------
    narrowest, widest : float
        Smallest and largest bandwidth in the band.
    rungs : (m,) array
        Bandwidths that are worked with.
    records : (n,) int array
        Numbers of the records in the band.
    """

    narrowest: float
    widest: float
    rungs: np.ndarray
    records: np.ndarray

    def shares(self, bandwidths):
        """Weights of the rungs that stand for each bandwidth, (n, m) array; rows add up to 1."""
        places, nodes = np.log(bandwidths), np.log(self.rungs)
        if len(nodes) == 1:
            return np.ones((len(places), 1))
        # over -1 to 1 the polynomials may be written in powers without loss
        middle, half = 0.5 * (nodes[0] + nodes[-1]), 0.5 * (nodes[-1] - nodes[0])
        powers = np.vander((places - middle) / half, len(nodes))
        return powers @ np.linalg.inv(np.vander((nodes - middle) / half))


def lagrange_weights(places, nodes):
    """Weights of polynomial interpolation through nodes.

    Parameters
    ----------
    places : (n,) array
    nodes : (m,) array
        All different.

    Returns
    -------
    (n, m) array
        Rows add up to 1.
    """
    apart = np.asarray(places)[:, None] - nodes
    weights = np.ones_like(apart)
    for own, node in enumerate(nodes):
        for other, place in enumerate(nodes):
            if other != own:
                weights[:, own] *= apart[:, other] / (node - place)
    return weights


def rungs_between(narrowest, widest):
    """Bandwidths of the rungs that serve a band: as few as its width allows.

    Parameters
    ----------
    narrowest, widest : float
        Ratio at most BAND_RATIO.

    Returns
    -------
    (m,) array, ascending
    """
    ratio = widest / narrowest
    count = 1 + int(np.searchsorted(RUNG_RATIOS[:-1], ratio))
    middle, half = 0.5 * np.log(narrowest * widest), 0.5 * np.log(ratio)
    angles = (2 * np.arange(count)[::-1] + 1) * np.pi / (2 * count)
    return np.exp(middle + half * np.cos(angles))


def bands(bandwidths):
    """Group records by bandwidth into bands of ratio BAND_RATIO at most.

    Parameters
    ----------
    bandwidths : (n,) array
        Above 0.

    Returns
    -------
    list of Band, from the narrowest
    """
    narrowest = bandwidths.min()
    number = np.floor(np.log(bandwidths / narrowest) / np.log(BAND_RATIO) + 1e-9)
    number = number.astype(np.uint16)
    order = np.argsort(number, kind="stable")
    starts = np.flatnonzero(np.diff(number[order])) + 1
    groups = []
    for records in np.split(order, starts):
        held = bandwidths[records]
        low, high = float(held.min()), float(held.max())
        groups.append(Band(low, high, rungs_between(low, high), records))
    return groups
