"""Density of records over that of a background, and whether labels at random would do the same."""

import math
from dataclasses import dataclass

import numpy as np

from .adaptation import adapt_bandwidths
from .bandwidth import checked_records, effective_size, spread
from .errors import InputError
from .progress import part, silent
from .relabelling import (
    LARGEST_HYPERGEOMETRIC,
    NARROWEST_PIXELS,
    KernelSums,
    relabelled_counts,
    relabelled_values,
)
from .surface import effective_records, sampling_variance

# Ratios beyond this, either way, are not told apart: the kernels' tails would decide
LARGEST_RATIO = 100.0
WEIGHTS_MEAN = ("counts", "values")


@dataclass(frozen=True)
class Pooled:
    """Records and background as one pattern, records first.

    Attributes
    ----------
    x, y : (n,) arrays
        Units of the working CRS.
    weights : (n,) array
        As given when they are counts; otherwise each group's add up to its effective size.
    records : int
        How many of the n are records.
    counted : bool
        Weights are whole numbers of equal units, which are what changes its label.
    """

    x: np.ndarray
    y: np.ndarray
    weights: np.ndarray
    records: int
    counted: bool

    @property
    def totals(self):
        """Sums of the weights of records and of background."""
        return float(self.weights[: self.records].sum()), float(self.weights[self.records :].sum())

    @property
    def spread_weights(self):
        """Weights that tell nothing of the labels, (n,) array.

        Weights that are values change places with the labels, so what must hold for every
        labelling alike - kernels, noise, where to test - takes each place once.
        """
        return self.weights if self.counted else np.ones(self.x.size)

    @property
    def split(self):
        """Weights of records and of background over all n places, two (n,) arrays."""
        records, background = self.weights.copy(), self.weights.copy()
        records[self.records :] = 0.0
        background[: self.records] = 0.0
        return records, background


@dataclass(frozen=True)
class Contrast:
    """A log density ratio and what bears on its reading.

    Attributes
    ----------
    log_ratio : (rows, columns) array
        log f - log g, natural; NaN where there is no value. 0: as the background leads to expect.
    noise : (rows, columns) array
        Standard deviation that the log ratio would have if labels were given at random.
    support : (rows, columns) array
        Effective number of background records behind a pixel, 1 where only tails of kernels meet.
    shown : (rows, columns) bool array
        Tested, and with enough background as it is.
    tested : (rows, columns) bool array
        Inside the boundary and with enough background to be expected under random labels.
    bandwidths : (n,) array
        Of records and background in turn, units of the working CRS.
    raised : int
        Kernels that the size of a pixel kept from being narrower.
    pooled : Pooled
    sums : KernelSums
    """

    log_ratio: np.ndarray
    noise: np.ndarray
    support: np.ndarray
    shown: np.ndarray
    tested: np.ndarray
    bandwidths: np.ndarray
    raised: int
    pooled: Pooled
    sums: KernelSums


@dataclass(frozen=True)
class Relabelling:
    """A log ratio beside those of random labels.

    Attributes
    ----------
    count : int
        Number of relabellings; the smallest p-value is 1 / (count + 1).
    p_raised, p_lowered : (rows, columns) arrays
        Pointwise: share of labellings, the one observed among them, with a log ratio at least as
        high (low) at this pixel. NaN where there is no value.
    p_raised_anywhere, p_lowered_anywhere : (rows, columns) arrays
        Share of labellings whose log ratio over its noise is somewhere at least as high (low) as it
        is at this pixel: p-values that hold over the whole map.
    highest, lowest : (count + 1,) arrays
        Largest and smallest log ratio of each labelling, the observed one first: the observed one
        over the pixels shown, the others over all that are tested.
    highest_scaled, lowest_scaled : (count + 1,) arrays
        The same of the log ratio over its noise.
    """

    count: int
    p_raised: np.ndarray
    p_lowered: np.ndarray
    p_raised_anywhere: np.ndarray
    p_lowered_anywhere: np.ndarray
    highest: np.ndarray
    lowest: np.ndarray
    highest_scaled: np.ndarray
    lowest_scaled: np.ndarray

    def global_p(self, which):
        """P-value of the whole map from ``highest``, ``lowest`` or one of the scaled two."""
        values = getattr(self, which)
        beyond = values >= values[0] if which.startswith("highest") else values <= values[0]
        return float(beyond.mean())


