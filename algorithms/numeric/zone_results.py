"""What is kept of many simulated zonings, and what can be read from it."""

from dataclasses import dataclass, replace
from typing import Optional

import numpy as np

from .allocation import Allocation
from .builders import Recipe
from .scenarios import Problem, describe
from .variance import (
    BinnedCounts,
    Decomposition,
    RunningMoments,
    ThresholdTally,
    coverage,
    decompose,
    share_above,
    verdict,
)


@dataclass(frozen=True)
class ScaleResult:
    """The zonings of one recipe, summed up.

    Attributes
    ----------
    recipe : Recipe
    replicates : int
    moments, counting : RunningMoments
        Of the value of each unit, and of its counting variance.
    tally : ThresholdTally
    statistics : (replicates, names) array
        One row a zoning, in the order of ``Problem.statistic_names``.
    """

    recipe: Recipe
    replicates: int
    moments: RunningMoments
    counting: RunningMoments
    tally: ThresholdTally
    statistics: np.ndarray


@dataclass(frozen=True)
class Extreme:
    """The zoning that gave the largest or smallest value of the chosen statistic.

    Attributes
    ----------
    value : float
    labels : (units,) array
    zone_count : int
        Of the recipe.
    """

    value: float
    labels: np.ndarray
    zone_count: int


@dataclass(frozen=True)
class Official:
    """An official zoning among the simulated ones of its own number of zones.

    Attributes
    ----------
    labels : (units,) int array
    zone_count : int
    statistics : (names,) array
    places : (names,) array
        Share of the simulated zonings with a smaller value, ties counted half; NaN where
        there is nothing to compare with.
    """

    labels: np.ndarray
    zone_count: int
    statistics: np.ndarray
    places: np.ndarray


@dataclass(frozen=True)
class Simulation:
    """All that is kept of the simulated zonings.

    Attributes
    ----------
    problem : Problem
    statistic : str
        The one whose extremes were kept.
    scales : tuple of ScaleResult
    reference : ScaleResult or None
        Zonings with the official number of zones, where it is not one of the scales.
    largest, smallest : Extreme
    official : Official or None
    allocation : Allocation or None
    """

    problem: Problem
    statistic: str
    scales: tuple
    reference: Optional[ScaleResult]
    largest: Extreme
    smallest: Extreme
    official: Optional[Official]
    allocation: Optional[Allocation]
    value_bins: BinnedCounts
    rank_bins: BinnedCounts

    @property
    def replicates(self):
        """Zonings of each scale."""
        return [scale.replicates for scale in self.scales]

    def decomposition(self) -> Decomposition:
        """Scale, zoning and counting variance of every unit."""
        return decompose(
            [scale.moments for scale in self.scales],
            self.replicates,
            [scale.counting.mean for scale in self.scales],
        )

    def above(self):
        """(p_above, evidence) of every unit."""
        return share_above([scale.tally for scale in self.scales], self.replicates)

    def verdicts(self):
        """1 holds above, -1 holds below, 0 depends, NaN no value; (units,) array."""
        tallies = [scale.tally for scale in self.scales]
        return verdict(*self.above(), coverage(tallies, self.replicates))

    def quantiles(self, share):
        """Quantile of every unit's value over all zonings, within a bin's width."""
        return self.value_bins.quantile(share)

    def rank_quantiles(self, share):
        """Quantile of every unit's rank, 1 the highest value and the number of units the lowest."""
        units = self.problem.graph.units
        return np.clip(self.rank_bins.quantile(share) * units + 0.5, 1, units)


def place_official(problem, labels, scales):
    """Where the statistics of an official zoning fall among simulated ones as numerous.

    Parameters
    ----------
    problem : Problem
    labels : (units,) int array
        From 0 up; below 0 for a unit in no official zone, which then counts for nothing.
    scales : sequence of ScaleResult

    Returns
    -------
    Official
    """
    labels = np.asarray(labels)
    row = describe(*_covered(problem, labels)).statistics[0]
    zone_count = len(np.unique(labels[labels >= 0]))
    places = np.full(len(row), np.nan)
    for scale in scales:
        if scale.recipe.zone_count == zone_count:
            below = (scale.statistics < row).sum(axis=0)
            equal = (scale.statistics == row).sum(axis=0)
            known = (~np.isnan(scale.statistics)).sum(axis=0)
            some = (known > 0) & ~np.isnan(row)
            places[some] = (below[some] + equal[some] / 2) / known[some]
    return Official(labels, zone_count, row, places)


def _covered(problem, labels):
    """The problem without what lies in no official zone, and labels that are all at least 0."""
    covered = labels >= 0
    if covered.all():
        return problem, labels[None]
    emptied = {
        name: np.where(covered, getattr(problem, name), 0.0) for name in ("counts", "totals")
    }
    if problem.half is not None:
        emptied["half"] = np.where(covered, problem.half, 0.0)
    pairs = problem.graph.pairs
    inside = covered[pairs].all(axis=1)
    emptied["graph"] = replace(
        problem.graph, pairs=pairs[inside], border=problem.graph.border[inside]
    )
    return replace(problem, **emptied), np.where(covered, labels, labels.max() + 1)[None]
