"""Merge unsafe hexagons with neighbours until every zone is safe, at little loss of detail."""

import heapq
from dataclasses import dataclass

import numpy as np
import shapely

from .hexagons import HEXAGON_NEIGHBOURS
from .progress import part, silent

COST_SPREAD = 0.5


@dataclass
class _Zone:
    """Cells that are merged, with what a merge of two needs to know."""

    cells: list
    total: float
    roots: float
    lowest: np.ndarray
    highest: np.ndarray

    def loss(self):
        """Squared distance of the cells' square roots from those of an even spread.

        Up to a factor this is the zone's share in the squared Hellinger distance.
        """
        return 2.0 * self.total - 2.0 * self.roots * np.sqrt(self.total / len(self.cells))


def joined(one, other):
    """The zone that two zones make."""
    return _Zone(
        one.cells + other.cells,
        one.total + other.total,
        one.roots + other.roots,
        np.minimum(one.lowest, other.lowest),
        np.maximum(one.highest, other.highest),
    )


def merge_cells(q, r, totals, unsafe_zones, limit, rng, progress=silent, apart=None):
    """Merge unsafe cells into zones, each of them connected and at most so far across.

    In rounds, every unsafe zone joins the neighbour that costs least: the loss of detail (squared
    Hellinger distance to an even spread over the zone), dearer the further the zone reaches. Then
    the records of all new zones are counted again. Costs and the order of the zones carry a random
    factor, so that nobody can conclude from a merge which others would have been cheaper.

    Parameters
    ----------
    q, r : (cells,) int arrays
        Axial coordinates of the tiling's cells, no pair twice.
    totals : (cells,) float array
    unsafe_zones : callable
        Takes zones as (cells,) int array and their number, returns a (zones,) bool array: which of
        them may not be published; recounted from the records.
    limit : int
        Largest distance between two cells of a zone, in steps from cell to neighbouring cell.
    rng : numpy.random.Generator
    progress : callable
    apart : (cells,) bool array or None
        Cells that merge with none.

    Returns
    -------
    zones : (cells,) int64 array
        Zone of each cell, from 0. A cell of a zone that could not become safe stands alone.
    failed : (zones,) bool array
        Zones that are unsafe, and single cells of zones that were: one that is empty tells, if it
        is shown as such, how few hold what was not enough together.
    """
    q, r = np.asarray(q, np.int64), np.asarray(r, np.int64)
    places = np.stack([q, r, q + r], axis=1)
    zones = {
        cell: _Zone([cell], float(total), float(np.sqrt(total)), place, place)
        for cell, (total, place) in enumerate(zip(totals, places))
    }
    zone_of = np.arange(len(q))
    neighbours = _neighbours(q, r, np.zeros(len(q), bool) if apart is None else apart)
    unsafe = unsafe_zones(zone_of, len(q))
    stuck = set()
    open_zones = set(np.flatnonzero(unsafe).tolist())
    start = max(len(open_zones), 1)
    while open_zones:
        done = 1.0 - len(open_zones) / start
        progress(done)
        changed = _merge_round(
            zones, zone_of, neighbours, open_zones, stuck, limit, rng, part(progress, done, done)
        )
        if not changed:
            break
        names = np.array(sorted(zones))
        numbered = np.searchsorted(names, zone_of)
        unsafe = unsafe_zones(numbered, len(names))
        open_zones = set(names[unsafe].tolist()) - stuck
    return _numbered(zones, len(q), unsafe_zones)


def _neighbours(q, r, apart):
    """Cells next to each cell, as a list of lists; none for those that stay apart."""
    pairs = list(zip(q.tolist(), r.tolist()))
    place = {pairs[cell]: cell for cell in np.flatnonzero(~apart)}
    steps = HEXAGON_NEIGHBOURS.tolist()
    return [
        [place[(a + da, b + db)] for da, db in steps if (a + da, b + db) in place]
        if (a, b) in place
        else []
        for a, b in pairs
    ]


def _merge_round(zones, zone_of, neighbours, open_zones, stuck, limit, rng, progress):
    """Let every unsafe zone join a neighbour that was not touched in this round."""
    touched = set()
    chances = np.exp(COST_SPREAD * rng.standard_normal(len(open_zones)))
    queue = [
        ((zones[name].total + 1.0) * chance, name)
        for name, chance in zip(sorted(open_zones), chances)
    ]
    heapq.heapify(queue)
    while queue:
        if len(queue) % 200 == 0:
            progress(0.5)
        _, name = heapq.heappop(queue)
        if name in touched:
            continue
        zone = zones[name]
        around = {zone_of[other] for cell in zone.cells for other in neighbours[cell]} - {name}
        options = []
        for other in sorted(around):
            union = joined(zone, zones[other])
            reach = int((union.highest - union.lowest).max())
            if reach <= limit:
                options.append((_cost(union, zone, zones[other], reach, rng), other, union))
        if not options:
            stuck.add(name)
            continue
        free = [option for option in options if option[1] not in touched]
        if not free:
            continue
        _, other, union = min(free, key=lambda option: option[0])
        touched.update((name, other))
        stuck.discard(other)
        zones[name] = union
        zone_of[zones.pop(other).cells] = name
    return bool(touched)


def _cost(union, one, other, reach, rng):
    """Loss of detail that a merge adds, dearer for zones that reach far."""
    loss = max(union.loss() - one.loss() - other.loss(), 0.0)
    return (loss + 0.1) * (1.0 + 0.25 * reach) * np.exp(COST_SPREAD * rng.standard_normal())


def _numbered(zones, cell_count, unsafe_zones):
    """Zones from 0 in the order of their first cells; unsafe ones fall apart into cells."""
    zone_of = np.empty(cell_count, np.int64)
    for name, zone in enumerate(zones.values()):
        zone_of[zone.cells] = name
    apart = unsafe_zones(zone_of, len(zones))[zone_of]
    zone_of[apart] = len(zones) + np.flatnonzero(apart)
    first = np.unique(zone_of, return_index=True)[1]
    order = np.empty(len(first), np.int64)
    order[np.argsort(first, kind="stable")] = np.arange(len(first))
    zone_of = order[np.unique(zone_of, return_inverse=True)[1].reshape(-1)]
    failed = unsafe_zones(zone_of, len(first))
    failed[zone_of[apart]] = True
    return zone_of, failed


def zone_polygons(polygons, zones, zone_count):
    """One polygon for each zone.

    Parameters
    ----------
    polygons : (cells,) array of shapely polygons
        Neighbours share their corners to the bit.
    zones : (cells,) int array
    zone_count : int

    Returns
    -------
    (zone_count,) array of shapely polygons
    """
    order = np.argsort(zones, kind="stable")
    limits = np.searchsorted(zones[order], np.arange(zone_count + 1))
    result = np.empty(zone_count, object)
    for zone in range(zone_count):
        own = polygons[order[limits[zone] : limits[zone + 1]]]
        result[zone] = own[0] if len(own) == 1 else shapely.union_all(own)
    return result
