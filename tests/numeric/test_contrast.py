"""Density ratios and random labels: exactness, invariances, level and power."""

from itertools import combinations

import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric import contrast, practice
from steadfield.algorithms.numeric.edges import boundary_mask
from steadfield.algorithms.numeric.errors import CancelledError, InputError
from steadfield.algorithms.numeric.grid import Grid, covering
from steadfield.algorithms.numeric.relabelling import KernelSums, relabelled_values
from steadfield.algorithms.numeric.surface import direct_surface

GRID = Grid(-2000.0, 2000.0, 100.0, 40, 40)


def cloud(count, seed, spread=700.0):
    return np.random.default_rng(seed).normal(0, spread, (2, count))


def pooled_clouds(first=80, second=400, seed=1):
    return contrast.pool((*cloud(first, seed), None), (*cloud(second, seed + 1), None))


def test_kernel_sums_equal_the_direct_sum_for_every_set_of_weights():
    generator = np.random.default_rng(5)
    x, y = generator.uniform(-2600, 2600, (2, 200))
    bandwidths = np.exp(generator.uniform(np.log(150), np.log(2500), 200))
    weights = generator.gamma(1.0, size=(200, 3))
    found = KernelSums(x, y, bandwidths, GRID).sums(weights)
    for position in range(3):
        expected = direct_surface(x, y, weights[:, position], bandwidths, GRID)
        assert np.abs(found[position] - expected).max() <= 1e-4 * expected.max()


def test_log_ratio_equals_that_of_direct_sums():
    pooled = pooled_clouds()
    found = contrast.density_contrast(pooled, GRID, 350.0)
    records, background = (
        direct_surface(pooled.x, pooled.y, own, found.bandwidths, GRID) for own in pooled.split
    )
    expected = np.log(records / 80) - np.log(background / 400)
    assert found.shown.sum() > 200
    np.testing.assert_allclose(found.log_ratio[found.shown], expected[found.shown], atol=2e-3)
    assert np.isnan(found.log_ratio[~found.shown]).all()


def test_support_is_the_effective_background_of_direct_sums():
    pooled = pooled_clouds()
    found = contrast.density_contrast(pooled, GRID, 350.0)
    own = slice(pooled.records, None)
    places = pooled.x[own], pooled.y[own]
    centres_x, centres_y = GRID.centres()
    squared = (centres_x[..., None] - places[0]) ** 2 + (centres_y[..., None] - places[1]) ** 2
    widths = found.bandwidths[own]
    kernels = np.exp(-squared / (2 * widths**2)) / (2 * np.pi * widths**2)
    expected = kernels.sum(axis=-1) ** 2 / (kernels**2).sum(axis=-1)
    np.testing.assert_allclose(found.support[found.shown], expected[found.shown], rtol=5e-3)
    assert np.all(expected[found.shown] > 9.9)


def test_tails_far_from_all_background_get_no_value_and_no_certainty():
    # 400 background records in the middle, one of them and one record far out: by definition a
    # pixel has a single record behind it where the exact sum is below a tenth of one kernel's peak
    generator = np.random.default_rng(17)
    background, records = generator.normal(0, 300, (2, 400)), generator.normal(0, 300, (2, 50))
    background[:, 0], records[:, 0] = -1500.0, 1500.0
    grid = Grid(-3000.0, 3000.0, 60.0, 100, 100)
    bandwidth = 200.0
    pooled = contrast.pool((*records, None), (*background, None))
    found = contrast.density_contrast(pooled, grid, bandwidth, adapt=0.0)
    peak = 1 / (2 * np.pi * bandwidth**2)
    exact = direct_surface(*background, 1.0, bandwidth, grid)
    tails = exact < 0.09 * peak
    assert tails.sum() > 5000 and not found.shown[tails].any()
    assert np.all(found.support[tails] <= 1 + 1e-9)
    rows, columns = np.nonzero(exact >= 10.5 * peak)
    assert found.shown[rows, columns].all() and len(rows) > 50
    # half the weight as either label at the most: a lone record leaves a noise of 2 or more
    together = exact + direct_surface(*records, 1.0, bandwidth, grid)
    assert np.all(found.noise[together < 0.09 * peak] >= 2 - 1e-9)


