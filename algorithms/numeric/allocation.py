"""How many events a service of limited reach meets when places are chosen by zone values.

A service that can cover a share of the population (the budget) goes to the places with the
highest values. Where zone lines run decides which places those are, so a zoning has an
efficiency: the events that lie in the chosen places. Choosing and counting on the same events
would flatter every zoning that isolates chance clusters, so places are chosen on one random
half of the events and the events are counted in the other half; then the halves change
parts, so that each event is counted once.
"""

from dataclasses import dataclass

import numpy as np

from .errors import InputError
from .variance import zone_values


@dataclass(frozen=True)
class Allocation:
    """Events reached by one budget under many zonings; all numbers are events.

    Attributes
    ----------
    budget : float
        Share of the total population that the service covers, 0 to 1.
    events : float
        All events of the area.
    scenarios : (scenarios,) array
        Held-out events reached by each zoning alone.
    averaged : float
        Held-out events reached by the value averaged over all zonings.
    official : float or None
        Held-out events reached by the official zoning.
    best : float
        Events reached by the best choice of base units, known only afterwards.
    """

    budget: float
    events: float
    scenarios: np.ndarray
    averaged: float
    official: float
    best: float

    @property
    def by_chance(self):
        """Events that places drawn at random are expected to reach."""
        return self.budget * self.events

    @property
    def by_luck(self):
        """Events between the 5 % and the 95 % zoning if all chose equally good places.

        Which events lie in a zoning's places is itself chance: of E events each is reached with
        probability m, the share of the middling zoning, so that zonings without a place in common
        spread with a standard deviation of sqrt(E m (1 - m)) (binomial) and nine tenths of them
        over 2 x 1.645 of it. Zonings that share places spread less.
        """
        reached = min(max(self.median / self.events, 0.0), 1.0) if self.events else 0.0
        return 3.29 * float(np.sqrt(self.events * reached * (1.0 - reached)))

    @property
    def median(self):
        """Held-out events that the median single zoning reaches."""
        return float(np.median(self.scenarios))

    def quantiles(self, levels=(0.05, 0.5, 0.95)):
        """Quantiles of the held-out events reached over the scenarios."""
        return np.quantile(self.scenarios, levels)

    def official_place(self):
        """Share of the scenarios that reach fewer events than the official zoning (ties half)."""
        if self.official is None:
            return None
        below = np.mean(self.scenarios < self.official)
        return float(below + np.mean(self.scenarios == self.official) / 2)


def check_budget(budget):
    """Return the budget as a float, or say why it cannot be one."""
    budget = float(budget)
    if not 0 < budget < 1:
        raise InputError(
            "BUDGET is the share of the population that the service covers: above 0 and "
            "below 1; found {:g}.",
            budget,
        )
    return budget


def random_half(counts, generator):
    """Draw a random half of the events of each place.

    Every whole event falls to the half by a fair coin; what a weighted count has beyond whole
    events goes to one side or the other, undivided, by one more coin.

    Parameters
    ----------
    counts : (places,) array
        Events, not negative.
    generator : numpy.random.Generator

    Returns
    -------
    (places,) float array
        Events of the drawn half; ``counts`` minus it is the other half.
    """
    counts = np.asarray(counts, float)
    if counts.size and not (np.isfinite(counts).all() and counts.min() >= 0):
        raise InputError("Events must be finite and not negative to be split into halves.")
    whole = np.floor(counts)
    half = generator.binomial(whole.astype(np.int64), 0.5).astype(float)
    return half + (counts - whole) * (generator.random(counts.shape) < 0.5)


def events_reached(values, totals, events, budget):
    """Events in the highest-valued places that the budget covers.

    Places are taken from the highest value down until the budget is used. Where the budget
    ends inside a place, or inside several of equal value, its rest covers that share of their
    people and is credited with that share of their events: the expectation over a random choice
    of people there. Places without a value come last.

    Parameters
    ----------
    values : (places,) or (places, scenarios) array
        What places are chosen by; NaN for no value.
    totals, events : arrays of the same shape
        Population and events of the places, not negative.
    budget : float
        Share of the total that is covered, 0 to 1.

    Returns
    -------
    float or (scenarios,) array
    """
    values = np.asarray(values, float)
    ranked = np.where(np.isnan(values), -np.inf, values)
    order = np.argsort(-ranked, axis=0, kind="stable")
    ranked = np.take_along_axis(ranked, order, 0)
    covered = np.cumsum(np.take_along_axis(np.broadcast_to(totals, values.shape), order, 0), 0)
    reached = np.cumsum(np.take_along_axis(np.broadcast_to(events, values.shape), order, 0), 0)
    limit = budget * covered[-1]
    last_of_equals = np.ones(ranked.shape, bool)
    last_of_equals[:-1] = ranked[1:] != ranked[:-1]
    whole = last_of_equals & (covered <= limit)
    beyond = last_of_equals & (covered > limit)
    covered_whole = np.where(whole, covered, 0).max(0)
    reached_whole = np.where(whole, reached, 0).max(0)
    covered_next = np.where(beyond, covered, np.inf).min(0)
    reached_next = np.where(beyond, reached, np.inf).min(0)
    some = np.isfinite(covered_next)
    share = (limit - covered_whole) / np.where(some, covered_next - covered_whole, 1)
    gain = np.where(some, reached_next, reached_whole) - reached_whole
    result = reached_whole + np.where(some, share, 0) * gain
    return float(result) if result.ndim == 0 else result


def held_out_events(half, counts, totals, budget):
    """Events reached when each half of them is counted in places chosen on the other half.

    Parameters
    ----------
    half, counts, totals : (places,) or (places, scenarios) arrays
        Events of the drawn half, all events and population of the places: the zones of one
        zoning, a column a zoning.
    budget : float

    Returns
    -------
    float or (scenarios,) array
        Out of all events; each event is counted once, in the half that did not choose.
    """
    other = np.asarray(counts, float) - half
    return events_reached(zone_values(half, totals), totals, other, budget) + events_reached(
        zone_values(other, totals), totals, half, budget
    )


def held_out_events_by_value(half_values, other_values, half, counts, totals, budget):
    """Events reached when the values of the places come from elsewhere than their own counts.

    For the average over many zonings: a base unit carries the mean of the values of the zones
    that it fell in.

    Parameters
    ----------
    half_values, other_values : (places,) arrays
        Values worked out from the drawn half and from the other half.
    half, counts, totals : (places,) arrays
        As in :func:`held_out_events`.
    budget : float

    Returns
    -------
    float
    """
    other = np.asarray(counts, float) - half
    return events_reached(half_values, totals, other, budget) + events_reached(
        other_values, totals, half, budget
    )


def best_possible(counts, totals, budget):
    """Events in the best choice of base units for a budget, known only with hindsight.

    Parameters
    ----------
    counts, totals : (units,) arrays
    budget : float

    Returns
    -------
    float
    """
    return events_reached(zone_values(counts, totals), totals, counts, budget)
