"""Whether totals rounded on their own tell more about a cell than its own rounding does."""

import numpy as np
from scipy import sparse
from scipy.optimize import linprog

from .errors import InputError
from .outsider import TOLERANCE
from .progress import silent


def rounding_bounds(rounded, base):
    """What a rounded value tells of the true one: (rounded - base, rounded + base), whole numbers.

    Returns
    -------
    lower, upper : float arrays
        The lower one not below 0.
    """
    rounded = np.asarray(rounded, float)
    return np.maximum(rounded - base + 1.0, 0.0), rounded + base - 1.0


def totals_that_tell(members, lower, upper, targets, ranges, totals, progress=silent):
    """Totals to leave out so that every target keeps its range.

    The outsider knows that every published sum lies between its bounds and that no atom is
    negative. While a target can be placed more narrowly than its range, the totals that contain it
    are left out, the smallest first: a wide one left out would tell that some target is at stake.

    Parameters
    ----------
    members : (sums, atoms) csr array of 0 and 1
    lower, upper : (sums,) float arrays
        Bounds that the rounded values give; 0 and infinity for withheld sums.
    targets : (targets, atoms) csr array of 0 and 1
    ranges : (targets, 2) float array
        What must remain possible for each.
    totals : (sums,) bool array
        Sums that may be left out.
    progress : callable

    Returns
    -------
    (sums,) bool array
        Totals that are left out.

    Raises
    ------
    InputError
        A linear programme cannot be solved.
    """
    left_out = np.zeros(len(lower), bool)
    for side in (0, 1):
        open_ones = np.arange(targets.shape[0])
        while len(open_ones):
            progress(0.0)
            used = ~left_out
            reached = _extreme(
                members[used], lower[used], upper[used], targets[open_ones], ranges[open_ones], side
            )
            end = ranges[open_ones, side]
            fine = (reached <= end + TOLERANCE) if side == 0 else (reached >= end - TOLERANCE)
            if fine.any():
                open_ones = open_ones[~fine]
                continue
            inside = (targets[open_ones[:1]] @ members.T).toarray()[0] > 0
            guilty = np.flatnonzero(inside & totals & ~left_out)
            if not len(guilty):
                open_ones = open_ones[1:]
                continue
            size = np.diff(members.indptr)[guilty]
            left_out[guilty[np.argmin(size)]] = True
    return left_out


def _extreme(members, lower, upper, targets, ranges, side):
    """Values of the targets in one table that brings as many as possible to their ends."""
    count, atoms = targets.shape
    sign = 1.0 if side == 0 else -1.0
    # one excess per target beyond its end; the programme makes their sum small
    excess = sparse.hstack([sign * targets, -sparse.identity(count)])
    bounded = sparse.hstack([members, sparse.csr_matrix((members.shape[0], count))])
    finite = np.isfinite(upper)
    limits = np.concatenate([-lower, upper[finite], sign * ranges[:, side]])
    solution = linprog(
        np.concatenate([np.zeros(atoms), np.ones(count)]),
        A_ub=sparse.vstack([-bounded, bounded.tocsr()[finite], excess]).tocsr(),
        b_ub=limits,
        bounds=(0, None),
        method="highs",
    )
    if solution.status != 0:
        raise InputError(
            "The linear programme over the rounded sums could not be solved ({}); choose larger "
            "cells or publish no totals.",
            solution.message.strip(),
        )
    return targets @ solution.x[:atoms]
