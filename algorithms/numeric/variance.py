"""How far the value of a place moves with the zoning, kept as running sums.

A scenario is one zoning of the ground: a scale s (a number of zones, or a cell size) and a
replicate z. In each scenario a place takes the value of the zone it falls in, or no value (NaN)
where that zone has no total. Scenarios are never stored: `RunningMoments`, `BinnedCounts` and
`ThresholdTally` take them one at a time or in blocks, and merge, so that batches may run anywhere.
`decompose` then splits the variance of a place into scale, zoning and, beside them, counting noise.
"""

from dataclasses import dataclass

import numpy as np

from .errors import InputError

SHARE = "share"
RATE = "rate"

HOLDS_ABOVE = 1
HOLDS_BELOW = -1
DEPENDS = 0

HOLD_SHARE = 0.95
LEAST_EVIDENCE = 1.96
LEAST_COVERAGE = 0.5


class RunningMoments:
    """Count, mean and sum of squared deviations of each place over scenarios.

    Attributes
    ----------
    count : (places...) int64 array
        Scenarios with a value.
    mean : (places...) array
        Their mean; 0 where count is 0.
    squares : (places...) array
        Their sum of squared deviations from the mean.

    References
    ----------
    Welford (1962), Technometrics 4:419; merging: Chan, Golub & LeVeque (1983), Am. Stat. 37:242.
    """

    def __init__(self, shape):
        self.count = np.zeros(shape, np.int64)
        self.mean = np.zeros(shape)
        self.squares = np.zeros(shape)

    @classmethod
    def of(cls, values):
        """Moments over the first axis of a (scenarios, places...) array; NaN is missing."""
        values = np.asarray(values, float)
        moments = cls(values.shape[1:])
        present = ~np.isnan(values)
        filled = np.where(present, values, 0.0)
        moments.count = present.sum(axis=0)
        moments.mean = filled.sum(axis=0) / np.maximum(moments.count, 1)
        deviation = np.where(present, filled - moments.mean, 0.0)
        moments.squares = np.square(deviation).sum(axis=0)
        return moments

    @classmethod
    def from_sums(cls, count, deviations, squares, shift):
        """Moments from sums of v - shift and of its square, for a shift near the values.

        The shifted textbook sums of Chan, Golub & LeVeque (1983): safe as long as the mean's
        distance from the shift is not many orders of magnitude above the spread.

        Parameters
        ----------
        count, deviations, squares : (places...) arrays
        shift : float
        """
        moments = cls(np.shape(count))
        moments.count = np.asarray(count).astype(np.int64)
        step = deviations / np.maximum(moments.count, 1)
        moments.mean = np.where(moments.count > 0, step + shift, 0.0)
        moments.squares = np.maximum(squares - deviations * step, 0.0)
        return moments

    def add(self, values):
        """Take one more scenario, a (places...) array; NaN is missing."""
        present = ~np.isnan(values)
        self.count += present
        step = np.where(present, values - self.mean, 0.0)
        self.mean += step / np.maximum(self.count, 1)
        self.squares += step * np.where(present, values - self.mean, 0.0)

    def merge(self, other):
        """Take all scenarios of another set of moments over the same places."""
        count = self.count + other.count
        share = other.count / np.maximum(count, 1)
        step = other.mean - self.mean
        self.mean = self.mean + step * share
        self.squares = self.squares + other.squares + step * step * self.count * share
        self.count = count

    def variance(self):
        """Variance of the scenarios seen (divided by their number); NaN where there are none."""
        return _per_count(self.squares, self.count)

    def expected(self):
        """Mean of the scenarios seen; NaN where there are none."""
        return np.where(self.count > 0, self.mean, np.nan)


