"""Zones that grow from random seeds until they meet.

Every pair of neighbours gets an exponential passage time and every unit joins the seed that
reaches it first: first-passage growth, the same law as adding at each step a border crossing
drawn at random (the exponential forgets), so the zones are Eden clusters that compete.

References
----------
Eden (1961), Fourth Berkeley Symposium 4:223; Hammersley & Welsh (1965), First-passage percolation.
"""

import numpy as np
from scipy import sparse
from scipy.sparse.csgraph import dijkstra, reverse_cuthill_mckee

from .errors import InputError
from .progress import part, silent

SWEEP_LIMIT = 2500  # units up to which sweeping over many zonings at once beats the heap
SWEEP_VALUES = 2_000_000  # arrival and passage times held at once
SWEEP_ZONINGS = 2048  # zonings swept at once: what a core keeps close to itself
TIME_BITS = 32  # binary digits of a passage time after the point
FAR = 2**62


def grown(graph, zone_count, replicates, generator, progress=silent):
    """Random contiguous zones by first-passage growth.

    One seed falls in every connected part of the graph and the rest anywhere; with a connected
    graph the seeds are a simple random sample of the units.

    Parameters
    ----------
    graph : Contiguity
    zone_count : int
    replicates : int
    generator : numpy.random.Generator
    progress : callable

    Returns
    -------
    (replicates, units) int32 array
        Zones 0 to zone_count - 1; each zone is contiguous, every unit is in one.

    Raises
    ------
    InputError
        More zones than units, or fewer than connected parts.
    """
    check_zone_count(graph, zone_count)
    labels = np.empty((replicates, graph.units), np.int32)
    small = graph.units <= SWEEP_LIMIT
    step = 1
    if small:
        step = min(SWEEP_ZONINGS, SWEEP_VALUES // (len(graph.pairs) + graph.units))
    plan = _sweep_plan(graph) if small else _heap_plan(graph)
    grow = grow_by_sweeps if small else grow_by_heap
    parts = graph.components()
    for start in range(0, replicates, step):
        stop = min(start + step, replicates)
        stretch = part(progress, start / replicates, stop / replicates)
        stretch(0.0)
        seeds = _seeds(parts, zone_count, stop - start, generator)
        shape = (len(graph.pairs), stop - start)
        times = generator.standard_exponential(shape, dtype=np.float32)
        labels[start:stop] = grow(plan, seeds, times, stretch)
    return labels


def check_zone_count(graph, zone_count):
    """Say in words why a number of zones cannot be made, where it cannot."""
    if zone_count > graph.units:
        raise InputError(
            "ZONE_COUNTS: {} zones cannot be made of {} units; ask for fewer.",
            zone_count,
            graph.units,
        )
    parts = graph.components()[0]
    if zone_count < parts:
        raise InputError(
            "ZONE_COUNTS: the units fall into {} separate groups that no zone may cross, "
            "so {} zones are too few; ask for at least {}, or leave KEEP_WITHIN empty.",
            parts,
            zone_count,
            parts,
        )


def grow_by_sweeps(plan, seeds, times, progress=silent):
    """First-passage growth of many zonings at once, by relaxing every pair in turn.

    Arrival times are whole numbers with the zone in their lowest digits, so that one minimum
    carries both. Pairs are relaxed upwards in the order of the plan, then downwards, until
    nothing changes; zonings that have settled drop out.

    Parameters
    ----------
    plan : tuple
        As :func:`_sweep_plan` returns it.
    seeds : (replicates, zones) int array
    times : (pairs, replicates) float32 array
    progress : callable

    Returns
    -------
    (replicates, units) int32 array
    """
    rank, pairs = plan
    replicates, zones = seeds.shape
    digits = max(1, int(zones - 1).bit_length())
    arrival = np.full((len(rank), replicates), FAR, np.int64)
    arrival[rank[seeds].T, np.arange(replicates)] = np.arange(zones)[:, None]
    passage = (times * np.float32(2**TIME_BITS)).astype(np.int64)
    passage <<= digits
    active = np.arange(replicates)
    settled = np.empty_like(arrival)
    sweeps = 0
    while len(active):
        progress(1 - len(active) / replicates)
        before = arrival.copy() if sweeps else None
        _sweep(arrival, passage, pairs)
        sweeps += 1
        if before is None:
            continue
        changed = (arrival != before).any(axis=0)
        settled[:, active[~changed]] = arrival[:, ~changed]
        active = active[changed]
        if not changed.all():
            arrival, passage = arrival[:, changed].copy(), passage[:, changed].copy()
    return (settled[rank] & (2**digits - 1)).T.astype(np.int32)


def grow_by_heap(plan, seeds, times, progress=silent):
    """First-passage growth, one shortest-path search from all seeds a zoning.

    Parameters
    ----------
    plan : tuple
        As :func:`_heap_plan` returns it.
    seeds : (replicates, zones) int array
    times : (pairs, replicates) float array
    progress : callable

    Returns
    -------
    (replicates, units) int32 array
    """
    columns, starts, pair, units = plan
    labels = np.empty((len(seeds), units), np.int32)
    zone = np.empty(units, np.int32)
    for row, own in enumerate(seeds):
        progress(row / len(seeds))
        graph = sparse.csr_matrix(
            (times[pair, row].astype(float), columns, starts), shape=(units, units)
        )
        nearest = dijkstra(graph, indices=own, min_only=True, return_predecessors=True)[2]
        zone[own] = np.arange(len(own))
        labels[row] = zone[nearest]
    return labels


def _sweep(arrival, passage, pairs):
    """Relax every pair once upwards and once downwards, in place."""
    rows, times = list(arrival), list(passage)
    trial = np.empty(arrival.shape[1], arrival.dtype)
    add, least = np.add, np.minimum
    work = [(rows[low], rows[high], times[pair]) for low, high, pair in pairs]
    for low, high, time in work:
        add(low, time, out=trial)
        least(high, trial, out=high)
    for low, high, time in reversed(work):
        add(high, time, out=trial)
        least(low, trial, out=low)


def _sweep_plan(graph):
    """Place of each unit in an order where neighbours stand close; (low, high, pair) by it."""
    order = reverse_cuthill_mckee(graph.matrix(), symmetric_mode=True)
    rank = np.empty(graph.units, np.int64)
    rank[order] = np.arange(graph.units)
    ends = np.sort(rank[graph.pairs], axis=1)
    by_rank = np.lexsort((ends[:, 1], ends[:, 0]))
    return rank, np.c_[ends[by_rank], by_rank].tolist()


def _heap_plan(graph):
    """Sparse structure of the graph and, for each stored entry, the pair it belongs to."""
    count = len(graph.pairs)
    first, second = graph.pairs.T
    places = (np.r_[first, second], np.r_[second, first])
    entries = np.tile(np.arange(1, count + 1), 2)
    matrix = sparse.csr_matrix((entries, places), shape=(graph.units, graph.units))
    return matrix.indices, matrix.indptr, matrix.data - 1, graph.units


def _seeds(parts, zone_count, replicates, generator):
    """Distinct units for every replicate, at least one in each connected part."""
    count, part = parts
    units = len(part)
    if zone_count == units:
        return np.tile(np.arange(units), (replicates, 1))
    keys = generator.random((replicates, units), dtype=np.float32)
    if count > 1:
        order = np.argsort(part, kind="stable")
        begin = np.searchsorted(part[order], np.arange(count))
        smallest = np.minimum.reduceat(keys[:, order], begin, axis=1)
        keys[keys == smallest[:, part]] = -1
    return np.argpartition(keys, zone_count - 1, axis=1)[:, :zone_count]