def test_records_that_are_the_background_have_a_ratio_of_one():
    x, y = cloud(300, 3)
    pooled = contrast.pool((x, y, None), (x, y, None))
    found = contrast.density_contrast(pooled, GRID, 300.0)
    np.testing.assert_allclose(found.log_ratio[found.shown], 0.0, atol=1e-9)


def test_counts_on_places_equal_as_many_single_records():
    x, y = cloud(150, 4)
    counts = np.random.default_rng(5).integers(1, 5, 150)
    records = (*cloud(50, 6), None)
    one = contrast.pool(records, (x, y, counts))
    many = contrast.pool(records, (np.repeat(x, counts), np.repeat(y, counts), None))
    assert contrast.pool(records, (x, y, counts)).totals == (50.0, counts.sum())
    found = contrast.density_contrast(one, GRID, 400.0, least_support=5.0)
    expected = contrast.density_contrast(many, GRID, 400.0, least_support=5.0)
    both = found.shown & expected.shown
    assert both.sum() > 200
    np.testing.assert_allclose(found.log_ratio[both], expected.log_ratio[both], atol=1e-6)
    np.testing.assert_allclose(found.noise[both], expected.noise[both], rtol=2e-3)


def test_only_the_ratios_of_weights_that_mean_values_matter():
    generator = np.random.default_rng(7)
    places = cloud(60, 8), cloud(200, 9)
    weights = generator.gamma(2.0, size=60), generator.gamma(2.0, size=200)

    def ratio(first, second):
        groups = [(*place, own) for place, own in zip(places, (first, second))]
        pooled = contrast.pool(*groups, weights_mean="values")
        return contrast.density_contrast(pooled, GRID, 400.0).log_ratio

    expected = ratio(*weights)
    np.testing.assert_allclose(ratio(7 * weights[0], 0.01 * weights[1]), expected, rtol=1e-9)


def test_edge_correction_cancels_for_a_fixed_bandwidth():
    # f / q over g / q, with q the share of the kernel inside the boundary
    square = shapely.box(-1000, -1000, 1000, 1000)
    mask = boundary_mask(square, GRID)
    generator = np.random.default_rng(10)
    pooled = contrast.pool(
        (*generator.uniform(-1000, 1000, (2, 300)), None),
        (*generator.uniform(-1000, 1000, (2, 3000)), None),
    )
    found = contrast.density_contrast(pooled, GRID, 400.0, adapt=0.0, mask=mask)
    assert np.array_equal(found.shown, mask >= 0.5)
    rim = found.shown & ~(boundary_mask(shapely.box(-700, -700, 700, 700), GRID) > 0)
    assert abs(found.log_ratio[rim].mean()) < 0.05
    assert np.all(np.abs(found.log_ratio[rim]) < 5 * found.noise[rim])


def test_pointwise_p_values_are_those_of_all_labellings():
    # 2 records among 7 places: all 21 labellings can be listed
    generator = np.random.default_rng(11)
    x, y = generator.uniform(-600, 600, (2, 7))
    pooled = contrast.pool((x[:2], y[:2], None), (x[2:], y[2:], None))
    found = contrast.density_contrast(pooled, GRID, 500.0, adapt=0.0, least_support=3.0)
    kernels = np.array(
        [direct_surface(x[i : i + 1], y[i : i + 1], 1.0, 500.0, GRID) for i in range(7)]
    )
    ratios = []
    for chosen in combinations(range(7), 2):
        records = kernels[list(chosen)].sum(axis=0)
        ratios.append(np.log(records / 2) - np.log((kernels.sum(axis=0) - records) / 5))
    # the first labelling listed is the observed one
    exact = np.mean(np.array(ratios) >= ratios[0] - 1e-9, axis=0)[found.shown]
    count = 3000
    result = contrast.relabel(found, count, np.random.default_rng(12))
    raised = result.p_raised[found.shown]
    # where the observed labelling ties with another up to the error of the sums, either may lead
    gaps = np.sort(np.abs(np.array(ratios)[1:] - ratios[0]), axis=0)[0][found.shown]
    clear = gaps > 0.05
    assert clear.sum() > 50
    deviation = np.sqrt(exact * (1 - exact) / count)
    assert np.all(np.abs(raised - exact)[clear] < 4.5 * deviation[clear] + 2 / count)
    lowered = result.p_lowered[found.shown]
    np.testing.assert_allclose((raised + lowered)[clear], 1 + 1 / 21, atol=0.03)


