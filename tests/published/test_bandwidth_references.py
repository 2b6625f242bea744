"""Bandwidth rules against published constants and against the integrals behind them."""

import math

import numpy as np
import pytest
from scipy import integrate
from steadfield.algorithms.numeric import bandwidth, crossvalidation


def laplacian_roughness(density, dimensions, reach):
    """Integral of the squared Laplacian of a radial density, by finite differences."""
    step = 1e-3

    def laplacian(radius):
        first = (density(radius + step) - density(radius - step)) / (2 * step)
        second = (density(radius + step) - 2 * density(radius) + density(radius - step)) / step**2
        return second + (dimensions - 1) * first / radius

    sphere = 2 * math.pi ** (dimensions / 2) / math.gamma(dimensions / 2)
    value, _ = integrate.quad(
        lambda radius: laplacian(radius) ** 2 * sphere * radius ** (dimensions - 1),
        2 * step,
        reach,
        limit=400,
    )
    return value


def best_constant(roughness, dimensions):
    """Bandwidth of least asymptotic integrated squared error for n = 1, Gaussian kernel.

    h^(d + 4) = d R(K) / roughness (Wand & Jones 1995, Kernel Smoothing, section 4.3).
    """
    kernel_roughness = (4 * math.pi) ** (-dimensions / 2)
    return (dimensions * kernel_roughness / roughness) ** (1 / (dimensions + 4))


def test_normal_scale_constants_are_those_in_print():
    # Silverman (1986), equation 3.28: 1.06; for d = 2 the factor is 1 (Scott 1992, section 6.3)
    assert round(bandwidth.normal_scale_constant(1), 2) == 1.06
    assert bandwidth.normal_scale_constant(2) == 1.0


def test_oversmoothed_constants_are_those_in_print():
    # Terrell (1990); Scott (1992), section 6.5.1.2: 1.144 s n^(-1/5)
    assert round(bandwidth.oversmoothed_constant(1), 3) == 1.144
    # Wand & Jones (1995), section 3.2.1: (243 R(K) / (35 mu_2^2 n))^(1/5) s
    published = (243 / (2 * math.sqrt(math.pi)) / 35) ** 0.2
    assert bandwidth.oversmoothed_constant(1) == pytest.approx(published, rel=1e-12)


@pytest.mark.parametrize("dimensions", [1, 2, 3])
def test_normal_scale_constant_follows_from_the_integral(dimensions):
    def normal(radius):
        return (2 * math.pi) ** (-dimensions / 2) * math.exp(-(radius**2) / 2)

    expected = best_constant(laplacian_roughness(normal, dimensions, 9), dimensions)
    assert bandwidth.normal_scale_constant(dimensions) == pytest.approx(expected, rel=1e-3)


@pytest.mark.parametrize("dimensions", [1, 2, 3])
def test_oversmoothed_constant_follows_from_the_integral(dimensions):
    limit = dimensions + 8  # squared radius at which the variance is 1

    def shape(radius):
        return max(1 - radius**2 / limit, 0.0) ** 3

    sphere = 2 * math.pi ** (dimensions / 2) / math.gamma(dimensions / 2)
    mass, _ = integrate.quad(
        lambda radius: shape(radius) * sphere * radius ** (dimensions - 1), 0, math.sqrt(limit)
    )
    variance, _ = integrate.quad(
        lambda radius: shape(radius) * sphere * radius ** (dimensions + 1) / mass / dimensions,
        0,
        math.sqrt(limit),
    )
    assert variance == pytest.approx(1, rel=1e-9)
    roughness = laplacian_roughness(
        lambda radius: shape(radius) / mass, dimensions, math.sqrt(limit)
    )
    expected = best_constant(roughness, dimensions)
    assert bandwidth.oversmoothed_constant(dimensions) == pytest.approx(expected, rel=1e-3)


def test_normal_scale_equals_scott_factor_of_scipy():
    # scipy.stats.gaussian_kde: factor n^(-1 / (d + 4)); with weights its neff is Kish's size
    stats = pytest.importorskip("scipy.stats")
    generator = np.random.default_rng(8)
    x, y = generator.normal(0, 1, (2, 500))
    weights = generator.gamma(3.0, size=500)
    estimate = stats.gaussian_kde(np.vstack([x, y]), weights=weights)
    assert bandwidth.effective_size(weights) == pytest.approx(estimate.neff, rel=1e-12)
    factor = bandwidth.normal_scale(x, y, weights) / bandwidth.spread(x, y, weights)
    assert factor == pytest.approx(estimate.scotts_factor(), rel=1e-12)
    trace = np.trace(estimate._data_covariance)
    assert bandwidth.standard_spread(x, y, weights) == pytest.approx(np.sqrt(trace / 2), rel=1e-12)


@pytest.fixture(scope="module")
def two_groups():
    generator = np.random.default_rng(12)
    first = generator.normal((0, 0), 1.0, (70, 2))
    return np.vstack([first, generator.normal((6, 2), 0.5, (50, 2))])


def test_least_squares_score_equals_that_of_statsmodels(two_groups):
    # statsmodels.nonparametric: KDEMultivariate.imse is the least-squares criterion
    nonparametric = pytest.importorskip("statsmodels.nonparametric.kernel_density")
    bandwidths = np.array([0.15, 0.4, 0.8, 1.6])
    estimate = nonparametric.KDEMultivariate(two_groups, "cc", bw=[1.0, 1.0])
    expected = [estimate.imse(np.array([value, value])) for value in bandwidths]
    found = crossvalidation.least_squares_scores(*two_groups.T, bandwidths)
    np.testing.assert_allclose(found, expected, rtol=1e-6)


def test_leave_one_out_likelihood_equals_that_of_scikit_learn(two_groups):
    neighbors = pytest.importorskip("sklearn.neighbors")
    bandwidths = np.array([0.15, 0.4, 0.8, 1.6])
    expected = [
        np.mean(
            [
                neighbors.KernelDensity(bandwidth=value, rtol=1e-10)
                .fit(np.delete(two_groups, left_out, axis=0))
                .score(two_groups[left_out : left_out + 1])
                for left_out in range(len(two_groups))
            ]
        )
        for value in bandwidths
    ]
    found = crossvalidation.likelihood_scores(*two_groups.T, bandwidths)
    np.testing.assert_allclose(found, expected, rtol=1e-6)


def test_likelihood_choice_equals_the_grid_search_of_scikit_learn(two_groups):
    neighbors = pytest.importorskip("sklearn.neighbors")
    selection = pytest.importorskip("sklearn.model_selection")
    few = two_groups[::3]
    bandwidths = np.geomspace(0.2, 2.0, 9)
    search = selection.GridSearchCV(
        neighbors.KernelDensity(), {"bandwidth": bandwidths}, cv=selection.LeaveOneOut()
    ).fit(few)
    found = crossvalidation.likelihood_scores(*few.T, bandwidths)
    assert bandwidths[np.argmax(found)] == search.best_params_["bandwidth"]
