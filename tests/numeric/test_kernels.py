"""Kernels: mass, spread, roughness and the error that their approximations may have."""

import math

import numpy as np
import pytest
from scipy.integrate import quad
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.kernels import GAUSSIAN, KERNELS, QUARTIC, kernel_named
from steadfield.algorithms.numeric.ladder import (
    BAND_RATIO,
    RUNG_RATIOS,
    bands,
    lagrange_weights,
    rungs_between,
)

ALL = pytest.mark.parametrize("kernel", list(KERNELS.values()), ids=lambda kernel: kernel.name)


def radial_integral(function, reach):
    return quad(lambda r: 2 * math.pi * r * function(r), 0, reach, limit=200)[0]


@ALL
def test_mass_is_one(kernel):
    mass = radial_integral(lambda r: float(kernel.value(np.float64(r * r), 1.7)), 30.0)
    assert mass == pytest.approx(1.0, abs=1e-8)


@ALL
def test_bandwidth_is_the_standard_deviation_along_an_axis(kernel):
    # by symmetry the variance along one axis is half the mean squared distance
    second = radial_integral(lambda r: r * r * float(kernel.value(np.float64(r * r), 1.0)), 30.0)
    assert second / 2 == pytest.approx(1.0, abs=1e-7)


@ALL
def test_roughness_is_the_integral_of_the_square(kernel):
    square = radial_integral(lambda r: float(kernel.value(np.float64(r * r), 1.0)) ** 2, 30.0)
    assert kernel.roughness == pytest.approx(square, rel=1e-8)


@ALL
def test_nothing_is_left_beyond_the_reach(kernel):
    beyond = kernel.value(np.array([kernel.reach**2 * 1.0001]), 1.0)
    assert beyond[0] <= 4e-6 * kernel.peak


def test_quartic_ends_at_its_radius():
    assert QUARTIC.value(np.array([7.999, 8.0, 9.0]), 1.0)[1:] == pytest.approx([0.0, 0.0])
    assert QUARTIC.value(np.array([7.9]), 1.0)[0] > 0


def test_unknown_kernel_is_refused_by_name():
    with pytest.raises(InputError, match=r"KERNEL.*'uniform'"):
        kernel_named("uniform")


def blend_error(narrowest, widest):
    """Largest error of a blend of rungs over bandwidths and distances, over the kernel's peak."""
    rungs = rungs_between(narrowest, widest)
    worst = 0.0
    for bandwidth in np.geomspace(narrowest, widest, 41):
        distance = np.linspace(0, 6 * widest, 500)
        shares = lagrange_weights(np.log([bandwidth]), np.log(rungs))[0]
        blend = sum(share * GAUSSIAN.value(distance**2, rung) for share, rung in zip(shares, rungs))
        exact = GAUSSIAN.value(distance**2, bandwidth)
        worst = max(worst, float(np.abs(blend - exact).max() / exact[0]))
    return worst


@pytest.mark.parametrize(("count", "ratio"), list(enumerate(RUNG_RATIOS, start=1)))
def test_rungs_blend_to_any_bandwidth_of_their_band(count, ratio):
    assert len(rungs_between(1.0, ratio)) == count
    assert blend_error(1.0, ratio) < 5.5e-5


def test_shares_of_rungs_add_up_to_one_and_agree_with_interpolation_formula():
    rng = np.random.default_rng(4)
    bandwidths = np.exp(rng.uniform(0, np.log(BAND_RATIO), 200))
    band = bands(bandwidths)[0]
    shares = band.shares(bandwidths[band.records])
    assert shares.sum(axis=1) == pytest.approx(1.0, abs=1e-12)
    formula = lagrange_weights(np.log(bandwidths[band.records]), np.log(band.rungs))
    assert shares == pytest.approx(formula, abs=1e-11)


def test_bands_hold_every_record_once_and_no_wider_than_stated():
    rng = np.random.default_rng(5)
    bandwidths = 10 ** rng.uniform(-3, 4, 500)
    groups = bands(bandwidths)
    assert np.array_equal(np.sort(np.concatenate([g.records for g in groups])), np.arange(500))
    assert all(group.widest / group.narrowest <= BAND_RATIO * (1 + 1e-9) for group in groups)
    assert all(group.narrowest <= rung <= group.widest for group in groups for rung in group.rungs)
