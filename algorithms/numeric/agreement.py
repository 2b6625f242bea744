"""Where several layers are dense together, and how far that rests on opinion.

A layer's core is its densest pixels that together hold a given share of its total. Layers agree
where their cores meet; `hold_share` asks which places would stay under other weights.
"""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from .errors import InputError
from .progress import silent

PIXELS_AT_ONCE = 1 << 14
DRAWS_AT_ONCE = 256
# Logarithms that stand for a rank of 0, and for a limit of 0, which only ranks of 0 miss.
LOG_NOTHING, LOG_NO_LIMIT = -1e30, -700.0


def cores(ranks, share):
    """Whether each pixel is in a layer's core.

    Parameters
    ----------
    ranks : (layers, rows, columns) array
        Mass ranks (`numeric.ranks.mass_rank`), NaN for no data.
    share : float
        Share of the total that a core holds, above 0 and up to 1.

    Returns
    -------
    (layers, rows, columns) bool array
        The smallest set of densest pixels that holds at least the share; equally dense pixels are
        all in or all out. Pixels of value 0 are never in.

    Raises
    ------
    InputError
        The share is not above 0 and up to 1.
    """
    return np.asarray(ranks) > _rank_limit(share)


def _rank_limit(share):
    if not 0 < share <= 1:
        raise InputError("The share of a core must be above 0 and up to 1; found {}.", share)
    # a pixel is in while the denser ones hold less than the share
    return max(1 - share + 1e-12, 0.0)


def normalised_weights(weights, count):
    """Weights of the layers scaled to a mean of 1; all 1 where none are given.

    Raises
    ------
    InputError
        Not one finite weight of 0 or more for each layer, or all are 0.
    """
    weights = np.ones(count) if weights is None or len(weights) == 0 else np.asarray(weights, float)
    if len(weights) != count:
        raise InputError(
            "One weight for each of the {} layers is needed; found {}.", count, len(weights)
        )
    if not np.isfinite(weights).all() or (weights < 0).any() or not weights.sum() > 0:
        raise InputError(
            "Weights must be 0 or more and not all 0; found {}.",
            ", ".join(f"{weight:g}" for weight in weights),
        )
    return weights * count / weights.sum()


def agreement(inside, weights):
    """Weighted number of cores that meet at each pixel.

    Parameters
    ----------
    inside : (layers, rows, columns) bool array
        From `cores`.
    weights : (layers,) array
        From `normalised_weights`; with equal weights the result is a plain count.

    Returns
    -------
    (rows, columns) array
    """
    return np.tensordot(np.asarray(weights, float), np.asarray(inside, float), 1)


def composite(ranks, weights):
    """Weighted geometric mean of mass ranks: high where no layer that counts is low.

    Parameters
    ----------
    ranks : (layers, rows, columns) array
        Mass ranks, NaN for no data (counts as 0).
    weights : (layers,) array
        Of any sum above 0.

    Returns
    -------
    (rows, columns) array
        0 to 1.
    """
    weights = np.asarray(weights, float) / np.sum(weights)
    result = np.ones(ranks.shape[1:])
    for rank, weight in zip(ranks, weights):
        result *= np.nan_to_num(rank) ** weight
    return result


def hold_share(ranks, share, draws, generator, progress=silent):
    """Share of weightings under which each pixel is in the top share of the composite.

    The composite is the weighted geometric mean of mass ranks; its weights are drawn from the
    flat Dirichlet distribution, so that every weighting of the layers is equally likely. A pixel
    is in when the composite exceeds 1 - share: the rule of a single layer's core, to which it
    comes down when one layer has all the weight.

    Parameters
    ----------
    ranks : (layers, rows, columns) array
        Mass ranks, NaN for no data (counts as 0).
    share : float
    draws : int
        Number of weightings.
    generator : numpy.random.Generator
    progress : callable

    Returns
    -------
    (rows, columns) float array
        0 to 1; standard error at most 1 / (2 sqrt(draws)).

    Raises
    ------
    InputError
        The share or the number of draws is out of range.
    """
    limit = _rank_limit(share)
    if draws < 1:
        raise InputError("At least 1 draw of the weights is needed; found {}.", draws)
    count = len(ranks)
    weights = generator.dirichlet(np.ones(count), draws)
    flat = np.asarray(ranks).reshape(count, -1)
    # above the limit in no layer: never in; in every layer: always in
    above = (flat > limit).sum(axis=0)
    held = np.where(above == count, 1.0, 0.0)
    undecided = np.flatnonzero((above > 0) & (above < count))
    log_limit = np.log(limit) if limit > 0 else LOG_NO_LIMIT
    for start in range(0, len(undecided), PIXELS_AT_ONCE):
        places = undecided[start : start + PIXELS_AT_ONCE]
        ranked = np.nan_to_num(flat[:, places].astype(float))
        logs = np.log(ranked, out=np.full(ranked.shape, LOG_NOTHING), where=ranked > 0)
        times = np.zeros(len(places), np.int64)
        for first in range(0, draws, DRAWS_AT_ONCE):
            times += (weights[first : first + DRAWS_AT_ONCE] @ logs > log_limit).sum(axis=0)
            progress((start + len(places) * first / draws) / len(undecided))
        held[places] = times / draws
    progress(1.0)
    return held.reshape(ranks.shape[1:])