class BinnedCounts:
    """Quantiles of each place over scenarios, from counts in bins fixed beforehand.

    Values outside the edges fall into the first or last bin, so a quantile never lies outside
    the edges; inside, it is off by at most one bin's width.

    Parameters
    ----------
    edges : (bins + 1,) increasing array
    places : int
    """

    def __init__(self, edges, places):
        self.edges = np.asarray(edges, float)
        if self.edges.ndim != 1 or len(self.edges) < 2 or not (np.diff(self.edges) > 0).all():
            raise InputError("The edges of quantile bins must increase; found a step of 0 or less.")
        self.counts = np.zeros((places, len(self.edges) - 1), np.int64)

    def add(self, values):
        """Take a (places,) or (scenarios, places) array of values; NaN is missing."""
        values = np.atleast_2d(np.asarray(values, float))
        places, bins = self.counts.shape
        index = np.searchsorted(self.edges, values, side="right") - 1
        cell = np.clip(index, 0, bins - 1) + np.arange(places) * bins
        present = cell[~np.isnan(values)]
        self.counts += np.bincount(present, minlength=places * bins).reshape(places, bins)

    def merge(self, other):
        """Take the counts of another set of bins with the same edges."""
        if not np.array_equal(self.edges, other.edges):
            raise InputError("Quantile bins can be merged only when their edges are the same.")
        self.counts += other.counts

    def quantile(self, share):
        """Value below which a share (0 to 1) of the scenarios lies, linear within a bin.

        Returns
        -------
        (places,) array
            NaN where there are no scenarios.
        """
        reached = np.cumsum(self.counts, axis=1)
        total = reached[:, -1]
        wanted = share * total
        index = (reached < wanted[:, None]).sum(axis=1)
        # At share 0 the quantile is the lower edge of the first bin that holds anything.
        index = np.maximum(index, (reached <= 0).sum(axis=1))
        index = np.minimum(index, self.counts.shape[1] - 1)
        rows = np.arange(len(total))
        inside = self.counts[rows, index]
        before = reached[rows, index] - inside
        part = np.divide(wanted - before, inside, out=np.zeros(len(total)), where=inside > 0)
        value = self.edges[index] + part * (self.edges[index + 1] - self.edges[index])
        return np.where(total > 0, value, np.nan)


class ThresholdTally:
    """How often a place's zone exceeds the threshold, and how clearly it does so.

    Attributes
    ----------
    count : (places...) int64 array
        Scenarios with a value.
    above : (places...) array
        Scenarios above the threshold; equal to it counts as half.
    evidence : (places...) array
        Sum over scenarios of `standardised_excess`.
    """

    def __init__(self, shape):
        self.count = np.zeros(shape, np.int64)
        self.above = np.zeros(shape)
        self.evidence = np.zeros(shape)

    def add(self, above, evidence):
        """Take one scenario: `exceeds` and `standardised_excess` of every place."""
        present = ~np.isnan(above)
        self.count += present
        self.above += np.where(present, above, 0.0)
        self.evidence += np.where(present, evidence, 0.0)

    def add_many(self, above, evidence):
        """Take scenarios along the first axis of (scenarios, places...) arrays."""
        self.count += (~np.isnan(above)).sum(axis=0)
        self.above += np.nansum(above, axis=0)
        self.evidence += np.nansum(np.where(np.isnan(above), np.nan, evidence), axis=0)

    def merge(self, other):
        """Take all scenarios of another tally over the same places."""
        self.count = self.count + other.count
        self.above = self.above + other.above
        self.evidence = self.evidence + other.evidence


@dataclass(frozen=True)
class Decomposition:
    """Where the variance of a place's value comes from, (places...) arrays; NaN: no value.

    Attributes
    ----------
    mean : value averaged over all scenarios
    scale : variance between scales of the mean over replicates, Var_s(E_z[v])
    zoning : mean over scales of the variance between replicates, E_s(Var_z[v])
    total : variance over all scenarios, scale + zoning
    counting : mean variance that chance alone would give under one fixed zoning
    """

    mean: np.ndarray
    scale: np.ndarray
    zoning: np.ndarray
    total: np.ndarray
    counting: np.ndarray


def zone_values(count, total):
    """Count over total of each zone; NaN where the total is 0."""
    count, total = np.broadcast_arrays(np.asarray(count, float), np.asarray(total, float))
    return np.divide(count, total, out=np.full(count.shape, np.nan), where=total > 0)


