"""Zones of nearly equal totals, by cutting random spanning trees in two, again and again."""

import numpy as np

from .errors import InputError
from .growth import check_zone_count
from .progress import silent
from .spanning import copies, random_forest

NODES_AT_ONCE = 100_000
FAILED_TREES = 12  # trees without a fitting cut before the cut that made the region is undone
UNDONE_CUT = 4  # failed trees that an undone cut counts for in the region that it had cut
FRESH_STARTS = 40  # times that a whole connected part may use up its trees
UNDONE_A_ZONE = 10  # cuts that may be undone for each zone that is wanted


def balanced(graph, totals, zone_count, tolerance, replicates, generator, progress=silent):
    """Zones of nearly equal totals, by cutting random spanning trees in two, again and again.

    A region that is to become j zones gets a random spanning tree. Of the cuts that leave i
    zones' worth on one side and j - i on the other, each within the tolerance, first i is drawn
    and then the cut; a tree without such a cut is drawn anew. A region that finds none for long
    is joined again with what it was cut from. Separate parts of the graph get zones by their
    total.

    Parameters
    ----------
    graph : Contiguity
    totals : (units,) array
    zone_count : int
    tolerance : float
        How far a zone may be from an equal share, as a part of that share.
    replicates : int
    generator : numpy.random.Generator
    progress : callable

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
    farthest = 0.0
    for start in range(0, replicates, step):
        many = min(step, replicates - start)
        made = _Balancing(graph, totals, shares, tolerance, many)
        while made.open_regions():
            # an undone cut takes zones back, and progress never goes back
            farthest = max(farthest, (start + many * made.share_made()) / replicates)
            progress(farthest)
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

    A region is numbered by its copy and the first zone that it will hold, so a cut stands at
    the number of the first zone above it.
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
        self.region = offset + np.tile(first[part], many)
        self.share = np.zeros(many * self.zones, np.int64)
        self.share.reshape(many, -1)[:, first] = shares
        self.failures = np.zeros(len(self.share), np.int64)
        self.fresh_starts = np.zeros(many, np.int64)
        self.undone = np.zeros(many, np.int64)
        # of the cut at each zone: the region that it divided, and how often that had failed
        self.cut_region = np.full(len(self.share) + 1, -1)
        self.cut_share = np.zeros(len(self.share) + 1, np.int64)
        self.cut_failures = np.zeros(len(self.share) + 1, np.int64)
        self.inside = self._inside(self.edges)

    def open_regions(self):
        return bool((self.share > 1).any())

    def share_made(self):
        """Part of the regions that there will be in the end."""
        return np.count_nonzero(self.share) / len(self.share)

    def labels(self):
        return (self.region % self.zones).reshape(self.many, self.units).astype(np.int32)

    def cut_once(self, generator):
        """Try one random tree on every region that is still to be divided."""
        nodes = np.flatnonzero((self.share > 1)[self.region])
        place = np.full(len(self.region), -1)
        place[nodes] = np.arange(len(nodes))
        forest = random_forest(len(nodes), place[self.inside], generator, self.region[nodes])
        node = nodes[forest.order]
        below = forest.sums_upwards(self.totals[node])
        region = self.region[node]
        tried = region[: forest.roots()]
        whole = np.zeros(len(self.share))
        whole[tried] = below[: forest.roots()]
        cuts, zones_below = self._fitting(forest, node, below, whole[region], region)
        chosen = _draw(region[cuts], zones_below, generator)
        cuts, zones_below = cuts[chosen], zones_below[chosen]
        self._divide(forest, node, region, cuts, zones_below)
        failed = np.ones(len(self.share), bool)
        failed[region[cuts]] = False
        self.failures[tried[failed[tried]]] += 1
        if self._undo_cuts():
            self.inside = self._inside(self.edges)
        else:
            self.inside = self._inside(self.inside)

    def _inside(self, edges):
        """The edges that lie within a region that is still to be divided."""
        ends = self.region[edges]
        return edges[(ends[:, 0] == ends[:, 1]) & (self.share > 1)[ends[:, 0]]]

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
        new = old + zones_below
        self.cut_region[new] = old
        self.cut_share[new] = self.share[old]
        self.cut_failures[new] = self.failures[old]
        self.share[new] = self.share[old] - zones_below
        self.share[old] = zones_below
        self.failures[old] = self.failures[new] = 0

    def _undo_cuts(self):
        """Undo the cuts that made the regions that found no cut for too long; were there any?"""
        undone = False
        while True:
            stuck = np.flatnonzero(self.failures > FAILED_TREES)
            if not len(stuck):
                return undone
            undone = True
            for region in stuck:
                if self.failures[region] > FAILED_TREES:
                    self._undo(region)

    def _undo(self, region):
        """Join a region with what it was cut from; a whole part begins to count anew."""
        ends = np.array([region, region + self.share[region]])
        ends = ends[self.cut_region[ends] >= 0]
        if not len(ends):
            self.fresh_starts[region // self.zones] += 1
            self._give_up(self.fresh_starts.max(), FRESH_STARTS)
            self.failures[region] = 0
            return
        # of the cuts at its two ends the later one made it, which divided the smaller region
        cut = ends[np.argmin(self.cut_share[ends])]
        first, share = self.cut_region[cut], self.cut_share[cut]
        stop = first + share
        copy = first // self.zones
        own = self.region[copy * self.units : (copy + 1) * self.units]
        own[(own >= first) & (own < stop)] = first
        self.share[first:stop] = self.failures[first:stop] = 0
        self.share[first] = share
        self.failures[first] = self.cut_failures[cut] + UNDONE_CUT
        self.cut_region[first + 1 : stop] = -1
        self.undone[copy] += 1
        self._give_up(self.undone[copy], UNDONE_A_ZONE * self.zones)

    def _give_up(self, attempts, most):
        if attempts > most:
            raise InputError(
                "ZONE_COUNTS: {} zones within {:.0%} of equal totals were not found in {} "
                "attempts; allow a larger tolerance, ask for fewer zones, or choose another "
                "builder.",
                self.zones,
                self.tolerance,
                most,
            )


def _draw(region, zones_below, generator):
    """Of the cuts of each region draw a number of zones below, then one of its cuts."""
    kinds, kind = np.unique(np.c_[region, zones_below], axis=0, return_inverse=True)
    kind = kind.reshape(-1)
    lot = generator.random(len(kinds))
    order = np.lexsort((generator.random(len(region)), lot[kind], region))
    return order[np.unique(region[order], return_index=True)[1]]
