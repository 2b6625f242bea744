"""Groups of neighbouring records behind which no single contributor can be seen.

A kernel that stands on one address has its peak there, however wide it is, and a hole cut around
it has its centre there. Therefore the records are first brought together in groups of
neighbours (microaggregation: Domingo-Ferrer & Mateo-Sanz 2002, IEEE Trans. Knowl. Data Eng.
14:189) and every kernel stands near the mean place of a group's contributors. What can be read out
of the surface at best are those places. The mean of nine villagers and one on a lonely farm points
at the farm for all who know the village, so the places are moved.
"""

import hashlib
from dataclasses import dataclass, replace

import numpy as np

from .errors import InputError
from .progress import silent

LARGE = 30
# of the radius, times the share of one contributor in the mean place
MOVED = 2.0


@dataclass(frozen=True)
class Groups:
    """Groups of records, (groups,) arrays unless said otherwise.

    Attributes
    ----------
    of_record : (n,) int array
        Group of each record, -1 for records that are not used.
    x, y : float
        Mean place of the group's contributors, whatever they weigh.
    total : float
        Sum of the weights.
    squares : float
        Sum over contributors of the squared weight; a contributor of m groups counts m times,
        which covers the places where kernels of several of his groups overlap.
    radius : float
        Distance from the mean place to the furthest record; the least_count-th nearest
        contributor lies no further.
    contributors : int
        Distinct known contributors.
    """

    of_record: np.ndarray
    x: np.ndarray
    y: np.ndarray
    total: np.ndarray
    squares: np.ndarray
    radius: np.ndarray
    contributors: np.ndarray

    def effective(self):
        """Effective contributors of each group: squared sum over sum of squares (Kish 1965)."""
        return self.total**2 / self.squares


def neighbour_groups(x, y, least, weights=None, contributors=None, progress=silent):
    """Divide records into compact groups of at least so many effective contributors.

    The set is split along its longer side where the squared distances fall most, as long as both
    parts keep `least` effective contributors, (sum w)^2 / sum_c w_c^2, and so on.

    Parameters
    ----------
    x, y : (n,) float arrays
    least : int
    weights : (n,) float array or None
        0 or more.
    contributors : (n,) int array or None
        Codes; -1, unknown, protects nobody and is left out. None: each record is one.
    progress : callable

    Returns
    -------
    Groups

    Raises
    ------
    InputError
        If all records together have fewer effective contributors.
    """
    x, y = np.asarray(x, float), np.asarray(y, float)
    weights = np.ones(len(x)) if weights is None else np.asarray(weights, float)
    codes = np.arange(len(x)) if contributors is None else np.asarray(contributors)
    used = np.flatnonzero((codes >= 0) & (weights > 0))
    codes = np.unique(codes[used], return_inverse=True)[1].reshape(-1)
    x, y, w = x[used], y[used], weights[used]
    behind = np.bincount(codes, w) if len(codes) else np.zeros(1)
    found = behind.sum() ** 2 / max((behind**2).sum(), 1e-300)
    if found < least:
        raise InputError(
            "LEAST_COUNT {}: all records together come from {:.3g} effective contributors "
            "(few, or a few who hold most); no surface of them can be released.",
            least,
            found,
        )
    leaves, waiting, done = [], [np.arange(len(used))], 0
    while waiting:
        part = waiting.pop()
        halves = _split(part, x, y, w, codes, least)
        if halves is None:
            leaves.append(part)
            done += len(part)
            progress(done / len(used))
        else:
            waiting.extend(halves)
    group = np.empty(len(used), np.int64)
    for number, part in enumerate(leaves):
        group[part] = number
    of_record = np.full(len(weights), -1)
    of_record[used] = group
    return _described(of_record, group, len(leaves), x, y, w, codes)


