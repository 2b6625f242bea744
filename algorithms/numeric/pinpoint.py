"""Attack on a finished surface: can single addresses be read out of it?

The surface is searched for peaks, and sharpened by deconvolution (Richardson 1972; Lucy 1974)
and searched again. An address that lies by itself counts as found when a peak comes within the
tolerance. Some are met by chance; how many, the same peaks say when they are moved about a little.
"""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import center_of_mass, gaussian_filter, label, maximum_filter
from scipy.spatial import cKDTree
from scipy.stats import poisson

from .progress import part, silent

ROUNDS = 25
# a deconvolution needs no more pixels to a bandwidth than this
FINE = 3
MOVES = 20
CHANCE = 1e-3


@dataclass(frozen=True)
class Attack:
    """What came of it.

    Attributes
    ----------
    addresses : int
        Addresses that lie by themselves.
    found : int
        Those that a peak points at.
    by_chance : float
        How many the moved peaks point at on average.
    """

    addresses: int
    found: int
    by_chance: float

    @property
    def succeeded(self):
        """Whether more were found than chance explains (Poisson tail below one in a thousand)."""
        return bool(
            self.found > 0 and poisson.sf(self.found - 1, max(self.by_chance, 0.1)) < CHANCE
        )


def peaks(surface):
    """Local maxima above zero, refined to parts of a pixel by a parabola along each axis.

    Parameters
    ----------
    surface : (rows, columns) float array
        NaN where there is no value.

    Returns
    -------
    rows, columns : float arrays
        In pixels from the centre of the first.
    """
    filled = np.where(np.isfinite(surface), surface, 0.0)
    top = (filled == maximum_filter(filled, 3, mode="constant")) & (filled > 0)
    rows, columns = np.nonzero(top)
    padded = np.pad(filled, 1)
    here = filled[rows, columns]
    south, north = padded[rows + 2, columns + 1], padded[rows, columns + 1]
    west, east = padded[rows + 1, columns], padded[rows + 1, columns + 2]
    return rows + _vertex(north, here, south), columns + _vertex(west, here, east)


def _vertex(before, here, after):
    bend = before - 2 * here + after
    shift = np.divide(before - after, 2 * bend, out=np.zeros(len(here)), where=bend < 0)
    return np.clip(shift, -0.5, 0.5)


def sharpened(surface, bandwidth, rounds=ROUNDS, progress=silent):
    """Richardson-Lucy deconvolution of a surface by a Gaussian.

    Parameters
    ----------
    surface : (rows, columns) float array
    bandwidth : float
        In pixels.
    """
    seen = np.maximum(np.where(np.isfinite(surface), surface, 0.0), 0.0)
    estimate = seen + 1e-12 * seen.max(initial=0.0)
    for step in range(rounds):
        progress(step / rounds)
        blurred = gaussian_filter(estimate, bandwidth, mode="constant", truncate=4)
        ratio = np.divide(seen, blurred, out=np.zeros_like(seen), where=blurred > 0)
        estimate = estimate * gaussian_filter(ratio, bandwidth, mode="constant", truncate=4)
    return estimate


def holes(surface):
    """Centres of the gaps without a value that are closed in by values, rows and columns."""
    missing, count = label(~np.isfinite(surface))
    edge = set(np.unique(np.concatenate([missing[[0, -1]].ravel(), missing[:, [0, -1]].ravel()])))
    inner = [number for number in range(1, count + 1) if number not in edge]
    middle = np.array(center_of_mass(missing > 0, missing, inner)).reshape(-1, 2)
    return middle[:, 0], middle[:, 1]


def attack(surface, grid, bandwidths, x, y, contributors, tolerance, rng, progress=silent):
    """Look for single addresses in a finished surface.

    Parameters
    ----------
    surface : (rows, columns) float array
    grid : Grid
    bandwidths : sequence of float
        Bandwidths that the attacker tries, units of the CRS.
    x, y : (n,) float arrays
        True places.
    contributors : (n,) int array or None
    tolerance : float
        An address is found when a peak comes this near.
    rng : numpy.random.Generator
    progress : callable

    Returns
    -------
    Attack
    """
    places = [peaks(surface), holes(surface)]
    for number, h in enumerate(bandwidths):
        factor = max(1, int(h / grid.cell / FINE))
        coarse = _in_blocks(surface, factor)
        width = h / grid.cell / factor
        share = part(progress, number / len(bandwidths), (number + 1) / len(bandwidths))
        found = peaks(sharpened(coarse, width, progress=share))
        places.append(tuple((line + 0.5) * factor - 0.5 for line in found))
    rows, columns = (np.concatenate(column) for column in zip(*places))
    candidates = np.column_stack(
        [grid.left + (columns + 0.5) * grid.cell, grid.top - (rows + 0.5) * grid.cell]
    )
    alone = _alone(x, y, contributors, 4 * tolerance)
    if not len(alone) or not len(candidates):
        return Attack(len(alone), 0, 0.0)
    near = cKDTree(alone)

    def hits(places):
        distance, which = near.query(places, distance_upper_bound=tolerance)
        return len(np.unique(which[np.isfinite(distance)]))

    chance = []
    for _ in range(MOVES):
        angle = rng.uniform(0, 2 * np.pi, len(candidates))
        length = rng.uniform(2, 4, len(candidates)) * tolerance
        moved = candidates + length[:, None] * np.column_stack([np.cos(angle), np.sin(angle)])
        chance.append(hits(moved))
    return Attack(len(alone), hits(candidates), float(np.mean(chance)))


def _in_blocks(surface, factor):
    """Sums over square blocks of pixels, 0 where there is no value."""
    filled = np.where(np.isfinite(surface), surface, 0.0)
    rows, columns = (-(-size // factor) for size in filled.shape)
    padded = np.zeros((rows * factor, columns * factor))
    padded[: filled.shape[0], : filled.shape[1]] = filled
    return padded.reshape(rows, factor, columns, factor).sum(axis=(1, 3))


def _alone(x, y, contributors, distance):
    """Places that have no other contributor within a distance."""
    places = np.column_stack([x, y])
    owner = np.arange(len(places)) if contributors is None else np.asarray(contributors)
    spots, spot = np.unique(places, axis=0, return_inverse=True)
    spot = spot.reshape(-1)
    pairs = np.unique(np.column_stack([spot, owner]), axis=0)
    people = np.bincount(pairs[:, 0], minlength=len(spots))
    crowd = cKDTree(spots).query_ball_point(spots, distance, return_length=True)
    return spots[(people == 1) & (crowd == 1)]