def counting_variance(value, total, kind):
    """Variance of a zone's value that chance alone gives while the zoning stays fixed.

    Parameters
    ----------
    value : array
        Count over total of each zone.
    total : array
        Same shape: people at risk, or area for a density.
    kind : {"share", "rate"}
        A share counts members of the total, at most once each: binomial, v (1 - v) / N. A rate
        counts events that may repeat, or records per area: Poisson, v / N.

    Returns
    -------
    array
        NaN where the total is 0 or the value missing.
    """
    value = np.asarray(value, float)
    spread = value * np.clip(1.0 - value, 0.0, None) if _known(kind) == SHARE else value
    return np.divide(spread, total, out=np.full(value.shape, np.nan), where=np.asarray(total) > 0)


def exceeds(value, threshold):
    """1 where a value is above the threshold, 0 below, 0.5 equal to it, NaN where missing.

    Equal means within 1e-12 of the threshold's size: an area cut into a single zone has the
    overall value itself, whatever the order of summation.
    """
    value = np.asarray(value, float)
    above = np.where(value > threshold, 1.0, 0.0)
    above = np.where(np.abs(value - threshold) <= 1e-12 * abs(threshold), 0.5, above)
    return np.where(np.isnan(value), np.nan, above)


def standardised_excess(value, total, threshold, kind):
    """A zone's excess over the threshold in units of counting noise, also for small counts.

    Counts are brought to a scale on which their noise is 1 whatever their size, so that one record
    in an almost empty zone is not taken for strong evidence:
    rate: z = 2 (sqrt(c + 3/8) - sqrt(t N + 3/8));
    share: z = sqrt(4 N + 2) (asin sqrt((c + 3/8) / (N + 3/4)) - the same at c = t N),
    with c = v N. Where the true value is the threshold, z has a mean near 0 and a variance of
    about 1, less when only a few records are expected.

    Parameters
    ----------
    value, total : arrays of one shape
        Count over total, and total, of each zone.
    threshold : float
    kind : {"share", "rate"}

    Returns
    -------
    array
        NaN where the value is missing.

    References
    ----------
    Anscombe (1948), Biometrika 35:246.
    """
    value = np.asarray(value, float)
    total = np.where(np.isnan(value), np.nan, total)
    if _known(kind) == RATE:
        level = max(threshold, 0.0) * total
        return 2 * (np.sqrt(value * total + 0.375) - np.sqrt(level + 0.375))
    found, expected = (
        np.arcsin(np.sqrt((np.clip(part, 0, 1) * total + 0.375) / (total + 0.75)))
        for part in (value, threshold)
    )
    return np.sqrt(4 * total + 2) * (found - expected)


def scale_weights(counts, replicates):
    """Weight of each scale at each place; the weights of a place sum to 1.

    A scenario weighs one over the replicates of its scale, and a scenario without a value drops
    out. So scales weigh the same, however many replicates each had, wherever every scenario
    has a value; and a scale that gives a place a value only now and then weighs that much less.

    Parameters
    ----------
    counts : (scales, places...) array
        Scenarios with a value.
    replicates : (scales,) array
        Scenarios that were run.
    """
    counts = np.asarray(counts, float)
    run = np.asarray(replicates, float).reshape((-1,) + (1,) * (counts.ndim - 1))
    shares = counts / run
    whole = shares.sum(axis=0)
    return np.divide(shares, whole, out=np.full(shares.shape, np.nan), where=whole > 0)


def decompose(moments, replicates, counting=None):
    """Split the variance over all scenarios into scale and zoning.

    Law of total variance with the scenario weights of `scale_weights`: scale + zoning equals the
    weighted variance over all scenarios exactly, also when values are missing.

    Parameters
    ----------
    moments : sequence of RunningMoments, one a scale
    replicates : sequence of int
        Scenarios run at each scale, missing values included.
    counting : sequence of arrays, optional
        Mean over the scenarios of each scale of `counting_variance` at the same places; what
        stands where a scale has no value does not matter. Without it counting is NaN.

    Returns
    -------
    Decomposition
    """
    weights = scale_weights([scale.count for scale in moments], replicates)
    means = np.stack([scale.mean for scale in moments])
    within = np.stack([_per_count(scale.squares, scale.count, 0.0) for scale in moments])
    mean = (weights * means).sum(axis=0)
    between = (weights * np.square(means - mean)).sum(axis=0)
    zoning = (weights * within).sum(axis=0)
    if counting is None:
        noise = np.full(mean.shape, np.nan)
    else:
        noise = np.where(weights > 0, weights * np.stack(counting), 0.0).sum(axis=0)
        noise = np.where(np.isnan(mean), np.nan, noise)
    return Decomposition(mean, between, zoning, between + zoning, noise)


