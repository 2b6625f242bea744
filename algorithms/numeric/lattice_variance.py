"""Zoning variance of point records under random regular tilings of several cell sizes.

A scenario is one tiling: a cell size (the scale), a random offset and, if wanted, a random turn.
Places are the pixels of an evaluation grid. Replicates run in batches with their own random
streams, drawn from (seed, scale, batch), and are merged in that order, so the result is the
same to the bit for any number of workers.
"""

import os
from collections import deque
from concurrent.futures import wait
from dataclasses import dataclass
from threading import Event

import numpy as np

from . import allocation, variance
from .errors import InputError
from .lattice_zonings import cell_block, cell_numbers, lattice_morans_i, random_tiling
from .progress import silent
from .zone_statistics import ZoneStatistics, zone_statistics

BATCH = 25

# Pixels whose rows of sums fit the processor's caches.
_BLOCK = 8192


@dataclass(frozen=True)
class Ground:
    """What zonings are laid over; make it with `ground`.

    Attributes
    ----------
    x, y, count : (events,) arrays
        Places of the records and how many stand there; no place twice.
    total_x, total_y, total : (totals,) arrays
        The same for what they are compared with: people at risk, or samples of area.
    place_x, place_y : (places,) arrays
        Places that are given a value.
    bounds : (left, bottom, right, top) of all of these
    kind : {"share", "rate"}
    threshold : float
        In units of count over total.
    least_total : float
        A cell with less than this in total has no value.
    """

    x: np.ndarray
    y: np.ndarray
    count: np.ndarray
    total_x: np.ndarray
    total_y: np.ndarray
    total: np.ndarray
    place_x: np.ndarray
    place_y: np.ndarray
    bounds: tuple
    kind: str
    threshold: float
    least_total: float


@dataclass(frozen=True)
class Halves:
    """The held-out split of the events for the allocation of a budget.

    Attributes
    ----------
    budget : float
        Share of the total that is covered, 0 to 1.
    half : (events,) array
        Count of the drawn half at each event place of the ground.
    place_half, place_count, place_total : (places,) arrays
        The half, all events and the total of each evaluated place.
    """

    budget: float
    half: np.ndarray
    place_half: np.ndarray
    place_count: np.ndarray
    place_total: np.ndarray


@dataclass
class Scale:
    """All scenarios of one cell size; grows by `merge`.

    Attributes
    ----------
    size : float
    moments : RunningMoments of the values at the places
    tally : ThresholdTally at the places
    counting, half_values, other_values : (places,) arrays
        Sums over scenarios of the counting variance, and of the values from either half of the
        events (None without a budget).
    statistics : dict of name to (replicates,) array
    """

    size: float
    moments: variance.RunningMoments
    tally: variance.ThresholdTally
    counting: np.ndarray
    half_values: np.ndarray
    other_values: np.ndarray
    statistics: dict

    @property
    def replicates(self):
        return len(self.statistics["zones"])

    def merge(self, other):
        self.moments.merge(other.moments)
        self.tally.merge(other.tally)
        self.counting += other.counting
        if self.half_values is not None:
            self.half_values += other.half_values
            self.other_values += other.other_values
        self.statistics = {
            name: np.concatenate([mine, other.statistics[name]])
            for name, mine in self.statistics.items()
        }

    def per_scenario(self, sums):
        """Sums over the scenarios with a value, divided by their number; 0 where there are none."""
        return sums / np.maximum(self.moments.count, 1)


def ground(events, totals, places, kind, threshold=None, least_total=0.0):
    """Check and pack the data of a study.

    Parameters
    ----------
    events : (x, y, count) of (n,) arrays
    totals : (x, y, total) of (m,) arrays
    places : (x, y) of (places,) arrays
    kind : {"share", "rate"}
    threshold : float, optional
        The overall value, sum of count over sum of total, unless given.
    least_total : float
        A cell with less than this in total has no value.

    Returns
    -------
    Ground

    Raises
    ------
    InputError
        Without any event, any total or any place.
    """
    x, y, count = _stacked(*events)
    total_x, total_y, total = _stacked(*totals)
    place_x, place_y = (np.ascontiguousarray(part, dtype=float) for part in places)
    if not count.sum() > 0:
        raise InputError("RECORDS: there is nothing to count; the sum of the counts is 0.")
    if not total.sum() > 0:
        raise InputError("The total that records are compared with is 0 everywhere.")
    if not len(place_x):
        raise InputError("There is no place to evaluate; check the boundary and the grid.")
    every_x = np.concatenate([x, total_x, place_x])
    every_y = np.concatenate([y, total_y, place_y])
    bounds = (every_x.min(), every_y.min(), every_x.max(), every_y.max())
    if threshold is None:
        threshold = count.sum() / total.sum()
    return Ground(
        x, y, count, total_x, total_y, total, place_x, place_y,
        tuple(float(edge) for edge in bounds), kind, float(threshold), float(least_total),
    )  # fmt: skip


