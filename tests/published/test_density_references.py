"""Density surfaces against independent libraries and published constants."""

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import gaussian_kde
from sklearn.neighbors import KernelDensity
from steadfield.algorithms.numeric import surface
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.kernels import GAUSSIAN, QUARTIC


@pytest.fixture(scope="module")
def records():
    rng = np.random.default_rng(1)
    places = np.vstack([rng.normal((30, 40), 6, (900, 2)), rng.normal((60, 50), 15, (600, 2))])
    return places[:, 0], places[:, 1], rng.uniform(0.1, 2, len(places))


GRID = Grid(0.0, 100.0, 1.0, 100, 100)


def pixels_to_compare(total):
    """The 100 densest pixels and 900 at random, as rows and columns."""
    order = np.argsort(total.ravel())
    others = np.random.default_rng(2).permutation(order[:-100])[:900]
    return np.unravel_index(np.concatenate([order[-100:], others]), total.shape)


@pytest.mark.parametrize("bandwidth", [0.7, 2.5, 8.0])
def test_fixed_gaussian_agrees_with_scikit_learn(records, bandwidth):
    # sklearn.neighbors.KernelDensity: an independent implementation by trees
    x, y, weights = records
    found = surface.adaptive_surface(x, y, weights, bandwidth, GRID)
    rows, columns = pixels_to_compare(found)
    model = KernelDensity(bandwidth=bandwidth, kernel="gaussian", rtol=1e-6)
    model.fit(np.column_stack([x, y]), sample_weight=weights)
    centres = np.column_stack([GRID.x_centres()[columns], GRID.y_centres()[rows]])
    reference = np.exp(model.score_samples(centres)) * weights.sum()
    assert np.abs(found[rows, columns] - reference).max() <= 1e-4 * reference.max()


@pytest.mark.parametrize("bandwidth", [0.7, 2.5, 8.0])
def test_fixed_gaussian_agrees_with_scipy(records, bandwidth):
    # scipy.stats.gaussian_kde smooths with a factor times the covariance of the data, so the
    # data are first given the covariance 12^2 along both axes and none between them
    x, y, weights = records
    places = np.vstack([x, y])
    root = np.linalg.cholesky(np.cov(places, aweights=weights))
    x, y = 12.0 * np.linalg.solve(root, places)
    x, y = x - x.mean() + 50.0, y - y.mean() + 50.0
    model = gaussian_kde(np.vstack([x, y]), bw_method=bandwidth / 12.0, weights=weights)
    assert model.covariance == pytest.approx(bandwidth**2 * np.eye(2), abs=1e-9)
    found = surface.adaptive_surface(x, y, weights, bandwidth, GRID)
    rows, columns = pixels_to_compare(found)
    centres = np.vstack([GRID.x_centres()[columns], GRID.y_centres()[rows]])
    reference = model.evaluate(centres) * weights.sum()
    assert np.abs(found[rows, columns] - reference).max() <= 1e-4 * reference.max()


def test_kernels_on_the_plane_have_their_known_efficiency():
    # on the plane the criterion is roughness times variance along an axis (Wand & Jones 1995,
    # section 4.4), least for the Epanechnikov kernel 2 / pi (1 - r^2): roughness 4 / (3 pi),
    # variance 1 / 6 (Silverman 1986, section 4.2)
    optimal = 4 / (3 * math.pi) / 6
    assert optimal / GAUSSIAN.roughness == pytest.approx(8 / 9, rel=1e-12)
    assert optimal / QUARTIC.roughness == pytest.approx(80 / 81, rel=1e-12)


@pytest.mark.parametrize(("kernel", "published"), [(GAUSSIAN, 0.951), (QUARTIC, 0.994)])
def test_kernel_profiles_have_the_efficiency_published_for_the_line(kernel, published):
    # Wand & Jones (1995), Kernel Smoothing, table 2.1: (C(Epanechnikov) / C(K))^(5/4) with
    # C(K) = (roughness^4 variance^2)^(1/5); table values as remembered, the rest is computed
    def criterion(profile, reach):
        mass = quad(profile, -reach, reach)[0]
        roughness = quad(lambda u: (profile(u) / mass) ** 2, -reach, reach)[0]
        variance = quad(lambda u: u * u * profile(u) / mass, -reach, reach)[0]
        return (roughness**4 * variance**2) ** 0.2

    best = criterion(lambda u: 1 - u * u, 1.0)
    own = criterion(lambda u: float(kernel.profile(np.float64(u * u))), 1.6 * kernel.reach)
    assert (best / own) ** 1.25 == pytest.approx(published, abs=5e-4)