def pool(record_places, background_places, weights_mean="counts"):
    """Put records and background together.

    Parameters
    ----------
    record_places, background_places : (x, y, weights)
        (n,) arrays each, weights None where each counts once. Units of the working CRS.
    weights_mean : {"counts", "values"}
        ``counts``: a weight is a number of people or events on that place, each of which could
        carry the other label. ``values``: a weight belongs to a record and goes where it goes.

    Returns
    -------
    Pooled

    Raises
    ------
    InputError
        A group without weight, or counts that are not whole.
    """
    groups = [checked_records(*places) for places in (record_places, background_places)]
    x, y, weights = (np.concatenate(columns) for columns in zip(*groups))
    if weights_mean not in WEIGHTS_MEAN:
        raise InputError("WEIGHTS_MEAN must be counts or values; found {!r}.", weights_mean)
    counted = weights_mean == "counts"
    if counted and not np.array_equal(weights, np.round(weights)):
        raise InputError(
            "Weights that mean counts must be whole numbers; found {:.6g}. Say that they "
            "mean values instead.",
            weights[weights != np.round(weights)][0],
        )
    if counted and weights.sum() >= LARGEST_HYPERGEOMETRIC:
        raise InputError(
            "Counts that add up to {:.4g} cannot be relabelled one by one; say that "
            "weights mean values instead.",
            weights.sum(),
        )
    if not counted:
        weights = np.concatenate([own * effective_size(own) / own.sum() for _, _, own in groups])
    return Pooled(x, y, weights, groups[0][0].size, counted)


def common_bandwidth(pooled):
    """Bandwidth for a ratio from the spread of the pooled places.

    h = s m^(-1/6), the normal-scale rule with m = n1 n2 / (n1 + n2): the variance of a log ratio
    goes with 1 / n1 + 1 / n2. n1, n2 are effective sizes.

    Parameters
    ----------
    pooled : Pooled

    Returns
    -------
    float
        Units of the working CRS.
    """
    first, second = (
        effective_size(own)
        for own in (pooled.weights[: pooled.records], pooled.weights[pooled.records :])
    )
    size = first * second / (first + second)
    return spread(pooled.x, pooled.y, pooled.weights) * max(size, 1.0) ** (-1.0 / 6.0)


def density_contrast(
    pooled, grid, bandwidth, adapt=0.5, trim=5.0, mask=None, least_support=10.0, progress=silent
):
    """Symmetric adaptive log ratio of the densities of records and background.

    log r(u) = log f(u) - log g(u), both of mass 1, both with the bandwidths that the pooled
    pattern gives (h_i = h0 (p(x_i) / G)^-a, p the pooled pilot). As a kernel at a place is the
    same in f and g, so is what it loses beyond the boundary, and the ratio needs no correction.

    Parameters
    ----------
    pooled : Pooled
    grid : Grid
    bandwidth : float
        h0, units of the working CRS. No kernel is let below 1.5 pixels.
    adapt, trim : float
        As for ``adaptation.adapt_bandwidths``.
    mask : (rows, columns) array, optional
        From ``edges.boundary_mask``; pixels less than half inside get no value.
    least_support : float
        Effective background records that a pixel needs for a value.
    progress : callable

    Returns
    -------
    Contrast

    Notes
    -----
    A floor on the background alone would choose pixels by their labels: near it, places of chance
    have much background and so a low ratio, and lowered areas would be found too often. So a pixel
    must pass the floor also with the background that the pooled pattern leads to expect, and
    labellings are compared over all pixels that do.

    Raises
    ------
    InputError
        No pixel has that much background behind it.

    References
    ----------
    Kelsall & Diggle (1995), Statistics in Medicine 14:2335-2342; Davies, Jones & Hazelton (2016),
    Computational Statistics & Data Analysis 101:12-28 (symmetric bandwidths).
    """
    spread_weights = pooled.spread_weights
    adapted = adapt_bandwidths(
        pooled.x,
        pooled.y,
        spread_weights,
        bandwidth,
        adapt,
        trim,
        0,
        mask,
        grid if mask is not None else None,
        NARROWEST_PIXELS * grid.cell,
        part(progress, 0.0, 0.4),
    )
    kernels = adapted.bandwidths
    sums = KernelSums(pooled.x, pooled.y, kernels, grid)
    # the transforms leave rounding errors below 0 where nothing reaches
    records, background, together = np.maximum(
        sums.sums(np.column_stack([*pooled.split, spread_weights])), 0.0
    )
    progress(0.6)
    own = slice(pooled.records, None)
    squares = sampling_variance(
        pooled.x[own],
        pooled.y[own],
        pooled.weights[own],
        kernels[own],
        background,
        grid,
        progress=part(progress, 0.6, 0.8),
    )
    support = effective_records(background, squares)
    noise, expected = _under_random_labels(
        pooled, kernels, grid, together, part(progress, 0.8, 1.0)
    )
    tested = expected >= least_support
    if mask is not None:
        tested &= mask >= 0.5
    shown = tested & (support >= least_support)
    if not shown.any():
        raise InputError(
            "No pixel has {:g} effective background records behind it (the most is "
            "{:.3g}); lower LEAST_BACKGROUND or widen BANDWIDTH.",
            least_support,
            np.minimum(support, expected).max(),
        )
    log_ratio = np.full(grid.shape, np.nan)
    log_ratio[shown] = _log_ratio(records[shown], background[shown], pooled.totals)
    return Contrast(log_ratio, noise, support, shown, tested, kernels, adapted.raised, pooled, sums)


