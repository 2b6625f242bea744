"""From zone labels to zone values and the numbers that describe each zoning."""

from dataclasses import dataclass
from typing import Optional

import numpy as np

from . import allocation
from .contiguity import Contiguity
from .errors import InputError
from .variance import (
    RATE,
    SHARE,
    counting_variance,
    exceeds,
    standardised_excess,
    zone_values,
)
from .zone_statistics import ZoneStatistics, morans_i, zone_statistics

FLAGGED_ADJACENCY = 4_000_000  # zone pairs of a block that may be flagged densely


@dataclass(frozen=True)
class Problem:
    """What is counted, over what, and how it is judged; the same for every zoning.

    Attributes
    ----------
    graph : Contiguity
    counts, totals : (units,) arrays
        Events, and people at risk or area.
    kind : {"share", "rate"}
    threshold : float
        Value that zones are compared with.
    budget : float, optional
        Share of the total that a service covers.
    half : (units,) array, optional
        Random half of the events; needed with a budget.
    """

    graph: Contiguity
    counts: np.ndarray
    totals: np.ndarray
    kind: str
    threshold: float
    budget: Optional[float] = None
    half: Optional[np.ndarray] = None

    @property
    def overall(self):
        """Value of the whole area, the same under every zoning."""
        return float(self.counts.sum() / self.totals.sum())

    def statistic_names(self):
        """Names of the numbers that describe a zoning, in order."""
        names = (*ZoneStatistics.names(), "morans_i")
        return names if self.budget is None else (*names, "events_reached")


def amounts(name, values, units):
    """One amount for each unit as floats.

    Parameters
    ----------
    name : str
        What they are called in an error.
    values : (units,) array
    units : int

    Raises
    ------
    InputError
        Too many, too few, missing or negative values.
    """
    values = np.asarray(values, float)
    if values.shape != (units,):
        raise InputError("{}: {} values are needed; found {}.", name, units, values.shape)
    bad = ~(np.isfinite(values) & (values >= 0))
    if bad.any():
        raise InputError(
            "{}: {} units have a missing or negative value (the first is number {}: {:g}); "
            "correct or leave them out.",
            name,
            bad.sum(),
            np.argmax(bad) + 1,
            values[np.argmax(bad)],
        )
    return values


def problem(graph, counts, totals, kind=None, threshold=None, budget=None, generator=None):
    """Check the counts and totals and put a problem together.

    Parameters
    ----------
    graph : Contiguity
    counts, totals : (units,) arrays
        Finite and not negative.
    kind : {"share", "rate"}, optional
        By default a share when no count exceeds its total, a rate otherwise.
    threshold : float, optional
        By default the overall value.
    budget : float, optional
    generator : numpy.random.Generator, optional
        Draws the half of the events that choose; needed with a budget.

    Returns
    -------
    Problem

    Raises
    ------
    InputError
        Values missing or negative, or no total at all.
    """
    counts = amounts("COUNT", counts, graph.units)
    totals = amounts("TOTAL", totals, graph.units)
    if not totals.sum() > 0:
        raise InputError(
            "TOTAL: it is 0 in every unit, so no zone has a value; choose the field that "
            "holds the people at risk."
        )
    if not counts.sum() > 0:
        raise InputError("COUNT: it is 0 in every unit, so every zoning shows the same: nothing.")
    if kind is None:
        kind = SHARE if (counts <= totals).all() else RATE
    if threshold is None:
        threshold = counts.sum() / totals.sum()
    half = None
    if budget is not None:
        budget = allocation.check_budget(budget)
        half = allocation.random_half(counts, generator)
    return Problem(graph, counts, totals, kind, float(threshold), budget, half)


def zone_sums(labels, zones, values):
    """Sum a value of the units over zones, many zonings at once.

    Parameters
    ----------
    labels : (replicates, units) int array
    zones : int
    values : (units,) array

    Returns
    -------
    (replicates, zones) float array
    """
    replicates, _ = labels.shape
    code = labels + (np.arange(replicates) * zones)[:, None]
    weights = np.broadcast_to(values, labels.shape).ravel()
    return np.bincount(code.ravel(), weights, minlength=replicates * zones).reshape(-1, zones)


