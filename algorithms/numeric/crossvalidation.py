"""Cross-validation scores of a fixed Gaussian bandwidth, for many bandwidths at once."""

import math
from functools import cached_property

import numpy as np
from scipy.spatial import cKDTree
from scipy.spatial.distance import cdist

from .bandwidth import checked_records
from .errors import InputError
from .pairsums import pair_sums, reading_lattice, record_spectrum, smoothed_at_records
from .progress import part, silent

NEIGHBOURS = 24
# A node of a lattice costs as much time as so many pairs of records
PAIRS_PER_NODE = 2


def least_squares_scores(x, y, bandwidths, weights=None, spectrum=None, progress=silent):
    """Least-squares cross-validation of a fixed Gaussian bandwidth; the smaller the better.

    An unbiased estimate of the integrated squared error up to a constant,

        S(sqrt(2) h) / W^2 - 2 (S(h) - V / (2 pi h^2)) / (W^2 - V),

    S(t) the Gaussian sum over all pairs, W the sum of the weights and V that of their squares.

    Parameters
    ----------
    x, y : (n,) arrays
        Places, units of the working CRS.
    bandwidths : (m,) array
        Standard deviations of the kernel, above 0, same units.
    weights : (n,) array, optional
    spectrum : RecordSpectrum, optional
        Of these records and bandwidths, when it is at hand.
    progress : callable

    Returns
    -------
    (m,) array
        Per unit of area of the working CRS.

    Raises
    ------
    InputError
        Fewer than two records, or a bandwidth not above 0.

    References
    ----------
    Rudemo (1982), Scandinavian Journal of Statistics 9:65-78; Bowman (1984), Biometrika
    71:353-360.
    """
    bandwidths = _checked_bandwidths(x, bandwidths)
    if spectrum is None:
        spectrum = record_spectrum(x, y, weights, bandwidths.min(), bandwidths.max(), progress)
    if spectrum.total**2 - spectrum.squares <= 1e-12 * spectrum.squares:
        raise InputError("Cross-validation needs two records with weight; found one.")
    count = bandwidths.size
    sums = pair_sums(spectrum, np.concatenate([bandwidths, math.sqrt(2.0) * bandwidths]))
    with_themselves = spectrum.squares / (2 * math.pi * bandwidths**2)
    squared = sums[count:] / spectrum.total**2
    crossed = (sums[:count] - with_themselves) / (spectrum.total**2 - spectrum.squares)
    return squared - 2.0 * crossed


def likelihood_scores(x, y, bandwidths, weights=None, spectrum=None, progress=silent):
    """Leave-one-out log likelihood of a fixed Gaussian bandwidth; the larger the better.

    sum_i w_i log f_-i(x_i) / W with f_-i(x_i) = sum_{j != i} w_j G_h(x_i - x_j) / (W - w_i).
    Records with neighbours are read off a Fourier-domain surface, lonely ones are summed
    directly in logarithms, because there the surface has no correct digits. Where the records
    are so few that it takes less time, all are summed directly.

    Parameters, errors as for ``least_squares_scores``.

    Returns
    -------
    (m,) array
        Mean log density, the density per unit of area of the working CRS.

    References
    ----------
    Habbema, Hermans & van den Broek (1974), COMPSTAT 1974, 101-110; Duin (1976), IEEE
    Transactions on Computers C-25:1175-1179.
    """
    bandwidths = _checked_bandwidths(x, bandwidths)
    x, y, weights = checked_records(x, y, weights)
    if x.size < 2:
        raise InputError("Cross-validation needs two records with weight; found one.")
    if spectrum is None:
        spectrum = record_spectrum(x, y, weights, bandwidths.min(), bandwidths.max())
    sums = _LeaveOneOutSums(x, y, weights, spectrum)
    scores = np.empty(bandwidths.size)
    count = bandwidths.size
    for place, bandwidth in enumerate(bandwidths):
        report = part(progress, place / count, (place + 1) / count)
        logs = sums.logs(bandwidth, report) - np.log(spectrum.total - weights)
        scores[place] = weights @ logs / spectrum.total
        report(1.0)
    return scores