def _log_ratio(records, background, totals):
    """log (f / g) of unnormalised sums, held within the largest ratio either way."""
    first = np.maximum(records, 0.0) / totals[0]
    second = np.maximum(background, 0.0) / totals[1]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = first / second
    ratio[np.isnan(ratio)] = 1.0
    return np.log(np.clip(ratio, 1.0 / LARGEST_RATIO, LARGEST_RATIO))


def _under_random_labels(pooled, bandwidths, grid, total, progress):
    """Standard deviation of the log ratio, and effective background, when labels are random.

    To first order d log r = df/f - dg/g. Sampling without replacement: for units, a share c of
    them records, the variance is sum w K^2 / (c (1 - c)) / (sum w K)^2. For values it is
    n (1/n1 + 1/n2) sum K^2 / (sum K)^2 over the n places, n1 and n2 the effective sizes. The
    effective background is its share of the effective pooled pattern.
    """
    weights = pooled.spread_weights
    places = pooled.x, pooled.y
    squares = sampling_variance(
        *places, np.sqrt(weights), bandwidths, total, grid, progress=part(progress, 0.0, 0.5)
    )
    units = effective_records(total, squares)
    first, second = pooled.totals
    whole = first + second if pooled.counted else float(pooled.x.size)
    noise = np.full(grid.shape, np.inf)
    reached = units > 0
    noise[reached] = np.sqrt(whole * (1 / first + 1 / second) / units[reached])
    if pooled.counted:
        squares = sampling_variance(
            *places, weights, bandwidths, total, grid, progress=part(progress, 0.5, 1.0)
        )
    return noise, effective_records(total, squares) * second / whole


def relabel(contrast, count, generator, progress=silent):
    """Compare a log ratio with those under labels given at random.

    The null hypothesis: records are a random sample of the pooled pattern. Kernels stay as they
    are, so each relabelling takes one sum of kernels. Where weights are values it takes two.

    Parameters
    ----------
    contrast : Contrast
    count : int
        Relabellings, at least 1; 999 is common practice.
    generator : numpy.random.Generator
    progress : callable

    Returns
    -------
    Relabelling

    References
    ----------
    Kelsall & Diggle (1995), Statistics in Medicine 14:2335-2342 (tolerance by relabelling);
    Westfall & Young (1993), Resampling-Based Multiple Testing (p-values from the maximum).
    """
    if count < 1:
        raise InputError("RELABELLINGS must be 1 or more; found {}.", count)
    tested, shown = contrast.tested, contrast.shown
    among = shown[tested]
    observed, noise = contrast.log_ratio[shown], contrast.noise[tested]
    # Equal labellings must count as equal whatever the rounding of the transforms
    slack = 1e-9
    raised, lowered = np.ones(observed.size, np.int64), np.ones(observed.size, np.int64)
    extremes = [_extremes(observed, noise[among])]
    done = 0
    while done < count:
        batch = min(contrast.sums.batch, count - done)
        for ratio in _relabelled_ratios(contrast, batch, generator):
            raised += ratio[among] >= observed - slack
            lowered += ratio[among] <= observed + slack
            extremes.append(_extremes(ratio, noise))
        done += batch
        progress(done / count)
    highest, lowest, highest_scaled, lowest_scaled = np.array(extremes).T
    scaled = observed / noise[among]
    everywhere = count + 1.0
    return Relabelling(
        count,
        _on_map(raised / everywhere, shown),
        _on_map(lowered / everywhere, shown),
        _on_map(_share_at_least(highest_scaled, scaled), shown),
        _on_map(_share_at_least(-lowest_scaled, -scaled), shown),
        highest,
        lowest,
        highest_scaled,
        lowest_scaled,
    )


def _extremes(ratio, noise):
    scaled = ratio / noise
    return ratio.max(), ratio.min(), scaled.max(), scaled.min()


def _relabelled_ratios(contrast, batch, generator):
    """Yield the log ratios of one batch of relabellings at the pixels that are tested."""
    pooled, tested = contrast.pooled, contrast.tested
    split = pooled.records
    if pooled.counted:
        counts = pooled.weights.astype(np.int64)
        cases = int(counts[:split].sum())
        planes = np.empty((counts.size, batch + 1))
        for one in range(batch):
            planes[:, one] = relabelled_counts(counts, cases, generator)
        planes[:, batch] = pooled.weights
        surfaces = contrast.sums.sums(planes)
        total = surfaces[-1][tested]
        for surface in surfaces[:-1]:
            records = surface[tested]
            yield _log_ratio(records, total - records, pooled.totals)
        return
    planes = []
    for _ in range(batch):
        planes += relabelled_values(pooled.weights[:split], pooled.weights[split:], generator)
    surfaces = contrast.sums.sums(np.column_stack(planes))
    for records, background in zip(surfaces[0::2], surfaces[1::2]):
        yield _log_ratio(records[tested], background[tested], pooled.totals)


def _share_at_least(maxima, values):
    ordered = np.sort(maxima)
    return 1.0 - np.searchsorted(ordered, values - 1e-9) / maxima.size


def _on_map(values, shown):
    filled = np.full(shown.shape, math.nan)
    filled[shown] = values
    return filled
