"""Brute force for small audits: every table of whole numbers, every union of atoms."""

import itertools

import numpy as np


def all_tables(membership, lower, upper, ceiling):
    """All whole-number tables that agree with the statements, (tables, atoms).

    Every atom is tried from 0 to the ceiling or the smallest upper bound of its rows.
    """
    membership = np.asarray(membership)
    most = [
        int(min(ceiling, upper[membership[:, atom] > 0].min(initial=np.inf)))
        for atom in range(membership.shape[1])
    ]
    grid = np.array(list(itertools.product(*(range(top + 1) for top in most))))
    sums = grid @ membership.T
    return grid[((sums >= lower) & (sums <= upper)).all(axis=1)]


def intervals_of_all_unions(tables):
    """(union as frozenset) -> (smallest, largest) count over all tables."""
    atoms = tables.shape[1]
    result = {}
    for size in range(1, atoms + 1):
        for union in itertools.combinations(range(atoms), size):
            sums = tables[:, union].sum(axis=1)
            result[frozenset(union)] = int(sums.min()), int(sums.max())
    return result


def disclosed_unions(membership, lower, upper, tables, least_count):
    """Unions about which an outsider is told more than any single statement says of itself.

    Returns the certain ones (at least one record, fewer than the least count) and the atoms that
    cannot hold the least count although no zone around them says so. Written from the
    definitions in the docstrings of `remainders.disclosing`, by enumeration alone.
    """
    membership = np.asarray(membership)
    intervals = intervals_of_all_unions(tables)
    empty = {next(iter(u)) for u, (_, high) in intervals.items() if len(u) == 1 and high == 0}
    zones = [frozenset(np.flatnonzero(row)) for row in membership]
    said = {}
    for zone, low, high in zip(zones, lower, upper):
        if high < least_count and (low == 0 or (low == 1 < high and high >= least_count - 1)):
            said.setdefault(zone - empty, []).append((low, high))
    certain, at_most = set(), set()
    for union, (low, high) in intervals.items():
        if union & empty or high >= least_count or high == 0:
            continue
        as_said = (low, high) in said.get(union, [])
        bare = (low, high) == (1, least_count - 1) and any(
            zone <= union and stated[0] >= 1 for zone in said for stated in said[zone]
        )
        if low >= 1 and not as_said and not bare:
            certain.add(union)
        elif low == 0 and len(union) == 1:
            inside = any(
                union < zone - empty or (union == zone - empty and as_said)
                for zone, stated in zip(zones, upper)
                if stated < least_count
            )
            if not inside:
                at_most.add(union)
    return certain, at_most, intervals, empty
