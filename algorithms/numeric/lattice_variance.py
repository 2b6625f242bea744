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
from .hexagons import cell_area
from .lattice_zonings import cell_block, cell_numbers, lattice_morans_i, random_tiling
from .progress import silent
from .zone_statistics import ZoneStatistics, zone_statistics

BATCH = 25

# Pixels whose rows of sums fit the processor's caches.
_BLOCK = 8192


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


def memory_needed(places, scales, cells, budget=False):
    """Bytes that `run_scales` takes at its peak, about.

    Parameters
    ----------
    places, scales : int
    cells : int
        Cells of the finest tiling over the extent.
    budget : bool
        Whether halves are carried along.
    """
    columns = 8 if budget else 6
    under_way = _ahead() + 2
    return 8 * (places * columns * (under_way + scales) + 3 * cells * columns * under_way)


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
        raise InputError("REPLICATES must be at least 1; found {}.", replicates)
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
    """Decomposition of every place over all cell sizes, and what its verdict rests on.

    Returns
    -------
    Decomposition
    p_above, evidence, covered : (places,) arrays
        As `variance.share_above` and `variance.coverage` return them.
    """
    replicates = [scale.replicates for scale in scales]
    tallies = [scale.tally for scale in scales]
    parts = variance.decompose(
        [scale.moments for scale in scales],
        replicates,
        [scale.per_scenario(scale.counting) for scale in scales],
    )
    p_above, evidence = variance.share_above(tallies, replicates)
    return parts, p_above, evidence, variance.coverage(tallies, replicates)


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
        np.concatenate([scale.statistics["events_reached"] for scale in scales]),
        allocation.held_out_events_by_value(half_values, other_values, *counted, halves.budget),
        None,
        allocation.best_possible(halves.place_count, halves.place_total, halves.budget),
    )


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
    least = max(study.least_total, study.least_inside * cell_area(tiling.size, tiling.shape))
    used = np.flatnonzero((total > 0) & (total >= least))
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
        half = np.bincount(events, weights=halves.half, minlength=block.cells)
        by_half, by_other = np.full((2, block.cells), np.nan)
        by_half[used] = half[used] / used_total
        by_other[used] = (used_count - half[used]) / used_total
        columns += [by_half[used], by_other[used]]
        # Cells without a value come last, but their people count towards the budget.
        statistics["events_reached"] = allocation.held_out_events_by_value(
            by_half, by_other, half, count, total, halves.budget
        )
    table[used] = np.stack(columns, axis=1)
    return table, block, statistics


def _ahead():
    """Batches that may be under way or finished but not yet merged."""
    return 2 * (os.cpu_count() or 1)


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
    waiting, ahead, submitted = deque(), _ahead(), 0
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