@pytest.mark.parametrize("weights_mean", ["counts", "values"])
def test_noise_is_the_spread_over_random_labels(weights_mean):
    generator = np.random.default_rng(13)
    if weights_mean == "counts":
        weights = generator.integers(1, 6, 300), generator.integers(1, 6, 900)
    else:
        weights = generator.gamma(4.0, size=300), generator.gamma(4.0, size=900)
    pooled = contrast.pool(
        (*cloud(300, 14), weights[0]), (*cloud(900, 15), weights[1]), weights_mean
    )
    found = contrast.density_contrast(pooled, GRID, 500.0, least_support=60.0)
    ratios = []
    while len(ratios) < 300:
        ratios.extend(contrast._relabelled_ratios(found, 20, generator))
    spread = np.std(ratios, axis=0)
    relative = spread / found.noise[found.tested]
    assert abs(np.median(relative) - 1) < 0.1
    assert np.all(np.abs(relative - 1) < 0.35)


@pytest.mark.parametrize("weights_mean", ["counts", "values"])
def test_where_to_test_kernels_and_noise_know_nothing_of_the_labels(weights_mean):
    # what the observed labels have a say in is not exchangeable with the labels drawn: with a floor
    # on the observed background alone, twice as many chance maps as stated were called lowered
    generator = np.random.default_rng(31)
    places = generator.normal(0, 700, (2, 200))
    weights = np.ones(200) if weights_mean == "counts" else generator.lognormal(0, 1.2, 200)
    found = []
    for _ in range(2):
        mixed = places[:, generator.permutation(200)]
        groups = [(*mixed[:, part], weights[part]) for part in (slice(80), slice(80, None))]
        pooled = contrast.pool(*groups, weights_mean)
        found.append(contrast.density_contrast(pooled, GRID, 350.0, least_support=5.0))
    assert found[0].tested.sum() > 100 and np.any(found[0].shown != found[1].shown)
    np.testing.assert_array_equal(found[0].tested, found[1].tested)
    np.testing.assert_allclose(found[0].noise[found[0].tested], found[1].noise[found[0].tested])
    for one in found:
        assert not np.any(one.shown & ~one.tested)


def test_p_values_over_the_map_are_shares_of_labellings():
    found = contrast.density_contrast(pooled_clouds(), GRID, 400.0)
    result = contrast.relabel(found, 39, np.random.default_rng(16))
    scaled = (found.log_ratio / found.noise)[found.shown]
    for position in (0, 57, scaled.size - 1):
        expected = np.mean(result.highest_scaled >= scaled[position] - 1e-9)
        assert result.p_raised_anywhere[found.shown][position] == pytest.approx(expected)
        expected = np.mean(result.lowest_scaled <= scaled[position] + 1e-9)
        assert result.p_lowered_anywhere[found.shown][position] == pytest.approx(expected)
    least = np.nanmin(result.p_raised_anywhere)
    assert least == pytest.approx(result.global_p("highest_scaled"))
    shown = found.shown
    assert np.all(result.p_raised_anywhere[shown] >= 1 / 40)
    assert np.isnan(result.p_raised[~shown]).all()


WHICH = ("highest", "lowest", "highest_scaled", "lowest_scaled")


def rejections(simulations, relabellings, seed):
    """How often each global test rejects at 5 % when records are a random sample."""
    generator = np.random.default_rng(seed)
    grid = Grid(-2000.0, 2000.0, 250.0, 16, 16)
    rejected = dict.fromkeys(WHICH, 0)
    for _ in range(simulations):
        x, y = generator.normal(0, 700, (2, 160))
        pooled = contrast.pool((x[:40], y[:40], None), (x[40:], y[40:], None))
        found = contrast.density_contrast(pooled, grid, 400.0)
        result = contrast.relabel(found, relabellings, generator)
        for which in WHICH:
            rejected[which] += result.global_p(which) <= 0.05
    return rejected


def test_global_tests_reject_a_random_sample_at_their_level():
    # 19 relabellings make a test of level 5 % exact; tests/bench/bench_contrast.py has the long run
    simulations = 150
    for which, rejected in rejections(simulations, 19, 17).items():
        # 99.9 % of Binomial(150, 0.05)
        assert 1 <= rejected <= 17, which