def neighbouring_zones(graph, labels, zones):
    """Pairs of zones that share a border, each once a zoning.

    Parameters
    ----------
    graph : Contiguity
    labels : (replicates, units) int array
    zones : int

    Returns
    -------
    zoning, first, second : (pairs,) int arrays
    """
    replicates = len(labels)
    first, second = np.ascontiguousarray(graph.pairs.T)
    code = np.take(labels, first, axis=1) + (np.arange(replicates) * zones)[:, None]
    code = code * zones + np.take(labels, second, axis=1)
    if replicates * zones**2 <= FLAGGED_ADJACENCY:
        flags = np.zeros((replicates, zones, zones), bool)
        flags.reshape(-1)[code.ravel()] = True
        flags |= flags.transpose(0, 2, 1)
        return np.nonzero(flags & ~np.tri(zones, dtype=bool))
    code = np.unique(code)
    zoning, one, other = code // zones**2, code // zones % zones, code % zones
    ends = np.c_[zoning, np.minimum(one, other), np.maximum(one, other)][one != other]
    return tuple(np.unique(ends, axis=0).T)


@dataclass(frozen=True)
class ZonedBlock:
    """Zone values of a block of zonings.

    Attributes
    ----------
    counts, totals, values : (replicates, zones) arrays
    statistics : (replicates, names) array
        In the order of ``Problem.statistic_names``.
    half, half_values, other_values : (replicates, zones) arrays or None
        Of the half of the events that chooses, with a budget.
    """

    counts: np.ndarray
    totals: np.ndarray
    values: np.ndarray
    statistics: np.ndarray
    half: Optional[np.ndarray] = None
    half_values: Optional[np.ndarray] = None
    other_values: Optional[np.ndarray] = None


def describe(problem, labels):
    """Zone values and statistics of a block of zonings.

    Parameters
    ----------
    problem : Problem
    labels : (replicates, units) int array

    Returns
    -------
    ZonedBlock
    """
    zones = int(labels.max()) + 1
    counts = zone_sums(labels, zones, problem.counts)
    totals = zone_sums(labels, zones, problem.totals)
    values = zone_values(counts, totals)
    found = zone_statistics(counts, totals, problem.threshold, problem.kind)
    columns = [getattr(found, name) for name in ZoneStatistics.names()]
    zoning, first, second = neighbouring_zones(problem.graph, labels, zones)
    columns.append(morans_i(values, first, second, zoning))
    if problem.budget is None:
        return ZonedBlock(counts, totals, values, np.stack(columns, axis=1))
    half = zone_sums(labels, zones, problem.half)
    reached = allocation.held_out_events(half.T, counts.T, totals.T, problem.budget)
    return ZonedBlock(
        counts,
        totals,
        values,
        np.stack([*columns, reached], axis=1),
        half,
        zone_values(half, totals),
        zone_values(counts - half, totals),
    )


def zone_ranks(values, labels):
    """Rank of every unit by the value of its zone, as a share: 0 the highest, 1 the lowest.

    Units of one zone, and of zones of equal value, share the middle of their ranks; units without
    a value have none.

    Parameters
    ----------
    values : (replicates, zones) array
    labels : (replicates, units) int array

    Returns
    -------
    (replicates, zones) array
        NaN without a value.
    """
    sizes = zone_sums(labels, values.shape[1], np.ones(labels.shape[1]))
    sizes = np.where(np.isnan(values), 0, sizes)
    order = np.argsort(-values, axis=1, kind="stable")
    ranked = np.take_along_axis(values, order, 1)
    ends = np.cumsum(np.take_along_axis(sizes, order, 1), axis=1)
    begins = ends - np.take_along_axis(sizes, order, 1)
    new = np.ones(values.shape, bool)
    new[:, 1:] = ranked[:, 1:] != ranked[:, :-1]
    last = np.ones(values.shape, bool)
    last[:, :-1] = new[:, 1:]
    begin = np.maximum.accumulate(np.where(new, begins, 0), axis=1)
    end = np.minimum.accumulate(np.where(last, ends, np.inf)[:, ::-1], axis=1)[:, ::-1]
    middle = np.empty_like(values)
    np.put_along_axis(middle, order, (begin + end) / 2, 1)
    whole = sizes.sum(axis=1, keepdims=True)
    return np.where(np.isnan(values), np.nan, middle / np.maximum(whole, 1))


def judgements(problem, block):
    """Counting variance, exceedance and standardised excess of every zone of a block."""
    return (
        counting_variance(block.values, block.totals, problem.kind),
        exceeds(block.values, problem.threshold),
        standardised_excess(block.values, block.totals, problem.threshold, problem.kind),
    )