class _LeaveOneOutSums:
    """log sum_{j != i} w_j G_h(x_i - x_j) at every record i, whatever way is quickest."""

    def __init__(self, x, y, weights, spectrum):
        self.places = np.column_stack([x - x.min(), y - y.min()])
        self.weights = weights
        self.spectrum = spectrum
        # few records are ever lonely, so neighbours are looked up when they are asked for
        self._row = np.full(len(self.places), -1)
        count = min(NEIGHBOURS + 1, len(self.places))
        self._distances, self._indices = np.empty((0, count)), np.empty((0, count), np.int64)

    @cached_property
    def tree(self):
        return cKDTree(self.places)

    def _neighbours(self, records):
        """Distances and numbers of the nearest places of some records, themselves among them."""
        new = records[self._row[records] < 0]
        if len(new):
            self._row[new] = len(self._distances) + np.arange(len(new))
            found = self.tree.query(
                self.places[new], k=np.arange(1, self._distances.shape[1] + 1), workers=-1
            )
            self._distances = np.concatenate([self._distances, found[0]])
            self._indices = np.concatenate([self._indices, found[1]])
        rows = self._row[records]
        return self._distances[rows], self._indices[rows]

    def logs(self, bandwidth, progress):
        log_peak = -math.log(2 * math.pi * bandwidth**2)
        nodes = math.prod(reading_lattice(self.spectrum, bandwidth))
        if len(self.places) ** 2 <= PAIRS_PER_NODE * nodes:
            return log_peak + self._all_pairs(bandwidth)
        peak = math.exp(log_peak)
        others = smoothed_at_records(self.spectrum, bandwidth) - self.weights * peak
        mean_weight = self.spectrum.total / len(self.places)
        trusted = others > 0.1 * (self.weights + mean_weight) * peak
        logs = np.log(others, out=np.zeros_like(others), where=trusted)
        alone = np.flatnonzero(~trusted)
        logs[alone] = log_peak + self._lonely(alone, bandwidth, progress)
        return logs

    def _all_pairs(self, bandwidth):
        logs = np.empty(len(self.places))
        step = max(1, 1_000_000 // len(self.places))
        for start in range(0, len(self.places), step):
            own = self.places[start : start + step]
            terms = cdist(own, self.places, "sqeuclidean")
            terms *= -0.5 / bandwidth**2
            terms += np.log(self.weights)
            terms[np.arange(len(own)), start + np.arange(len(own))] = -np.inf
            logs[start : start + step] = _log_sum(terms)
        return logs

    def _lonely(self, records, bandwidth, progress):
        distances, indices = self._neighbours(records)
        terms = np.log(self.weights)[indices] - 0.5 * (distances / bandwidth) ** 2
        terms[indices == records[:, None]] = -np.inf
        sums = _log_sum(terms)
        if indices.shape[1] == len(self.places):
            return sums
        missing = math.log(self.weights.sum()) - 0.5 * (distances[:, -1] / bandwidth) ** 2
        for place in np.flatnonzero(missing > sums + math.log(1e-7)):
            sums[place] = self._within_reach(records[place], sums[place], bandwidth)
            if place % 100 == 0:
                progress(0.0)
        return sums

    def _within_reach(self, record, lower_bound, bandwidth):
        # Beyond this radius all records together add less than 1e-7 of what is there already
        exponent = math.log(self.weights.sum()) - lower_bound + math.log(1e7)
        radius = bandwidth * math.sqrt(2.0 * exponent)
        near = np.array(self.tree.query_ball_point(self.places[record], radius))
        near = near[near != record]
        squares = ((self.places[near] - self.places[record]) ** 2).sum(axis=1)
        terms = np.log(self.weights[near]) - squares / (2.0 * bandwidth**2)
        return float(_log_sum(terms[None, :])[0])


def _log_sum(terms):
    """log of the sum of exponentials along each row; changes the array in place."""
    largest = terms.max(axis=1)
    terms -= largest[:, None]
    return largest + np.log(np.exp(terms, out=terms).sum(axis=1))


def _checked_bandwidths(x, bandwidths):
    bandwidths = np.atleast_1d(np.asarray(bandwidths, float))
    if not (np.isfinite(bandwidths).all() and (bandwidths > 0).all() and bandwidths.size):
        raise InputError("Bandwidths must be above 0; found {}.", bandwidths.tolist())
    if np.size(x) < 2:
        raise InputError("Cross-validation needs two records; found {}.", np.size(x))
    return bandwidths
