"""Zones cut from random spanning trees: of a least total, or of nearly equal totals."""

import numpy as np

from .errors import InputError
from .growth import check_zone_count
from .spanning import copies, random_forest

NODES_AT_ONCE = 500_000
FAILED_TREES = 25  # trees without a fitting cut before a zoning is begun again
FRESH_STARTS = 40  # times that a zoning may be begun again


def tree_cut(graph, totals, least_total, replicates, generator):
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


def balanced(graph, totals, zone_count, tolerance, replicates, generator):
    """Zones of nearly equal totals, by cutting random spanning trees in two, again and again.

    A region that is to become j zones gets a random spanning tree. Of the cuts that leave i
    zones' worth on one side and j - i on the other, each within the tolerance, first i is drawn
    and then the cut; a tree without such a cut is drawn anew. Separate parts of the graph get
    zones by their total.

    Parameters
    ----------
    graph : Contiguity
    totals : (units,) array
    zone_count : int
    tolerance : float
        How far a zone may be from an equal share, as a part of that share.
    replicates : int
    generator : numpy.random.Generator

    Returns
    -------
    (replicates, units) int32 array
        Zones 0 to zone_count - 1.

    Raises
    ------
    InputError
        The units are too coarse for the tolerance.

    References
    ----------
    Splitting by a spanning tree: DeFord, Duchin & Solomon (2021), Harvard Data Sci. Rev. 3(1).
    """
    totals = np.asarray(totals, float)
    check_zone_count(graph, zone_count)
    shares = _zones_of_parts(graph, totals, zone_count)
    _check_balance(graph, totals, shares, tolerance)
    labels = np.empty((replicates, graph.units), np.int32)
    step = max(1, NODES_AT_ONCE // graph.units)
    for start in range(0, replicates, step):
        many = min(step, replicates - start)
        made = _Balancing(graph, totals, shares, tolerance, many)
        while made.open_regions():
            made.cut_once(generator)
        labels[start : start + many] = made.labels()
    return labels


def _zones_of_parts(graph, totals, zone_count):
    """Number of zones of each connected part: at least one, the rest by the largest quotients."""
    parts, part = graph.components()
    held = np.bincount(part, totals, minlength=parts)
    room = np.bincount(part, minlength=parts)
    zones = np.ones(parts, np.int64)
    for _ in range(zone_count - parts):
        # the part whose zones would be largest gets one more (Webster's method of rounding)
        zones[np.argmax(np.where(zones < room, held / (zones + 0.5), -1))] += 1
    return zones


def _check_balance(graph, totals, shares, tolerance):
    if not tolerance >= 0:
        raise InputError("The balance tolerance must not be negative; found {:g}.", tolerance)
    _, part = graph.components()
    ideal = np.bincount(part, totals, minlength=len(shares)) / shares
    if not (ideal > 0).all():
        raise InputError("TOTAL: a connected part of the map holds nothing that could be balanced.")
    excess = np.where(shares[part] > 1, totals / ideal[part], 0)
    worst = int(np.argmax(excess))
    if excess[worst] > 1 + tolerance:
        raise InputError(
            "ZONE_COUNTS: unit number {} alone holds {:g}, {:.2f} times an equal share of "
            "{} zones; ask for fewer zones, allow a larger tolerance, or choose another "
            "builder.",
            worst + 1,
            totals[worst],
            excess[worst],
            shares.sum(),
        )


class _Balancing:
    """Copies of a map on the way to balanced zones.

    A region is numbered by its copy and the first zone that it will hold.
    """

    def __init__(self, graph, totals, shares, tolerance, many):
        self.units, self.many, self.zones = graph.units, many, int(shares.sum())
        _, part = graph.components()
        first = np.r_[0, np.cumsum(shares)[:-1]]
        self.edges = copies(graph, many)
        self.totals = np.tile(totals, many)
        self.ideal = np.tile((np.bincount(part, totals) / shares)[part], many)
        self.tolerance = tolerance
        offset = np.repeat(np.arange(many) * self.zones, self.units)
        self.start_region = offset + np.tile(first[part], many)
        self.start_share = np.zeros(many * self.zones, np.int64)
        self.start_share.reshape(many, -1)[:, first] = shares
        self.region = self.start_region.copy()
        self.share = self.start_share.copy()
        self.failures = np.zeros(len(self.share), np.int64)
        self.fresh_starts = np.zeros(many, np.int64)

    def open_regions(self):
        return bool((self.share > 1).any())

    def labels(self):
        return (self.region % self.zones).reshape(self.many, self.units).astype(np.int32)

    def cut_once(self, generator):
        """Try one random tree on every region that is still to be divided."""
        nodes = np.flatnonzero(self.share[self.region] > 1)
        place = np.full(len(self.region), -1)
        place[nodes] = np.arange(len(nodes))
        ends = self.region[self.edges]
        inside = (ends[:, 0] == ends[:, 1]) & (place[self.edges[:, 0]] >= 0)
        forest = random_forest(len(nodes), place[self.edges[inside]], generator)
        node = nodes[forest.order]
        below = forest.sums_upwards(self.totals[node])
        root = forest.spread_downwards(np.arange(len(node)), np.zeros(len(node), bool))
        region = self.region[node]
        cuts, zones_below = self._fitting(forest, node, below, below[root], region)
        chosen = _draw(region[cuts], zones_below, generator)
        cuts, zones_below = cuts[chosen], zones_below[chosen]
        self._divide(forest, node, region, cuts, zones_below)
        tried = region[: forest.roots()]
        self.failures[np.setdiff1d(tried, region[cuts])] += 1
        self._begin_again()

    def _fitting(self, forest, node, below, whole, region):
        """Cuts that leave both sides within the tolerance, and the zones below each."""
        ideal = self.ideal[node]
        zones = np.rint(below / ideal).astype(np.int64)
        above = self.share[region] - zones
        slack = self.tolerance + 1e-9  # sums of totals are a few bits off
        fits = np.abs(below - zones * ideal) <= zones * ideal * slack
        fits &= np.abs(whole - below - above * ideal) <= above * ideal * slack
        fits &= (zones >= 1) & (above >= 1)
        fits[: forest.roots()] = False
        cuts = np.flatnonzero(fits)
        return cuts, zones[cuts]

    def _divide(self, forest, node, region, cuts, zones_below):
        """What hangs below a cut keeps the region's number; the rest moves up by its zones."""
        begins = np.zeros(len(node), bool)
        begins[cuts] = True
        hangs = forest.spread_downwards(begins, begins)
        step = np.zeros(len(self.share), np.int64)
        step[region[cuts]] = zones_below
        self.region[node] = region + np.where(hangs, 0, step[region])
        old = region[cuts]
        self.share[old + zones_below] = self.share[old] - zones_below
        self.share[old] = zones_below
        self.failures[old] = 0

    def _begin_again(self):
        """Reset the copies in which a region found no cut for too long."""
        stuck = np.unique(np.flatnonzero(self.failures > FAILED_TREES) // self.zones)
        if not len(stuck):
            return
        self.fresh_starts[stuck] += 1
        if self.fresh_starts.max() > FRESH_STARTS:
            raise InputError(
                "ZONE_COUNTS: {} zones within {:.0%} of equal totals were not found in {} "
                "attempts; allow a larger tolerance, ask for fewer zones, or choose another "
                "builder.",
                self.zones,
                self.tolerance,
                FRESH_STARTS,
            )
        for name in ("region", "share", "failures"):
            rows = getattr(self, name).reshape(self.many, -1)
            begin = {"region": self.start_region, "share": self.start_share}.get(name)
            rows[stuck] = 0 if begin is None else begin.reshape(self.many, -1)[stuck]


def _draw(region, zones_below, generator):
    """Of the cuts of each region draw a number of zones below, then one of its cuts."""
    kinds, kind = np.unique(np.c_[region, zones_below], axis=0, return_inverse=True)
    kind = kind.reshape(-1)
    lot = generator.random(len(kinds))
    order = np.lexsort((generator.random(len(region)), lot[kind], region))
    return order[np.unique(region[order], return_index=True)[1]]


def _numbered(zone_root):
    """Zone numbers from 0 up in each row, from the node that stands for each node's zone."""
    flags = np.zeros(zone_root.size, bool)
    flags[zone_root.ravel()] = True
    numbers = np.cumsum(flags.reshape(zone_root.shape), axis=1) - 1
    return numbers.ravel()[zone_root].astype(np.int32)
