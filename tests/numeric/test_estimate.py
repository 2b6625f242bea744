"""Density, error and edge correction as one."""

import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric import edges, surface
from steadfield.algorithms.numeric.adaptation import adapt_bandwidths
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.estimate import estimate, without_noise
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.kernels import KERNELS

GRID = Grid(0, 100, 1.0, 100, 100)


def records(seed, count):
    rng = np.random.default_rng(seed)
    x, y = rng.normal(40, 12, count), rng.normal(60, 12, count)
    return x, y, rng.uniform(0.5, 2, count), rng.uniform(2.0, 9.0, count)


@pytest.mark.parametrize("edge", ["record", "place"])
def test_corrections_are_those_of_the_factors(edge):
    x, y, weights, bandwidths = records(1, 200)
    mask = edges.boundary_mask(shapely.box(10, 20, 55, 90), GRID)
    kept = shapely.intersects_xy(shapely.box(10, 20, 55, 90), x, y)
    x, y, weights, bandwidths = (values[kept] for values in (x, y, weights, bandwidths))
    found = estimate(x, y, weights, bandwidths, GRID, mask=mask, edge=edge)
    if edge == "record":
        factors = edges.record_factors(x, y, bandwidths, mask, GRID)
        expected = surface.adaptive_surface(x, y, weights / factors, bandwidths, GRID)
        assert found.mass == pytest.approx(weights.sum(), rel=1e-6)
    else:
        plain = surface.adaptive_surface(x, y, weights, bandwidths, GRID)
        widths = edges.bandwidth_at_places(x, y, weights, bandwidths, plain, GRID)
        expected = plain / np.maximum(edges.place_factors(widths, mask, GRID), 0.05)
    assert found.density == pytest.approx(expected)
    assert np.array_equal(found.inside, mask >= 0.5)


@pytest.mark.parametrize("kernel", list(KERNELS))
def test_effective_records_agree_with_the_plain_sums_and_are_one_in_the_tails(kernel):
    x, y, weights, bandwidths = records(2, 150)
    found = estimate(x, y, weights, bandwidths, GRID, kernel)
    centre_x, centre_y = GRID.centres()
    apart = (centre_x[..., None] - x) ** 2 + (centre_y[..., None] - y) ** 2
    parts = weights * KERNELS[kernel].value(apart, bandwidths)
    peaks = weights * KERNELS[kernel].value(np.zeros(len(x)), bandwidths)
    total, squares = parts.sum(axis=-1), np.square(parts).sum(axis=-1)
    with np.errstate(invalid="ignore", divide="ignore"):
        exact = total**2 / squares
        single = (parts * peaks).sum(axis=-1) / total
        near, far = total > 0.12 * single, total < 0.08 * single
    assert found.effective[near] == pytest.approx(exact[near], rel=0.02)
    assert near.any() and far.any()
    assert np.all(found.effective[far] <= 1.0)


def test_nothing_far_from_a_few_records_looks_certain():
    # five records whose tails alone meet in the far corner
    rng = np.random.default_rng(3)
    x, y = rng.normal(50, 4, 5), rng.normal(50, 4, 5)
    found = estimate(x, y, 1.0, np.linspace(4, 11, 5), GRID)
    assert found.effective.max() <= 5.001
    known = np.isfinite(found.relative_error)
    assert found.relative_error[known].min() >= 5**-0.5 - 1e-3


@pytest.mark.parametrize("adapt", [0.5, 1.0])
def test_standard_error_counts_that_bandwidths_follow_the_same_records(adapt):
    # the spread over simulated Poisson patterns, bandwidths worked out anew for each; without the
    # inflation the stated error is 0.8 of it for an adaptation of 0.5 and 0.65 for 1
    rng = np.random.default_rng(6)
    grid = Grid(0, 100, 5.0, 20, 20)
    inner = slice(6, 14, 2)
    densities, variances, plain = [], [], []
    for _ in range(150):
        x, y = rng.uniform(-25, 125, (2, rng.poisson(1000)))
        adapted = adapt_bandwidths(x, y, np.ones(x.size), 8.0, adapt)
        found = estimate(x, y, 1.0, adapted.bandwidths, grid, inflation=adapted.inflation)
        densities.append(found.density[inner, inner])
        error = found.relative_error[inner, inner] * found.density[inner, inner]
        variances.append(error**2)
        plain.append(found.squares[inner, inner])
    spread = np.var(densities, axis=0, ddof=1).mean()
    # 16 pixels of 150 patterns, hardly dependent: a spread known to about 2 %
    assert np.sqrt(np.mean(variances) / spread) == pytest.approx(1, abs=0.1)
    assert np.sqrt(np.mean(plain) / spread) < 0.87


def test_one_bandwidth_for_all_leaves_the_error_as_the_effective_records_give_it():
    x, y, weights, _ = records(7, 300)
    adapted = adapt_bandwidths(x, y, weights, 6.0, 0.0)
    found = estimate(x, y, weights, adapted.bandwidths, GRID, inflation=adapted.inflation)
    known = found.effective > 0
    assert found.relative_error[known] == pytest.approx(found.effective[known] ** -0.5)


def test_without_noise_keeps_what_is_within_the_limit():
    x, y, weights, bandwidths = records(4, 400)
    found = estimate(x, y, weights, bandwidths, GRID)
    steady = without_noise(found, 0.25)
    assert np.array_equal(steady.inside, found.effective >= 16.0)
    assert 0 < steady.inside.sum() < found.inside.sum()
    with pytest.raises(InputError, match="MOST_ERROR must be above 0; found 0"):
        without_noise(found, 0)


def test_unknown_correction_is_refused():
    with pytest.raises(InputError, match="EDGE must be none, record or place; found 'both'"):
        estimate([1.0], [1.0], 1.0, np.array([2.0]), GRID, edge="both")