def moved(groups, x, y):
    """The groups with their places moved at random by about as much as one contributor moves them.

    The place is uniform in a disc of radius 2 / contributors (at most a half) times the group's
    radius: what multiplies one contributor's share in the mean to where he lives multiplies the
    move as well. It follows from all records together, so that a run repeats and nothing is gained
    by averaging runs, and only who has all records can undo it.

    Parameters
    ----------
    groups : Groups
    x, y : (n,) float arrays
        The records.

    Returns
    -------
    Groups
        With the radius about the new place.
    """
    used = groups.of_record >= 0
    x, y, of_record = np.asarray(x, float)[used], np.asarray(y, float)[used], groups.of_record[used]
    order = np.lexsort((y, x))
    digest = hashlib.blake2b(x[order].tobytes() + y[order].tobytes(), digest_size=32).digest()
    rng = np.random.default_rng(int.from_bytes(digest, "little"))
    rank = np.argsort(np.lexsort((groups.y, groups.x)))
    share, turn = rng.random((2, len(rank)))[:, rank]
    length = np.minimum(MOVED / groups.contributors, 0.5) * groups.radius * np.sqrt(share)
    place_x = groups.x + length * np.cos(2 * np.pi * turn)
    place_y = groups.y + length * np.sin(2 * np.pi * turn)
    radius = np.zeros(len(rank))
    np.maximum.at(radius, of_record, np.hypot(x - place_x[of_record], y - place_y[of_record]))
    return replace(groups, x=place_x, y=place_y, radius=radius)


def _split(part, x, y, w, codes, least):
    """Two parts with enough effective contributors each, None where there are none."""
    if len(part) < 2 * least:
        return None
    spread_x, spread_y = np.ptp(x[part]), np.ptp(y[part])
    for along in (x, y) if spread_x >= spread_y else (y, x):
        ordered = part[np.argsort(along[part], kind="stable")]
        before = _effective(w[ordered], codes[ordered])[:-1]
        after = _effective(w[ordered][::-1], codes[ordered][::-1])[::-1][1:]
        fine = (before >= least) & (after >= least)
        if len(part) > LARGE * least:
            edge = len(part) // 10
            fine[:edge] = fine[-edge:] = False
        if fine.any():
            gain = np.where(fine, _gain(along[ordered]), -1.0)
            cut = int(np.argmax(gain)) + 1
            return ordered[:cut], ordered[cut:]
    return None


def _effective(w, codes):
    """Effective contributors of the first 1, 2, ... records."""
    order = np.argsort(codes, kind="stable")
    running = np.cumsum(w[order])
    first = np.searchsorted(codes[order], codes[order])
    running -= np.where(first > 0, np.cumsum(w[order])[first - 1], 0.0)
    own = np.empty(len(w))
    own[order] = running
    added = own**2 - (own - w) ** 2
    return np.cumsum(w) ** 2 / np.cumsum(added)


def _gain(along):
    """By how much the squared distances fall when the row is cut after 1, 2, ... records."""
    centred = along - along.mean()
    left = np.cumsum(centred)[:-1]
    count = np.arange(1, len(along))
    return left**2 / count + left**2 / (len(along) - count)


def _described(of_record, group, count, x, y, w, codes):
    pairs, pair = np.unique(group * (codes.max() + 1) + codes, return_inverse=True)
    pair = pair.reshape(-1)
    pair_group, pair_code = pairs // (codes.max() + 1), pairs % (codes.max() + 1)
    share = np.bincount(pair)
    mean_x = np.bincount(pair, x) / share
    mean_y = np.bincount(pair, y) / share
    people = np.bincount(pair_group, minlength=count)
    centre_x = np.bincount(pair_group, mean_x, count) / people
    centre_y = np.bincount(pair_group, mean_y, count) / people
    groups_of = np.bincount(pair_code)
    squares = np.bincount(pair_group, np.bincount(pair, w) ** 2 * groups_of[pair_code], count)
    radius = np.zeros(count)
    np.maximum.at(radius, group, np.hypot(x - centre_x[group], y - centre_y[group]))
    total = np.bincount(group, w, count)
    return Groups(of_record, centre_x, centre_y, total, squares, radius, people)
