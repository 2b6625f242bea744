"""Zoning variance from base units: many random zonings, and what of a map they leave standing.

``problem`` (scenarios) says what is counted; ``recipes`` says how zones are made; ``simulate``
runs the zonings in batches and keeps running sums, one row of statistics a zoning and the
extreme zonings themselves.
"""

from dataclasses import dataclass
from typing import Optional

import numpy as np

from .allocation import Allocation, best_possible, held_out_events, held_out_events_by_value
from .batches import plan_batches, run_batches
from .builders import EFFORTS, TREE_CUT, Recipe, build, least_total_for
from .errors import InputError
from .growth import check_zone_count
from .progress import part, silent
from .scenarios import Problem, describe, judgements, zone_ranks, zone_sums
from .treezones import check_least_total
from .variance import BinnedCounts, RunningMoments, ThresholdTally
from .zone_results import Extreme, ScaleResult, Simulation, place_official

MOST_BINS = 200
BINNED_VALUES = 12_000_000  # bins times units that are held
RANK_BINS = 50
MISSING = 255
PILOT_VALUES = 100_000
PILOT_ZONINGS = 20
BUILDING = 0.6  # part of the work of a batch that is making its zones


def recipes(
    problem, builder, zone_counts, generator, least_total=None, tolerance=0.1, progress=silent
):
    """One recipe for each number of zones, checked.

    Parameters
    ----------
    problem : Problem
    builder : {"grown", "tree-cut", "balanced"}
    zone_counts : sequence of int
    generator : numpy.random.Generator
        For the pilot that finds what a tree-cut must hold to give so many zones.
    least_total : float, optional
        Tree-cut only: no zone holds less. A number of zones too large for it comes out smaller.
    tolerance : float
        Balanced only.
    progress : callable

    Returns
    -------
    tuple of Recipe

    Raises
    ------
    InputError
        A number of zones that cannot be made.
    """
    graph, totals = problem.graph, problem.totals
    if least_total is not None and builder != TREE_CUT:
        raise InputError(
            "LEAST_TOTAL is kept by tree-cut zones only, and BUILDER is {}; choose "
            "tree-cut or leave LEAST_TOTAL empty.",
            builder,
        )
    if not len(zone_counts):
        raise InputError("ZONE_COUNTS: no number of zones was given; give one or more.")
    if least_total is not None:
        check_least_total(graph, totals, least_total)
    made = []
    wanted = sorted({int(count) for count in zone_counts})
    for place, zone_count in enumerate(wanted):
        recipe = Recipe(builder, zone_count, tolerance=tolerance)
        check_zone_count(graph, zone_count)
        if builder == TREE_CUT:
            stretch = part(progress, place / len(wanted), (place + 1) / len(wanted))
            found = least_total_for(graph, totals, zone_count, generator, stretch)
            recipe = Recipe(builder, zone_count, max(found, least_total or 0.0))
        made.append(recipe)
    return tuple(made)


@dataclass(frozen=True)
class Work:
    """What a batch of zonings needs, wherever it runs."""

    problem: Problem
    recipes: tuple
    value_edges: np.ndarray
    statistic: int


@dataclass(frozen=True)
class BatchResult:
    """What a batch of zonings hands back: sums over its zonings, codes and rows of each."""

    scale: int
    moments: RunningMoments
    counting: RunningMoments
    tally: ThresholdTally
    value_codes: np.ndarray
    rank_codes: np.ndarray
    statistics: np.ndarray
    extremes: tuple
    halves: Optional[tuple]


def simulate_batch(work, batch, progress=silent):
    """Make the zonings of a batch and sum them up; runs in a worker.

    Parameters
    ----------
    work : Work
    batch : Batch
    progress : callable

    Returns
    -------
    BatchResult
    """
    setting = work.problem
    recipe = work.recipes[batch.scale]
    labels = build(
        setting.graph, setting.totals, recipe, batch.replicates, batch.generator(),
        part(progress, 0.0, BUILDING),
    )  # fmt: skip
    progress(BUILDING)
    block = describe(setting, labels)
    zones = block.values.shape[1]
    place = labels + (np.arange(batch.replicates, dtype=np.int64) * zones)[:, None]

    def on_units(of_zones):
        return of_zones.ravel()[place]

    progress(BUILDING + 0.1)
    counting, above, excess = judgements(setting, block)
    tally = ThresholdTally(setting.graph.units)
    tally.add_many(on_units(above), on_units(excess))
    halves = None
    if setting.budget is not None:
        halves = tuple(
            RunningMoments.of(on_units(values))
            for values in (block.half_values, block.other_values)
        )
    progress(BUILDING + 0.2)
    moments = [RunningMoments.of(on_units(values)) for values in (block.values, counting)]
    progress(BUILDING + 0.3)
    rank_edges = np.linspace(0, 1, RANK_BINS + 1)
    return BatchResult(
        batch.scale,
        *moments,
        tally,
        on_units(_codes(block.values, work.value_edges)),
        on_units(_codes(zone_ranks(block.values, labels), rank_edges)),
        block.statistics,
        _extremes(block.statistics[:, work.statistic], labels),
        halves,
    )