@dataclass(frozen=True)
class Zones:
    """Connected places where enough cores meet, in order of rank.

    Attributes
    ----------
    labels : (rows, columns) int32 array
        1 for the zone of rank 1 and so on; 0 outside.
    pixels : (zones,) int64 array
    core_count : (zones,) int64 array
        Largest number of cores that meet at one pixel of the zone.
    mean_cores : (zones,) float array
        Mean number of cores over the zone's pixels.
    core_share : (layers, zones) float array
        Share of the zone's pixels that lie in each layer's core.
    mean_value : (layers, zones) float array
        Mean of each layer over the pixels with data; NaN where there are none.
    total_share : (layers, zones) float array
        Share of each layer's total that lies in the zone.
    held : (zones,) float array
        Mean share of weightings under which the zone's pixels stay in.
    """

    labels: np.ndarray
    pixels: np.ndarray
    core_count: np.ndarray
    mean_cores: np.ndarray
    core_share: np.ndarray
    mean_value: np.ndarray
    total_share: np.ndarray
    held: np.ndarray

    def __len__(self):
        return len(self.pixels)


def find_zones(values, inside, held, least_layers, least_pixels):
    """Connected places where at least so many cores meet, ranked by how firmly they hold.

    Parameters
    ----------
    values : (layers, rows, columns) array
        Densities, NaN for no data; negative values count as 0.
    inside : (layers, rows, columns) bool array
        From `cores`.
    held : (rows, columns) array
        From `hold_share`.
    least_layers : int
    least_pixels : float
        Zones of fewer pixels are dropped.

    Returns
    -------
    Zones
        Pixels that touch at a side only belong together. Rank 1 holds most often; ties go to the
        zone with more cores, then to the larger one.

    Raises
    ------
    InputError
        The least number of layers is not between 1 and the number of layers.
    """
    layers = len(inside)
    if not 1 <= least_layers <= layers:
        raise InputError(
            "The least number of layers must be 1 to {}, the number of layers; found {}.",
            layers,
            least_layers,
        )
    count = np.sum(inside, axis=0)
    labels, many = ndimage.label(count >= least_layers)
    pixels = np.bincount(labels.ravel(), minlength=many + 1)
    kept = np.flatnonzero(pixels >= least_pixels)
    kept = kept[kept > 0]

    def sums(quantity):
        return np.bincount(labels.ravel(), weights=quantity.ravel(), minlength=many + 1)[kept]

    pixels = pixels[kept]
    mean_held, mean_cores = sums(held) / pixels, sums(count) / pixels
    order = np.lexsort((-pixels, -mean_cores, -np.round(mean_held, 9)))
    clean = np.where(np.isfinite(values) & (values > 0), values, 0.0)
    present = np.isfinite(values)
    with np.errstate(invalid="ignore"):
        mean_value = np.array(
            [sums(one) / sums(known) for one, known in zip(clean, present)]
        ).reshape(layers, -1)
    total_share = np.array([sums(one) / one.sum() for one in clean]).reshape(layers, -1)
    core_share = np.array([sums(one) / pixels for one in inside]).reshape(layers, -1)
    most = ndimage.maximum(count, labels, kept) if len(kept) else np.empty(0)
    new_label = np.zeros(many + 1, np.int32)
    new_label[kept[order]] = np.arange(1, len(kept) + 1)
    return Zones(
        new_label[labels],
        pixels[order],
        np.asarray(most, np.int64)[order],
        mean_cores[order],
        core_share[:, order],
        mean_value[:, order],
        total_share[:, order],
        mean_held[order],
    )
