"""Counts with two-sided geometric noise, drawn exactly: differential privacy for whole numbers.

A count c is published as c + K with P(K = k) = (1 - a)/(1 + a) a^|k|, a = exp(-epsilon / s), s
being the most that one person can change all counts together (Ghosh, Roughgarden & Sundararajan
2012, SIAM J. Comput. 41:1673). The draws use whole numbers only, by the rejection scheme of
Canonne, Kamath & Steinke (2020, NeurIPS): noise made from floating-point numbers leaks
(Mironov 2012, CCS, 650).
"""

import math
import os
from fractions import Fraction

import numpy as np

from .errors import InputError
from .progress import silent

FINEST = 10**6


def system_source():
    """Random bytes of the operating system, which nobody can foretell."""
    return os.urandom


def rehearsal_source(rng):
    """Random bytes that can be repeated; a release made with them is a rehearsal only.

    Parameters
    ----------
    rng : numpy.random.Generator
    """
    return rng.bytes


def scale_of(epsilon, sensitivity):
    """epsilon / sensitivity as a fraction with a denominator of at most a million, never above.

    Raises
    ------
    InputError
        If epsilon is not above 0 (and at most 50), or so small that no noise of use is left.
    """
    if not (math.isfinite(epsilon) and 0 < epsilon <= 50):
        raise InputError("EPSILON must be above 0 and at most 50; found {}.", epsilon)
    exact = Fraction(epsilon) / sensitivity
    near = exact.limit_denominator(FINEST)
    if near > exact:
        near = Fraction(math.floor(exact * FINEST), FINEST)
    if near <= 0:
        raise InputError("EPSILON {} is too small to draw noise for; take 0.001 or more.", epsilon)
    return near


def noise_probability(k, epsilon, sensitivity=1):
    """P(K = k) of the noise, float array.

    Parameters
    ----------
    k : int array
    epsilon : float
    sensitivity : int
    """
    a = math.exp(-float(scale_of(epsilon, sensitivity)))
    return (1 - a) / (1 + a) * a ** np.abs(np.asarray(k, float))


def geometric_noise(count, epsilon, sensitivity, source, progress=silent):
    """Draw two-sided geometric noise exactly.

    Parameters
    ----------
    count : int
    epsilon : float
        Privacy budget of the release.
    sensitivity : int
        The most that one contributor changes all counts together.
    source : callable
        Takes a number of bytes, gives so many random bytes.
    progress : callable

    Returns
    -------
    (count,) int64 array
    """
    scale = scale_of(epsilon, sensitivity)
    s, t = scale.numerator, scale.denominator
    drawn = np.zeros(count, np.int64)
    waiting = np.arange(count)
    while len(waiting):
        progress(1.0 - len(waiting) / count)
        size = np.full(len(waiting), t, np.int64)
        low = _below(size, source)
        kept = _exponential_coin(low, size, source)
        kept = np.flatnonzero(kept)
        low = low[kept]
        magnitude = (low + t * _unit_geometric(len(kept), source)) // s
        negative = _below(np.full(len(kept), 2, np.int64), source) == 1
        fine = ~(negative & (magnitude == 0))
        settled = kept[fine]
        drawn[waiting[settled]] = np.where(negative, -magnitude, magnitude)[fine]
        waiting = np.delete(waiting, settled)
    return drawn


def _below(bounds, source):
    """Uniform whole numbers below each bound, by rejection from 64 bits."""
    bounds = bounds.astype(np.uint64)
    result = np.zeros(len(bounds), np.uint64)
    waiting = np.arange(len(bounds))
    while len(waiting):
        bound = bounds[waiting]
        word = np.frombuffer(source(8 * len(waiting)), np.uint64)
        most = np.uint64(2**64 - 1) - (np.uint64(2**64 - 1) % bound + np.uint64(1)) % bound
        fine = word <= most
        result[waiting[fine]] = word[fine] % bound[fine]
        waiting = waiting[~fine]
    return result.astype(np.int64)


def _exponential_coin(numerator, denominator, source):
    """True with probability exp(-numerator/denominator), for fractions of at most 1.

    A run of coins with chances x, x/2, x/3, ... ends after an odd number with probability
    exp(-x) (von Neumann).
    """
    flips = np.ones(len(numerator), np.int64)
    running = np.arange(len(numerator))
    while len(running):
        heads = _below(denominator[running] * flips[running], source) < numerator[running]
        running = running[heads]
        flips[running] += 1
    return flips % 2 == 1


def _unit_geometric(count, source):
    """How often exp(-1) succeeds before it fails."""
    successes = np.zeros(count, np.int64)
    running = np.arange(count)
    while len(running):
        one = np.ones(len(running), np.int64)
        running = running[_exponential_coin(one, one, source)]
        successes[running] += 1
    return successes


def bounded_contributions(contributors, limit, source):
    """Keep at most so many records of every contributor, chosen at random.

    Parameters
    ----------
    contributors : (n,) int array or None
        Codes; -1 where the contributor is unknown: such records are left out, because any number
        of them may be one person's. None: every record is a person of its own.
    limit : int
        Most records to keep of one contributor.
    source : callable

    Returns
    -------
    (n,) bool array, or None when nothing has to be left out
    """
    if limit != int(limit) or limit < 1:
        raise InputError("CONTRIBUTION_LIMIT must be a whole number of 1 or more; found {}.", limit)
    if contributors is None:
        return None
    contributors = np.asarray(contributors)
    shuffle = np.frombuffer(source(8 * len(contributors)), np.uint64)
    order = np.lexsort((shuffle, contributors))
    ordered = contributors[order]
    first = np.searchsorted(ordered, ordered)
    kept = np.empty(len(contributors), bool)
    kept[order] = np.arange(len(ordered)) - first < limit
    return kept & (contributors >= 0)


def not_below_zero(counts):
    """Lift negative counts to zero.

    Post-processing costs no privacy, but lifts the mean of cells near zero: sums over many cells
    come out too large.
    """
    return np.maximum(counts, 0)
