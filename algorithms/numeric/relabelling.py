"""Kernel sums of the same places under many sets of weights, and random labels for them.

Relabelling moves weights, never kernels. What depends on the kernels alone - rungs, lattices,
transfer functions - is worked out once, and many sets of weights travel through it together.
"""

import math
from dataclasses import dataclass

import numpy as np
from scipy import fft

from .errors import InputError
from .ladder import bands
from .spectrum import band_lattice, band_places, band_transfers, common_period
from .spreading import spread

NARROWEST_PIXELS = 1.5
# Values that all planes of one batch may hold together
BATCH_VALUES = 6_000_000
# values of records, over all planes, that are spread at once
SPREAD_VALUES = 12_000_000
LARGEST_HYPERGEOMETRIC = 1_000_000_000


@dataclass(frozen=True)
class _BandSums:
    """One band of bandwidths: its records, their places in nodes, and what each rung passes."""

    records: np.ndarray
    row: np.ndarray
    column: np.ndarray
    shares: np.ndarray
    lattice: tuple
    along_rows: np.ndarray
    along_columns: np.ndarray


class KernelSums:
    """sum_i w_i K_{h_i}(u - x_i) at all pixels u, for fixed places and many sets of weights.

    Within 1e-4 of each kernel's own peak (ladder of bandwidths and spreading as in
    ``surface.adaptive_surface``).

    Parameters
    ----------
    x, y, bandwidths : (n,) arrays
        Units of the working CRS; bandwidths of at least 1.5 pixels.
    grid : Grid

    Raises
    ------
    InputError
        A kernel is narrower than 1.5 pixels.
    """

    def __init__(self, x, y, bandwidths, grid):
        widths = np.asarray(bandwidths, float) / grid.cell
        if widths.min() < NARROWEST_PIXELS * (1 - 1e-9):
            raise InputError(
                "The narrowest kernel is {:.3g} pixels wide and {} are needed; choose a "
                "CELL_SIZE of {:.4g} or less.",
                widths.min(),
                NARROWEST_PIXELS,
                widths.min() * grid.cell / 1.5,
            )
        row = (grid.top - np.asarray(y, float)) / grid.cell - 0.5
        column = (np.asarray(x, float) - grid.left) / grid.cell - 0.5
        self.grid = grid
        self.period = common_period(row, column, widths, grid.shape)
        self.bands = [self._prepared(band, row, column, widths) for band in bands(widths)]

    @property
    def batch(self):
        """How many sets of weights are best summed at once."""
        largest = math.prod(self.period)
        for band in self.bands:
            largest = max(largest, math.prod(band.lattice) * band.shares.shape[1])
        return int(np.clip(BATCH_VALUES // largest, 1, 64))

    def sums(self, weights):
        """Surfaces of sets of weights.

        Parameters
        ----------
        weights : (n, sets) array

        Returns
        -------
        (sets, rows, columns) array
            Per unit of the CRS squared.
        """
        sets = weights.shape[1]
        rows, columns = self.period
        common = np.zeros((sets, rows, columns // 2 + 1), complex)
        for band in self.bands:
            self._add_band(common, band, weights[band.records])
        surfaces = fft.irfft2(common, s=self.period, axes=(1, 2), overwrite_x=True, workers=-1)
        return surfaces[:, : self.grid.rows, : self.grid.columns] / self.grid.cell_area

    def _add_band(self, common, band, weights):
        rungs, sets = band.shares.shape[1], weights.shape[1]
        planes = np.zeros((*band.lattice, rungs * sets))
        step = max(SPREAD_VALUES // (rungs * sets), 1)
        for start in range(0, len(weights), step):
            some = slice(start, start + step)
            values = (band.shares[some, :, None] * weights[some, None, :]).reshape(-1, rungs * sets)
            planes += spread(band.row[some], band.column[some], values, band.lattice)
        planes = np.ascontiguousarray(np.moveaxis(planes, 2, 0))
        half, width = (band.lattice[0] - 1) // 2, (band.lattice[1] - 1) // 2 + 1
        passed = fft.rfft2(planes, axes=(1, 2), workers=-1)[:, :, :width]
        passed = passed.reshape(rungs, sets, band.lattice[0], width)
        summed = np.einsum("rskc,kr,cr->skc", passed, band.along_rows, band.along_columns[:width])
        common[:, : half + 1, :width] += summed[:, : half + 1]
        if half:
            common[:, -half:, :width] += summed[:, -half:]

    def _prepared(self, band, row, column, widths):
        lattice = band_lattice(band, self.period)
        places = band_places(row, column, band, lattice, self.period)
        transfers = band_transfers(band, lattice, self.period)
        return _BandSums(
            band.records, *places, band.shares(widths[band.records]), lattice, *transfers
        )


def relabelled_counts(counts, cases, generator):
    """Case units per place when that many of all units are drawn without replacement.

    Parameters
    ----------
    counts : (n,) int array
        Units per place, cases and background together.
    cases : int
        Units that are cases.
    generator : numpy.random.Generator

    Returns
    -------
    (n,) float array
        Multivariate hypergeometric.
    """
    if counts.max() == 1:
        drawn = np.zeros(counts.size)
        drawn[generator.permutation(counts.size)[:cases]] = 1.0
        return drawn
    return generator.multivariate_hypergeometric(counts, cases, method="marginals").astype(float)


def relabelled_values(case_weights, background_weights, generator):
    """Weights per place when records, each with its weight, change places at random.

    Returns
    -------
    cases, background : (n,) float arrays
        n places, those of cases and background together.
    """
    order = generator.permutation(case_weights.size + background_weights.size)
    cases, background = np.zeros(order.size), np.zeros(order.size)
    cases[order[: case_weights.size]] = case_weights
    background[order[case_weights.size :]] = background_weights
    return cases, background