def share_above(tallies, replicates):
    """Weighted share of scenarios above the threshold, and mean standardised excess.

    Parameters
    ----------
    tallies : sequence of ThresholdTally, one a scale
    replicates : sequence of int
        Scenarios run at each scale.

    Returns
    -------
    p_above, evidence : (places...) arrays
        Weights as in `scale_weights`; NaN where no scenario gave a value.
    """
    weights = scale_weights([tally.count for tally in tallies], replicates)
    above = np.stack([_per_count(tally.above, tally.count, 0.0) for tally in tallies])
    evidence = np.stack([_per_count(tally.evidence, tally.count, 0.0) for tally in tallies])
    return (weights * above).sum(axis=0), (weights * evidence).sum(axis=0)


def coverage(tallies, replicates):
    """Share of all scenarios that gave a place a value, every scale weighing the same.

    Parameters
    ----------
    tallies : sequence of ThresholdTally, one a scale
    replicates : sequence of int

    Returns
    -------
    (places...) array, 0 to 1
    """
    return np.mean([tally.count / run for tally, run in zip(tallies, replicates)], axis=0)


def verdict(p_above, evidence, covered=None, hold_share=HOLD_SHARE, least_evidence=LEAST_EVIDENCE):
    """Does the place stand above or below the threshold under any cut, beyond chance?

    Two things are asked. The side must be the same under nearly every cut: p_above is at least
    `hold_share`, or at most 1 - `hold_share`. And it must stand out from counting noise: a
    fixed set of records has chance clusters, and a place inside one is above the threshold
    under nearly every cut although its true value is not. So the standardised excess, averaged
    over scenarios, must be at least `least_evidence` in size. Where the true value is the
    threshold, each standardised excess has a mean near 0 and a variance of at most about 1, so
    their average has a standard deviation of at most about 1, however the scenarios depend on
    each other: with 1.96, at most about 5 % of such places pass by chance, both sides together
    (normal approximation). In simulated towns of constant risk, p_above alone called 8 % to
    44 % of the ground settled; with both conditions it was under 1 % on average. That is place by
    place: one town in three had some settled place, now and then with 6 % of the people. And where
    most scenarios gave no value, nothing can be said to hold under any cut.

    Parameters
    ----------
    p_above, evidence : (places...) arrays
        As `share_above` returns them.
    covered : (places...) array, optional
        As `coverage` returns it; below `LEAST_COVERAGE` a place is not settled.
    hold_share, least_evidence : float

    Returns
    -------
    (places...) float array
        1 holds above, -1 holds below, 0 depends on the cut or on chance, NaN no value.
    """
    p_above, evidence = np.asarray(p_above, float), np.asarray(evidence, float)
    # Sums of weights leave the share a few bits off: 19 of 20 must count as 0.95.
    slack = 1e-9
    above = (p_above >= hold_share - slack) & (evidence >= least_evidence)
    below = (p_above <= 1 - hold_share + slack) & (evidence <= -least_evidence)
    code = np.where(above, HOLDS_ABOVE, np.where(below, HOLDS_BELOW, DEPENDS)).astype(float)
    if covered is not None:
        code = np.where(np.asarray(covered) < LEAST_COVERAGE, DEPENDS, code)
    return np.where(np.isnan(p_above), np.nan, code)


def _per_count(sums, count, empty=np.nan):
    return np.divide(sums, count, out=np.full(np.shape(sums), float(empty)), where=count > 0)


def _known(kind):
    if kind not in (SHARE, RATE):
        raise InputError("The kind of value is 'share' or 'rate'; found {!r}.", kind)
    return kind
