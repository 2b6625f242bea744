"""What regular tilings are laid over: records, what they are compared with, places to evaluate."""

from dataclasses import dataclass

import numpy as np

from . import allocation
from .errors import InputError


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
    least_inside : float
        Where the total is an area: a cell with less than this share of its own area in total has
        no value. 0 otherwise.
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
    least_inside: float = 0.0


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


def ground(events, totals, places, kind, threshold=None, least_total=0.0, least_inside=0.0):
    """Check and pack the data of a study.

    Parameters
    ----------
    events : (x, y, count) of (n,) arrays
    totals : (x, y, total) of (m,) arrays
    places : (x, y) of (places,) arrays
    kind : {"share", "rate"}
    threshold : float, optional
        The overall value, sum of count over sum of total, unless given.
    least_total, least_inside : float
        See `Ground`.

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
        float(least_inside),
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


def _stacked(x, y, weight):
    """Merge points on the same spot, in order of x and then y."""
    x, y, weight = (np.asarray(part, float) for part in (x, y, weight))
    order = np.lexsort((y, x))
    x, y = x[order], y[order]
    first = np.ones(len(x), bool)
    first[1:] = (x[1:] != x[:-1]) | (y[1:] != y[:-1])
    summed = np.bincount(np.cumsum(first) - 1, weights=weight[order], minlength=first.sum())
    return x[first], y[first], summed
