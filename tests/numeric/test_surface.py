"""The engine against the direct sum, and what is derived from a surface."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from steadfield.algorithms.numeric import spectrum, surface
from steadfield.algorithms.numeric.errors import CancelledError, InputError
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.kernels import KERNELS, kernel_named

BOTH = pytest.mark.parametrize("kernel", list(KERNELS))
ROUTES = pytest.mark.parametrize("route", ["cheapest", "spectrum", "windows"])


@pytest.fixture
def route(request, monkeypatch):
    """Force one route of the engine, so that small cases exercise each."""
    if request.param == "spectrum":
        monkeypatch.setattr(spectrum, "_window_cost", lambda band: 1e18)
    elif request.param == "windows":
        monkeypatch.setattr(spectrum, "_window_cost", lambda band: 0.0)
    return request.param


def clustered(seed, records, shape, cell=1.0, spread_factor=50.0, narrowest=0.8, outside=0.2):
    """Clustered records with bandwidths within a factor, some beyond the edge of the grid."""
    rng = np.random.default_rng(seed)
    grid = Grid(rng.uniform(-1e4, 1e4), rng.uniform(-1e4, 1e4), cell, *shape)
    centres = rng.uniform(-outside, 1 + outside, (3, 2))
    places = centres[rng.integers(0, 3, records)] + rng.normal(0, 0.1, (records, 2))
    x = grid.left + places[:, 0] * shape[1] * cell
    y = grid.top - places[:, 1] * shape[0] * cell
    bandwidths = cell * narrowest * spread_factor ** rng.uniform(0, 1, records)
    return x, y, rng.uniform(0, 2, records), bandwidths, grid


def peak_of(x, y, weights, bandwidths, grid, kernel, total):
    """Largest density on the grid or at a record, from the direct sum."""
    kernel = kernel_named(kernel)
    apart = np.square(x[:, None] - x) + np.square(y[:, None] - y)
    at_records = kernel.value(apart, bandwidths) @ weights
    return max(total.max(), at_records.max())


@BOTH
@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    seed=st.integers(0, 2**32 - 1),
    records=st.sampled_from([1, 2, 20, 300]),
    rows=st.integers(1, 70),
    columns=st.integers(1, 70),
    cell=st.sampled_from([0.01, 1.0, 250.0]),
    narrowest=st.sampled_from([0.02, 0.5, 1.6, 6.0, 40.0]),
    factor=st.sampled_from([1.0, 1.3, 50.0]),
)
def test_agrees_with_direct_sum(kernel, seed, records, rows, columns, cell, narrowest, factor):
    case = clustered(seed, records, (rows, columns), cell, factor, narrowest)
    exact = surface.direct_surface(*case, kernel)
    fast = surface.adaptive_surface(*case, kernel)
    assert np.abs(fast - exact).max() <= 1e-4 * peak_of(*case, kernel, exact)


@pytest.mark.parametrize("route", ["spectrum", "windows"], indirect=True)
@pytest.mark.parametrize("shape", [(1, 90), (90, 1), (64, 64), (33, 120)])
def test_every_route_of_the_gaussian_agrees_with_direct_sum(route, shape):
    case = clustered(7, 400, shape, narrowest=1.6)
    exact = surface.direct_surface(*case)
    fast = surface.adaptive_surface(*case)
    assert np.abs(fast - exact).max() <= 1e-4 * exact.max()


@pytest.mark.parametrize("route", ["spectrum"], indirect=True)
@pytest.mark.parametrize("offset", [0.0, 0.25, 0.5])
def test_one_record_between_rungs_and_nodes_stays_within_the_bound(route, offset):
    # nothing averages out here: the worst case of ladder and spreading together
    grid = Grid(0, 200, 1.0, 200, 200)
    for bandwidth in (1.7, 2.1, 2.6, 5.0):
        x = np.array([100.0, 20.0, 20.0]) + offset
        y = np.array([100.0, 20.0, 20.0]) + offset
        widths = np.array([bandwidth, bandwidth / 1.24, bandwidth * 1.24])
        weights = np.array([1.0, 0.0, 0.0])
        exact = surface.direct_surface(x, y, weights, widths, grid)
        fast = surface.adaptive_surface(x, y, weights, widths, grid)
        assert np.abs(fast - exact).max() <= 1e-4 * exact.max()


@BOTH
def test_one_bandwidth_many_times_the_grid(kernel):
    case = clustered(11, 50, (40, 30), narrowest=300.0, spread_factor=5.0)
    exact = surface.direct_surface(*case, kernel)
    assert surface.adaptive_surface(*case, kernel) == pytest.approx(exact, rel=1e-4)


@BOTH
def test_quartic_and_gaussian_on_coarser_lattices_agree_at_the_rim(kernel):
    rng = np.random.default_rng(12)
    grid = Grid(0, 600, 1.0, 600, 600)
    x, y, h = rng.uniform(0, 600, 3), rng.uniform(0, 600, 3), np.array([60.0, 71.0, 97.0])
    exact = surface.direct_surface(x, y, 1.0, h, grid, kernel)
    fast = surface.adaptive_surface(x, y, 1.0, h, grid, kernel)
    assert np.abs(fast - exact).max() <= 1e-4 * exact.max()


@BOTH
def test_identical_records_make_one_kernel_of_their_weight(kernel):
    grid = Grid(0, 60, 1.0, 60, 60)
    x, y = np.full(500, 31.3), np.full(500, 28.9)
    total = surface.adaptive_surface(x, y, 1.0, 4.0, grid, kernel)
    single = surface.direct_surface([31.3], [28.9], 500.0, 4.0, grid, kernel)
    assert np.abs(total - single).max() <= 1e-4 * single.max()


@BOTH
def test_weights_of_both_signs_are_summed(kernel):
    x, y, _, bandwidths, grid = clustered(13, 300, (50, 50))
    weights = np.random.default_rng(14).normal(size=300)
    exact = surface.direct_surface(x, y, weights, bandwidths, grid, kernel)
    fast = surface.adaptive_surface(x, y, weights, bandwidths, grid, kernel)
    scale = surface.direct_surface(x, y, np.abs(weights), bandwidths, grid, kernel).max()
    assert exact.min() < 0
    assert np.abs(fast - exact).max() <= 1e-4 * scale


@BOTH
def test_a_surface_of_positive_weights_is_never_negative(kernel):
    case = clustered(15, 200, (120, 120), narrowest=1.6, spread_factor=8)
    assert surface.adaptive_surface(*case, kernel).min() >= 0


@BOTH
def test_no_records_in_reach_leave_zero(kernel):
    grid = Grid(0, 10, 1.0, 10, 10)
    far = surface.adaptive_surface([1e6], [1e6], 1.0, 2.0, grid, kernel)
    none = surface.adaptive_surface(np.empty(0), np.empty(0), 1.0, 2.0, grid, kernel)
    assert not far.any() and not none.any()


@BOTH
def test_squared_surface_is_the_sum_of_squared_kernels(kernel):
    x, y, weights, bandwidths, grid = clustered(16, 150, (60, 40))
    centre_x, centre_y = grid.centres()
    exact = np.zeros(grid.shape)
    for place_x, place_y, weight, bandwidth in zip(x, y, weights, bandwidths):
        apart = (centre_x - place_x) ** 2 + (centre_y - place_y) ** 2
        exact += (weight * kernel_named(kernel).value(apart, bandwidth)) ** 2
    fast = surface.squared_surface(x, y, weights, bandwidths, grid, kernel)
    assert np.abs(fast - exact).max() <= 1e-4 * exact.max()


@BOTH
@pytest.mark.parametrize("route", ["cheapest", "spectrum"], indirect=True)
def test_kernel_mass_is_the_transpose_of_the_surface(kernel, route):
    x, y, weights, bandwidths, grid = clustered(17, 200, (50, 64))
    mask = np.random.default_rng(18).uniform(0, 1, grid.shape)
    signed = weights - 0.5
    total = surface.adaptive_surface(x, y, signed, bandwidths, grid, kernel)
    held = surface.kernel_mass(x, y, bandwidths, mask, grid, kernel)
    assert (total * mask).sum() * grid.cell_area == pytest.approx(held @ signed, rel=1e-9)


def test_direct_surface_of_chosen_pixels_is_part_of_the_whole():
    case = clustered(19, 40, (20, 30))
    rows, columns = np.array([0, 7, 19]), np.array([29, 3, 11])
    whole = surface.direct_surface(*case)
    chosen = surface.direct_surface(*case, pixels=(rows, columns))
    assert chosen == pytest.approx(whole[rows, columns])


def test_effective_records_counts_equal_kernels_on_one_place():
    grid = Grid(0, 20, 1.0, 20, 20)
    x, y = np.full(7, 10.2), np.full(7, 9.7)
    total = surface.adaptive_surface(x, y, 3.0, 2.0, grid)
    squares = surface.squared_surface(x, y, 3.0, 2.0, grid)
    behind = surface.effective_records(total, squares)
    assert behind[10, 10] == pytest.approx(7, rel=1e-3)
    error = surface.relative_standard_error(total, squares)
    assert error[10, 10] == pytest.approx(7**-0.5, rel=1e-3)


def test_effective_records_of_unequal_weights_follow_kish():
    # Kish (1965): (1 + 1 + 2)^2 / (1 + 1 + 4)
    behind = surface.effective_records(np.array([[4.0, 0.0]]), np.array([[6.0, 0.0]]))
    assert behind.tolist() == [[pytest.approx(16 / 6), 0.0]]
    assert np.isnan(surface.relative_standard_error(np.zeros((1, 1)), np.zeros((1, 1)))).all()


def test_standard_error_matches_the_spread_over_poisson_patterns():
    # an inhomogeneous Poisson pattern with a sharp and a broad part, its kernels of two bandwidths
    rng = np.random.default_rng(20)
    grid = Grid(0, 40, 1.0, 40, 40)
    replicates, surfaces, variances = 400, [], []
    for _ in range(replicates):
        sharp, broad = rng.poisson(150), rng.poisson(300)
        x = np.concatenate([rng.normal(12, 2.5, sharp), rng.normal(24, 9, broad)])
        y = np.concatenate([rng.normal(28, 2.5, sharp), rng.normal(18, 9, broad)])
        bandwidths = np.repeat([2.0, 4.5], [sharp, broad])
        surfaces.append(surface.adaptive_surface(x, y, 1.0, bandwidths, grid))
        variances.append(surface.squared_surface(x, y, 1.0, bandwidths, grid))
    mean, spread = np.mean(surfaces, axis=0), np.std(surfaces, axis=0, ddof=1)
    stated = np.sqrt(np.mean(variances, axis=0))
    dense = mean > 0.1 * mean.max()
    ratio = stated[dense] / spread[dense]
    # one spread over 400 patterns is itself known to 1 / sqrt(800) = 3.5 %
    assert abs(np.median(ratio) - 1) < 0.03
    assert np.all(np.abs(ratio - 1) < 0.15) and np.mean(np.abs(ratio - 1) < 0.1) > 0.97


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"bandwidths": 0.0}, "BANDWIDTH must be above 0; found 0.0"),
        ({"bandwidths": [1.0, np.nan]}, "BANDWIDTH"),
        ({"x": [0.0, np.inf]}, "1 values of x are not finite"),
        ({"weights": [1.0, np.nan]}, "1 values of weights"),
        ({"y": [0.0]}, "one length"),
        ({"kernel": "epanechnikov"}, "KERNEL"),
    ],
)
def test_unusable_arguments_are_refused_with_what_was_found(change, message):
    arguments = {"x": [0.0, 1.0], "y": [0.0, 1.0], "weights": 1.0, "bandwidths": 1.0}
    arguments = {**arguments, "grid": Grid(0, 2, 1.0, 2, 2), **change}
    with pytest.raises(InputError, match=message):
        surface.adaptive_surface(**arguments)


@BOTH
def test_cancelling_stops_and_progress_only_rises(kernel):
    case = clustered(21, 3000, (80, 80))
    seen = []
    surface.adaptive_surface(*case, kernel, seen.append)
    assert seen == sorted(seen) and seen[-1] == 1.0

    def stop(share):
        raise CancelledError

    with pytest.raises(CancelledError):
        surface.adaptive_surface(*case, kernel, stop)


def test_memory_estimate_covers_what_is_taken():
    import tracemalloc

    for shape, low, high, records in (
        ((500, 500), 1.6, 30.0, 20_000),
        ((900, 300), 20.0, 25.0, 100_000),
    ):
        rng = np.random.default_rng(22)
        grid = Grid(0, shape[0], 1.0, *shape)
        x, y = rng.uniform(0, shape[1], records), rng.uniform(0, shape[0], records)
        bandwidths = rng.uniform(low, high, records)
        needed = surface.memory_needed(grid, low, high, records)
        tracemalloc.start()
        surface.adaptive_surface(x, y, 1.0, bandwidths, grid)
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert 0.3 * needed < peak < needed + 60e6


def test_workable_cell_fits_and_one_step_finer_does_not():
    bounds = (0.0, 0.0, 50_000.0, 30_000.0)
    cell = surface.workable_cell(bounds, 100.0, 900.0, 5_000, 2e9)
    from steadfield.algorithms.numeric.grid import covering

    def needed(size):
        return surface.memory_needed(covering(bounds, size), 100.0, 900.0, 5_000)

    assert needed(cell) <= 2e9 < needed(surface.round_down(cell / 2))
    with pytest.raises(InputError, match="records do not fit"):
        surface.workable_cell(bounds, 100.0, 900.0, 10**9, 2e9)


def test_automatic_cell_is_round_fine_enough_and_bounded():
    assert surface.automatic_cell((0, 0, 1000, 1000), 45.0) == 20.0
    cell = surface.automatic_cell((0, 0, 1e5, 1e5), 3.0)
    assert cell == 50.0 and (1e5 / cell) ** 2 <= 4_000_000
    assert [surface.round_down(v) for v in (0.99, 1.0, 4.9, 5.0, 1999)] == [0.5, 1, 2, 5, 1000]