def split(study, event_places, total_places, budget, generator):
    """Draw the held-out halves for the allocation of a budget.

    Parameters
    ----------
    study : Ground
    event_places, total_places : (events,), (totals,) int arrays
        Evaluated place that each event place and total place of the ground lies in.
    budget : float
    generator : numpy.random.Generator

    Returns
    -------
    Halves
    """
    half = allocation.random_half(study.count, generator)
    number = len(study.place_x)
    return Halves(
        allocation.check_budget(budget),
        half,
        np.bincount(event_places, weights=half, minlength=number),
        np.bincount(event_places, weights=study.count, minlength=number),
        np.bincount(total_places, weights=study.total, minlength=number),
    )


def run_scales(
    study, sizes, shape, replicates, seed, rotate=True, halves=None, executor=None, progress=silent
):
    """Run all replicates of all cell sizes.

    Parameters
    ----------
    study : Ground
    sizes : sequence of float
        Cell sizes, units of the working CRS.
    shape : {"hexagon", "square"}
    replicates : int
        Tilings of each size.
    seed : int
    rotate : bool
        Turn each tiling at random as well.
    halves : Halves, optional
        Also work out the events that a budget reaches.
    executor : concurrent.futures.ThreadPoolExecutor, optional
        Without one, batches run one after the other in the calling thread.
    progress : callable

    Returns
    -------
    list of Scale
    """
    if replicates < 1:
        raise InputError(f"REPLICATES must be at least 1; found {replicates}.")
    batches = -(-replicates // BATCH)
    tasks = [
        (
            scale,
            min(BATCH, replicates - batch * BATCH),
            np.random.SeedSequence(seed, spawn_key=(scale, batch)),
        )
        for scale in range(len(sizes))
        for batch in range(batches)
    ]
    scales = [None] * len(sizes)
    for scale, part in _in_order(
        lambda task, tick: _batch(study, sizes[task[0]], shape, rotate, task, halves, tick),
        tasks,
        replicates * len(sizes),
        executor,
        progress,
    ):
        if scales[scale] is None:
            scales[scale] = part
        else:
            scales[scale].merge(part)
    return scales


def decompose_scales(scales):
    """Decomposition, p_above and evidence of every place over all cell sizes.

    Returns
    -------
    Decomposition, (places,) array, (places,) array
    """
    replicates = [scale.replicates for scale in scales]
    parts = variance.decompose(
        [scale.moments for scale in scales],
        replicates,
        [scale.per_scenario(scale.counting) for scale in scales],
    )
    return (parts, *variance.share_above([scale.tally for scale in scales], replicates))


def allocate(scales, halves):
    """Events that the budget reaches under each tiling, their average, and at best.

    Returns
    -------
    Allocation
    """
    weights = variance.scale_weights(
        [scale.moments.count for scale in scales], [scale.replicates for scale in scales]
    )
    half_values, other_values = (
        sum(w * scale.per_scenario(getattr(scale, name)) for w, scale in zip(weights, scales))
        for name in ("half_values", "other_values")
    )
    counted = halves.place_half, halves.place_count, halves.place_total
    return allocation.Allocation(
        halves.budget,
        float(halves.place_count.sum()),
        np.concatenate([scale.statistics["reached"] for scale in scales]),
        allocation.held_out_events_by_value(half_values, other_values, *counted, halves.budget),
        None,
        allocation.best_possible(halves.place_count, halves.place_total, halves.budget),
    )


def _stacked(x, y, weight):
    """Merge points on the same spot, in order of x and then y."""
    x, y, weight = (np.asarray(part, float) for part in (x, y, weight))
    places, index = np.unique(np.stack([x, y], axis=1), axis=0, return_inverse=True)
    summed = np.bincount(index.ravel(), weights=weight, minlength=len(places))
    return np.ascontiguousarray(places[:, 0]), np.ascontiguousarray(places[:, 1]), summed


def _batch(study, size, shape, rotate, task, halves, tick):
    """The scenarios of one batch as a Scale."""
    scale, replicates, sequence = task
    generator = np.random.default_rng(sequence)
    number = len(study.place_x)
    sums = np.zeros((number, 6 if halves is None else 8))
    rows = []
    for _ in range(replicates):
        tiling = random_tiling(shape, size, rotate, generator)
        table, block, statistics = tiling_values(study, tiling, halves)
        cells = cell_numbers(block, study.place_x, study.place_y)
        for start in range(0, number, _BLOCK):
            part = slice(start, start + _BLOCK)
            sums[part] += table.take(cells[part], axis=0)
        rows.append(statistics)
        tick()
    count, deviations, squares, counting, above, evidence = sums.T[:6].copy()
    moments = variance.RunningMoments.from_sums(count, deviations, squares, study.threshold)
    tally = variance.ThresholdTally(number)
    tally.count, tally.above, tally.evidence = moments.count, above, evidence
    half_values, other_values = (None, None) if halves is None else sums.T[6:].copy()
    columns = {name: np.array([row[name] for row in rows], float) for name in rows[0]}
    return scale, Scale(size, moments, tally, counting, half_values, other_values, columns)


def tiling_values(study, tiling, halves=None):
    """Values and statistics of the cells of one tiling.

    Parameters
    ----------
    study : Ground
    tiling : Tiling
    halves : Halves, optional

    Returns
    -------
    table : (cells, 6 or 8) array
        Of each cell: 1, v - threshold, its square, counting variance, `exceeds` and
        `standardised_excess`, and with halves the values of either half; rows of 0 where the
        cell has no value.
    block : CellBlock
    statistics : dict of name to float
    """
    block = cell_block(tiling, study.bounds)
    events = cell_numbers(block, study.x, study.y)
    count = np.bincount(events, weights=study.count, minlength=block.cells)
    totals = cell_numbers(block, study.total_x, study.total_y)
    total = np.bincount(totals, weights=study.total, minlength=block.cells)
    used = np.flatnonzero((total > 0) & (total >= study.least_total))
    used_count, used_total = count[used], total[used]
    value = used_count / used_total
    table = np.zeros((block.cells, 6 if halves is None else 8))
    deviation = value - study.threshold
    columns = [
        np.ones(len(used)),
        deviation,
        deviation * deviation,
        variance.counting_variance(value, used_total, study.kind),
        variance.exceeds(value, study.threshold),
        variance.standardised_excess(value, used_total, study.threshold, study.kind),
    ]
    found = zone_statistics(used_count, used_total, study.threshold, study.kind)
    statistics = {name: getattr(found, name) for name in ZoneStatistics.names()}
    values = np.full(block.cells, np.nan)
    values[used] = value
    statistics["morans_i"] = lattice_morans_i(values, block)
    if halves is not None:
        half = np.bincount(events, weights=halves.half, minlength=block.cells)[used]
        columns += [half / used_total, (used_count - half) / used_total]
        statistics["reached"] = allocation.held_out_events(
            half, used_count, used_total, halves.budget
        )
    table[used] = np.stack(columns, axis=1)
    return table, block, statistics


def _in_order(work, tasks, steps, executor, progress):
    """Results of the tasks in their order; a few run ahead, none is kept longer than needed."""
    done = np.zeros(len(tasks))
    stop = Event()

    def ticked(position):
        def tick():
            done[position] += 1
            if executor is None:
                progress(done.sum() / steps)
            elif stop.is_set():
                raise InterruptedError("Another part of the work has stopped.")

        return tick

    if executor is None:
        for position, task in enumerate(tasks):
            yield work(task, ticked(position))
        return
    waiting, ahead, submitted = deque(), 2 * (os.cpu_count() or 1), 0
    try:
        while submitted < len(tasks) or waiting:
            while submitted < len(tasks) and len(waiting) < ahead:
                waiting.append(executor.submit(work, tasks[submitted], ticked(submitted)))
                submitted += 1
            while not waiting[0].done():
                progress(done.sum() / steps)
                wait([waiting[0]], timeout=0.1)
            yield waiting.popleft().result()
        progress(1.0)
    finally:
        stop.set()
        for future in waiting:
            future.cancel()
        wait(waiting)