def simulate(
    problem, recipes, replicates, seed,
    official=None, reference=None, statistic="largest", executor=None, progress=silent,
):  # fmt: skip
    """Simulate zonings of base units and keep what they do to every unit and statistic.

    Parameters
    ----------
    problem : Problem
    recipes : sequence of Recipe
        The scales.
    replicates : int
        Zonings of each scale, at least 2.
    seed : int or numpy.random.SeedSequence
    official : (units,) int array, optional
        Zones of the official zoning, numbered from 0; below 0 for a unit in none.
    reference : Recipe, optional
        How to make zonings to compare the official one with, where no scale has its number
        of zones; they count for nothing else.
    statistic : str
        One of ``problem.statistic_names()``; the zonings with its largest and smallest value
        are kept.
    executor : concurrent.futures.Executor, optional
        Where the batches run; the result is the same to the bit.
    progress : callable

    Returns
    -------
    Simulation

    Raises
    ------
    InputError
        Too few replicates or an unknown statistic.
    """
    names = problem.statistic_names()
    if statistic not in names:
        raise InputError("The statistic is one of {}; found {!r}.", ", ".join(names), statistic)
    if not replicates >= 2:
        raise InputError("REPLICATES: two zonings a scale are the least; found {}.", replicates)
    root = seed if isinstance(seed, np.random.SeedSequence) else np.random.SeedSequence(seed)
    pilot_seed, batch_seed = root.spawn(2)
    generator = np.random.default_rng(pilot_seed)
    edges = _value_edges(problem, recipes, generator, part(progress, 0.0, 0.02))
    every = [*recipes] if reference is None else [*recipes, reference]
    work = Work(problem, tuple(every), edges, names.index(statistic))
    efforts = [EFFORTS[recipe.builder] for recipe in every]
    batches = plan_batches(problem.graph.units, [replicates] * len(every), batch_seed, efforts)
    collected = _Collected(work, len(recipes))
    results = run_batches(simulate_batch, work, batches, executor, part(progress, 0.02, 1.0))
    for result in results:
        collected.take(result)
    return collected.finish(statistic, official)


class _Collected:
    """Running sums over batches, taken in their order."""

    def __init__(self, work, scales):
        units = work.problem.graph.units
        self.work, self.scales = work, scales
        many = len(work.recipes)
        self.moments = [RunningMoments(units) for _ in range(many)]
        self.counting = [RunningMoments(units) for _ in range(many)]
        self.tallies = [ThresholdTally(units) for _ in range(many)]
        self.rows = [[] for _ in range(many)]
        self.value_bins = BinnedCounts(work.value_edges, units)
        self.rank_bins = BinnedCounts(np.linspace(0, 1, RANK_BINS + 1), units)
        self.halves = (RunningMoments(units), RunningMoments(units))
        self.largest = self.smallest = None

    def take(self, result):
        scale = result.scale
        self.moments[scale].merge(result.moments)
        self.counting[scale].merge(result.counting)
        self.tallies[scale].merge(result.tally)
        self.rows[scale].append(result.statistics)
        if scale >= self.scales:
            return
        _add_codes(self.value_bins, result.value_codes)
        _add_codes(self.rank_bins, result.rank_codes)
        if result.halves is not None:
            for kept, new in zip(self.halves, result.halves):
                kept.merge(new)
        if result.extremes is None:
            return
        (low, low_labels), (high, high_labels) = result.extremes
        zone_count = self.work.recipes[scale].zone_count
        if self.smallest is None or low < self.smallest.value:
            self.smallest = Extreme(low, low_labels, zone_count)
        if self.largest is None or high > self.largest.value:
            self.largest = Extreme(high, high_labels, zone_count)

    def finish(self, statistic, official):
        made = [
            ScaleResult(recipe, len(rows), moments, counting, tally, rows)
            for recipe, moments, counting, tally, rows in zip(
                self.work.recipes,
                self.moments,
                self.counting,
                self.tallies,
                (np.concatenate(rows) for rows in self.rows),
            )
        ]
        setting = self.work.problem
        placed = None if official is None else place_official(setting, official, made)
        return Simulation(
            setting,
            statistic,
            tuple(made[: self.scales]),
            made[self.scales] if len(made) > self.scales else None,
            self.largest,
            self.smallest,
            placed,
            self._allocation(made[: self.scales], official),
            self.value_bins,
            self.rank_bins,
        )

    def _allocation(self, scales, official):
        setting = self.work.problem
        if setting.budget is None:
            return None
        column = setting.statistic_names().index("events_reached")
        counts, totals, half = setting.counts, setting.totals, setting.half
        averaged = held_out_events_by_value(
            *(moments.expected() for moments in self.halves), half, counts, totals, setting.budget
        )
        by_official = None
        if official is not None:
            covered = np.where(official >= 0, official, official.max() + 1)
            sums = [
                zone_sums(covered[None], int(covered.max()) + 1, values)[0]
                for values in (half, counts, totals)
            ]
            by_official = held_out_events(*sums, setting.budget)
        return Allocation(
            setting.budget,
            float(counts.sum()),
            np.concatenate([scale.statistics[:, column] for scale in scales]),
            averaged,
            by_official,
            best_possible(counts, totals, setting.budget),
        )