def test_a_raised_area_is_found_and_nothing_else():
    generator = np.random.default_rng(18)
    background = generator.uniform(-2000, 2000, (2, 4000))
    records = np.hstack(
        [generator.uniform(-2000, 2000, (2, 500)), generator.normal((800, -600), 200, (60, 2)).T]
    )
    pooled = contrast.pool((*records, None), (*background, None))
    found = contrast.density_contrast(pooled, GRID, contrast.common_bandwidth(pooled) / 2)
    result = contrast.relabel(found, 199, generator)
    sure = result.p_raised_anywhere <= 0.05
    assert sure.any()
    x, y = GRID.centres()
    assert np.hypot(x - 800, y + 600)[sure].max() < 700
    assert not (result.p_lowered_anywhere <= 0.01).any()


def test_the_same_seed_gives_the_same_p_values():
    found = contrast.density_contrast(pooled_clouds(), GRID, 400.0)
    first, second = (
        contrast.relabel(found, 25, np.random.default_rng(19)).p_raised for _ in range(2)
    )
    np.testing.assert_array_equal(first, second)


def test_values_move_with_their_records():
    cases, background = np.arange(1.0, 4.0), np.arange(10.0, 15.0)
    drawn = relabelled_values(cases, background, np.random.default_rng(20))
    assert sorted(drawn[0][drawn[0] > 0]) == cases.tolist()
    assert sorted(drawn[1][drawn[1] > 0]) == background.tolist()
    assert not np.any((drawn[0] > 0) & (drawn[1] > 0))


def test_common_bandwidth_follows_the_smaller_group():
    first, second = contrast.common_bandwidth(pooled_clouds(80, 4000)), None
    second = contrast.common_bandwidth(pooled_clouds(80, 40_000))
    assert second == pytest.approx(first, rel=0.1)
    few = contrast.common_bandwidth(pooled_clouds(8, 4000))
    assert few > 1.3 * first


def test_what_cannot_be_compared_is_refused_in_words():
    places = (*cloud(20, 21), None)
    with pytest.raises(InputError, match=r"whole numbers; found 0\.5"):
        contrast.pool(places, (*cloud(20, 22), np.full(20, 0.5)))
    with pytest.raises(InputError, match="No pixel has 1000 effective"):
        contrast.density_contrast(pooled_clouds(), GRID, 400.0, least_support=1000)
    with pytest.raises(InputError, match="pixels wide"):
        KernelSums(np.zeros(2), np.zeros(2), np.full(2, 120.0), GRID)
    found = contrast.density_contrast(pooled_clouds(), GRID, 400.0)
    with pytest.raises(InputError, match="RELABELLINGS"):
        contrast.relabel(found, 0, np.random.default_rng(1))


def test_kernels_narrower_than_the_pixels_allow_are_raised_and_counted():
    found = contrast.density_contrast(pooled_clouds(), GRID, 160.0)
    assert found.raised > 0
    assert found.bandwidths.min() == pytest.approx(150.0)


def test_cancelling_stops_the_relabelling():
    def cancel(share):
        raise CancelledError

    found = contrast.density_contrast(pooled_clouds(), GRID, 400.0)
    with pytest.raises(CancelledError):
        contrast.relabel(found, 500, np.random.default_rng(1), cancel)


def test_both_true_areas_of_the_practice_district_are_found_and_nothing_else():
    # tests/bench/bench_contrast.py does the same at full size
    district = practice.make_district(1, 0.6)
    groups = district.falls, district.residents
    pooled = contrast.pool(*[(group.x, group.y, None) for group in groups])
    bandwidth = contrast.common_bandwidth(pooled)
    grid = covering(district.boundary.bounds, bandwidth / 4)
    mask = boundary_mask(district.boundary, grid)
    found = contrast.density_contrast(pooled, grid, bandwidth, mask=mask)
    result = contrast.relabel(found, 99, np.random.default_rng(2))
    sure = result.p_raised_anywhere <= 0.05
    x, y = grid.centres()
    areas = district.risk.areas()
    for area in areas:
        assert sure[shapely.contains_xy(area, x, y)].mean() > 0.2
    near = shapely.union_all(shapely.buffer(areas, 2 * bandwidth))
    assert shapely.contains_xy(near, x[sure], y[sure]).all()
    assert not (result.p_lowered_anywhere <= 0.01).any()
