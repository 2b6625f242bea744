"""Zones of a least total, cut from random spanning trees."""

import numpy as np

from .errors import InputError
from .progress import silent
from .spanning import copies, random_forest

NODES_AT_ONCE = 100_000  # about a twentieth of a second


def tree_cut(graph, totals, least_total, replicates, generator, progress=silent):
    """Zones of at least a given total, cut from random spanning trees.

    Each tree is walked from its leaves up; as soon as what hangs on a unit holds the least
    total it is cut off as a zone. What is left at the root joins, of the zones that hang on
    it, the one with the smallest total (the lower unit number on a tie).

    Parameters
    ----------
    graph : Contiguity
    totals : (units,) array
        Not negative.
    least_total : float
        Above 0. A connected part of the graph that holds less altogether becomes one zone.
    replicates : int
    generator : numpy.random.Generator
    progress : callable

    Returns
    -------
    (replicates, units) int32 array
        Zones from 0 up; their number differs between replicates.

    Raises
    ------
    InputError
        The least total is not above 0, or no connected part of the map reaches it.
    """
    totals = np.asarray(totals, float)
    check_least_total(graph, totals, least_total)
    labels = np.empty((replicates, graph.units), np.int32)
    step = max(1, NODES_AT_ONCE // graph.units)
    for start in range(0, replicates, step):
        progress(start / replicates)
        many = min(step, replicates - start)
        forest = random_forest(many * graph.units, copies(graph, many), generator)
        zone_root = cut_from_leaves(forest, totals, least_total)
        labels[start : start + many] = _numbered(zone_root.reshape(many, graph.units))
    return labels


def check_least_total(graph, totals, least_total):
    """Say in words why a least total cannot be kept, where it cannot."""
    if not least_total > 0:
        raise InputError("LEAST_TOTAL must be above 0; found {:g}.", least_total)
    parts, part = graph.components()
    largest = np.bincount(part, totals, minlength=parts).max()
    if largest < least_total:
        raise InputError(
            "LEAST_TOTAL: {:g} is more than there is (the largest connected part of the "
            "map holds {:g}), so no zone can hold it; choose a smaller one.",
            least_total,
            largest,
        )


def short_parts(graph, totals, least_total):
    """Number of connected parts that hold less than the least total even as one zone."""
    parts, part = graph.components()
    return int((np.bincount(part, totals, minlength=parts) < least_total).sum())


def cut_from_leaves(forest, totals, least_total):
    """Cut a forest of copies of the map into zones of a least total.

    Parameters
    ----------
    forest : Forest
        Over copies of the map, node ``copy * units + unit``.
    totals : (units,) array
    least_total : float

    Returns
    -------
    (nodes,) int array
        The node that stands for the zone of each node.
    """
    unit = forest.order % len(totals)
    sums = forest.sums_upwards(
        totals[unit], lambda level: np.where(level >= least_total, 0.0, level)
    )
    cut = sums >= least_total
    zone = forest.spread_downwards(np.arange(len(sums)), cut)
    hanging = np.flatnonzero(cut[forest.roots() :]) + forest.roots()
    rest = zone[forest.above[hanging]]
    hanging, rest = hanging[~cut[rest]], rest[~cut[rest]]
    order = np.lexsort((unit[hanging], sums[hanging], rest))
    first = np.unique(rest[order], return_index=True)[1]
    joins = np.arange(len(sums))
    joins[rest[order][first]] = hanging[order][first]
    by_node = np.empty(len(sums), np.int64)
    by_node[forest.order] = forest.order[joins[zone]]
    return by_node


def _numbered(zone_root):
    """Zone numbers from 0 up in each row, from the node that stands for each node's zone."""
    flags = np.zeros(zone_root.size, bool)
    flags[zone_root.ravel()] = True
    numbers = np.cumsum(flags.reshape(zone_root.shape), axis=1) - 1
    return numbers.ravel()[zone_root].astype(np.int32)