def bytes_for(units, replicates, scales):
    """About how much memory a simulation holds: bins of the units, and a row of each zoning."""
    bins = np.clip(BINNED_VALUES // units, 40, MOST_BINS) + RANK_BINS
    rows = 8 * 10 * replicates * scales * 2  # once in pieces, once joined
    return float(8 * units * (bins + 12 * (scales + 1)) + rows + 400e6)


def _value_edges(problem, recipes, generator, progress):
    """Edges of the quantile bins: fine where a pilot of zonings puts many values.

    No zone value lies outside the values of the units (a mediant lies between its parts).
    """
    used = problem.totals > 0
    own = problem.counts[used] / problem.totals[used]
    pilot = []
    for place, recipe in enumerate(recipes):
        stretch = part(progress, place / len(recipes), (place + 1) / len(recipes))
        stretch(0.0)
        many = PILOT_VALUES // (problem.graph.units * EFFORTS[recipe.builder])
        many = int(np.clip(many, 1, PILOT_ZONINGS))
        labels = build(problem.graph, problem.totals, recipe, many, generator, stretch)
        values = describe(problem, labels).values
        on_units = np.take_along_axis(values, labels.astype(np.int64), axis=1)
        pilot.append(on_units[~np.isnan(on_units)])
    bins = int(np.clip(BINNED_VALUES // problem.graph.units, 40, MOST_BINS))
    pilot = np.concatenate(pilot)
    by_mass = np.quantile(pilot, np.linspace(0, 1, bins // 2))
    evenly = np.linspace(pilot.min(), pilot.max(), bins // 2)
    # zones may hold events of units without a total, so a value may leave the units' range
    low, high = min(own.min(), pilot.min()), max(own.max(), pilot.max())
    edges = np.unique(np.r_[low, by_mass, evenly, high])
    if len(edges) < 2:
        return np.array([low - 0.5 * abs(low) - 1e-9, high + 0.5 * abs(high) + 1e-9])
    apart = np.r_[True, np.diff(edges) > 1e-12 * max(abs(low), abs(high))]
    apart[-1] = True
    return edges[apart]


def _codes(values, edges):
    """Bin of each value as one byte; MISSING without a value."""
    index = np.searchsorted(edges, values, side="right") - 1
    index = np.clip(index, 0, len(edges) - 2)
    return np.where(np.isnan(values), MISSING, index).astype(np.uint8)


def _add_codes(bins, codes):
    """Count the codes of (replicates, units) in the bins of the units."""
    units, many = bins.counts.shape
    cell = (codes + np.arange(units, dtype=np.int64) * many)[codes != MISSING]
    if codes.size * 4 < bins.counts.size:
        np.add.at(bins.counts.reshape(-1), cell, 1)
    else:
        bins.counts += np.bincount(cell, minlength=bins.counts.size).reshape(units, many)


def _extremes(values, labels):
    """((smallest, its labels), (largest, its labels)) of a batch, or None without any value."""
    if np.isnan(values).all():
        return None
    low, high = int(np.nanargmin(values)), int(np.nanargmax(values))
    kept = np.int32
    return (
        (float(values[low]), labels[low].astype(kept)),
        (float(values[high]), labels[high].astype(kept)),
    )
