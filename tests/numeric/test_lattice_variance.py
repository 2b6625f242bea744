import math
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric import hexagons, lattice_variance, variance
from steadfield.algorithms.numeric.errors import CancelledError, InputError
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.ground import ground, split
from steadfield.algorithms.numeric.lattice_zonings import Tiling, cell_numbers, random_tiling


def town(seed, residents=8000, rate=0.07, side=10_000.0, pixels=40):
    """Residents around forty cores, each an event with the same chance; events and all."""
    generator = np.random.default_rng(seed)
    cores = generator.uniform(0, side, (2, 40))
    place = cores[:, generator.integers(0, 40, 3 * residents)]
    place = place + generator.normal(0, 0.07 * side, (2, 3 * residents))
    place = place[:, ((place > 0) & (place < side)).all(axis=0)][:, :residents]
    events = place[:, generator.random(place.shape[1]) < rate]
    x, y = Grid(0, side, side / pixels, pixels, pixels).centres()
    return ground(
        (*events, np.ones(events.shape[1])),
        (*place, np.ones(place.shape[1])),
        (x.ravel(), y.ravel()),
        "share",
    )


@pytest.mark.parametrize("shape", ["hexagon", "square"])
def test_values_of_a_tiling_agree_with_counting_points_in_its_polygons(shape):
    study = town(1, residents=1500, pixels=12)
    tiling = random_tiling(shape, 1700.0, True, np.random.default_rng(5))
    table, block, statistics = lattice_variance.tiling_values(study, tiling)
    cells = cell_numbers(block, study.place_x, study.place_y)
    row, column = (
        cells // block.columns + block.first_row,
        cells % block.columns + block.first_column,
    )
    frame = {"origin": tiling.origin, "angle": tiling.angle}
    if shape == "hexagon":
        polygons = hexagons.hexagon_polygons(column, row, tiling.size, **frame)
    else:
        polygons = hexagons.square_polygons(column, row, tiling.size, **frame)
    assert shapely.contains_xy(polygons, study.place_x, study.place_y).all()
    overall = study.count.sum() / study.total.sum()
    for place, polygon in enumerate(polygons):
        count = study.count[shapely.contains_xy(polygon, study.x, study.y)].sum()
        total = study.total[shapely.contains_xy(polygon, study.total_x, study.total_y)].sum()
        if total == 0:
            np.testing.assert_array_equal(table[cells[place]], 0)
            continue
        value = count / total
        deviation = value - overall
        angles = [
            math.asin(math.sqrt((part + 0.375) / (total + 0.75)))
            for part in (count, overall * total)
        ]
        z = math.sqrt(4 * total + 2) * (angles[0] - angles[1])
        expected = [1, deviation, deviation**2, value * (1 - value) / total, value > overall, z]
        np.testing.assert_allclose(table[cells[place]], expected, rtol=1e-9, atol=1e-15)
    assert statistics["largest"] == pytest.approx(table[:, 1].max() + overall)
    assert statistics["zones"] == table[:, 0].sum()


def area_samples(side, spacing, margin):
    """A lattice of area samples, each worth its square, over a margin around a square."""
    steps = np.arange(-margin + spacing / 2, side + margin, spacing)
    x, y = np.meshgrid(steps, steps)
    return x.ravel(), y.ravel(), np.full(x.size, spacing**2)


def test_mean_over_all_shifts_of_a_square_is_the_averaged_shifted_histogram():
    # Scott (1985), Ann. Stat. 13:1024: with m x m shifts by h/m the mean over the shifted
    # histograms is a sum over fine bins of h/m with weights (1 - |i|/m)(1 - |j|/m) / h^2.
    m, fine = 8, 1.0
    size, side = m * fine, 40.0
    generator = np.random.default_rng(3)
    x, y = generator.uniform(0, side, (2, 60))
    place_x, place_y = Grid(0, side, 2.0, 20, 20).centres()
    place_x, place_y = place_x.ravel() + 0.3, place_y.ravel() + 0.2
    study = ground(
        (x, y, np.ones(60)), area_samples(side, fine, 2 * size), (place_x, place_y), "rate"
    )
    moments = variance.RunningMoments(len(place_x))
    for i in range(m):
        for j in range(m):
            tiling = Tiling("square", size, (i * fine, j * fine), 0.0)
            table, block, _ = lattice_variance.tiling_values(study, tiling)
            moments.add(table[cell_numbers(block, place_x, place_y), 1] + study.threshold)
    step_x = np.floor(place_x / fine)[:, None] - np.floor(x / fine)
    step_y = np.floor(place_y / fine)[:, None] - np.floor(y / fine)
    weight_x = np.clip(1 - np.abs(step_x) / m, 0, None)
    weight_y = np.clip(1 - np.abs(step_y) / m, 0, None)
    expected = (weight_x * weight_y).sum(axis=1) / size**2
    np.testing.assert_allclose(moments.expected(), expected, rtol=1e-12, atol=1e-15)


def test_mean_over_random_shifts_tends_to_the_triangular_product_kernel():
    # The limit of the averaged shifted histogram (Scott 1985): the product of two triangles of
    # half width h. A square holds 20 x 20 area samples wherever it lies, so its area is exact.
    size, side = 10.0, 40.0
    generator = np.random.default_rng(4)
    x, y = generator.uniform(0, side, (2, 80))
    place_x, place_y = (part.ravel() for part in Grid(0, side, 4.0, 10, 10).centres())
    study = ground((x, y, np.ones(80)), area_samples(side, 0.5, 15.0), (place_x, place_y), "rate")
    (scale,) = lattice_variance.run_scales(study, [size], "square", 1000, 9, rotate=False)
    triangle_x = np.clip(1 - np.abs(place_x[:, None] - x) / size, 0, None) / size
    triangle_y = np.clip(1 - np.abs(place_y[:, None] - y) / size, 0, None) / size
    expected = (triangle_x * triangle_y).sum(axis=1)
    error = np.sqrt(scale.moments.variance() / scale.replicates)
    z = (scale.moments.expected() - expected) / np.maximum(error, 0.01 * expected)
    assert np.abs(z).max() < 4.5
    assert np.sqrt(np.mean(z**2)) < 1.3


def stored_values(study, sizes, shape, replicates, seed, rotate=True):
    """Every scenario's value at every place, from the same random tilings, kept whole."""
    values = []
    for scale, size in enumerate(sizes):
        rows = []
        for batch in range(-(-replicates // lattice_variance.BATCH)):
            sequence = np.random.SeedSequence(seed, spawn_key=(scale, batch))
            generator = np.random.default_rng(sequence)
            for _ in range(
                min(lattice_variance.BATCH, replicates - batch * lattice_variance.BATCH)
            ):
                tiling = random_tiling(shape, size, rotate, generator)
                table, block, _ = lattice_variance.tiling_values(study, tiling)
                row = table[cell_numbers(block, study.place_x, study.place_y)]
                rows.append(np.where(row[:, 0] > 0, row[:, 1] + study.threshold, np.nan))
        values.append(np.array(rows))
    return values


def test_running_sums_agree_with_numpy_on_every_stored_scenario():
    study, sizes, replicates = town(6, pixels=15), (400.0, 900.0, 2000.0), 60
    scales = lattice_variance.run_scales(study, sizes, "hexagon", replicates, 12)
    parts, p_above, _, _ = lattice_variance.decompose_scales(scales)
    values = stored_values(study, sizes, "hexagon", replicates, 12)
    share = np.stack([(~np.isnan(v)).mean(axis=0) for v in values])
    weight = share / share.sum(axis=0)
    scenario = np.concatenate(
        [w / (~np.isnan(v)).sum(axis=0) + 0 * v for w, v in zip(weight, values)]
    )
    stacked = np.concatenate(values)
    mean = np.nansum(scenario * stacked, axis=0)
    total = np.nansum(scenario * (stacked - mean) ** 2, axis=0)
    np.testing.assert_allclose(parts.mean, mean, rtol=1e-12)
    np.testing.assert_allclose(parts.scale + parts.zoning, total, rtol=1e-12, atol=1e-18)
    above = np.nansum(scenario * (stacked > study.threshold), axis=0)
    np.testing.assert_allclose(p_above, above, rtol=1e-12, atol=1e-12)
    assert np.isnan(values[0]).any()


def test_results_are_the_same_to_the_bit_for_any_number_of_workers():
    study = town(7, residents=2000, pixels=15)
    halves = spread_halves(study, 0.2)

    def run(executor):
        scales = lattice_variance.run_scales(
            study, [700.0, 1500.0], "hexagon", 130, 3, halves=halves, executor=executor
        )
        return [
            part
            for scale in scales
            for part in (
                scale.moments.mean,
                scale.moments.squares,
                scale.counting,
                scale.tally.above,
                scale.tally.evidence,
                scale.half_values,
                *scale.statistics.values(),
            )
        ]

    alone = run(None)
    for workers in (1, 4):
        with ThreadPoolExecutor(workers) as executor:
            for expected, found in zip(alone, run(executor)):
                np.testing.assert_array_equal(found, expected)


def test_counting_noise_matches_the_spread_of_resampled_events_under_one_tiling():
    study = town(8, residents=3000, rate=0.1, pixels=4)
    tiling = random_tiling("hexagon", 2500.0, True, np.random.default_rng(1))
    generator = np.random.default_rng(2)
    rate, deviations, noise, resamples = 0.1, [], [], 1500
    _, block, _ = lattice_variance.tiling_values(study, tiling)
    total_cells = cell_numbers(block, study.total_x, study.total_y)
    used = np.bincount(total_cells, weights=study.total, minlength=block.cells) >= 50
    for _ in range(resamples):
        events = np.flatnonzero(generator.random(len(study.total)) < rate)
        again = replace(
            study,
            x=study.total_x[events],
            y=study.total_y[events],
            count=study.total[events],
        )
        table, _, _ = lattice_variance.tiling_values(again, tiling)
        deviations.append(table[used, 1])
        noise.append(table[used, 3])
    ratio = np.mean(noise, axis=0) / np.var(deviations, axis=0)
    assert used.sum() > 10
    # A ratio carries the sampling error of a variance, sqrt(2/1500) = 3.7 %, their mean about 1 %.
    assert np.mean(ratio) == pytest.approx(1, abs=0.05)
    assert np.abs(ratio - 1).max() < 4 * math.sqrt(2 / resamples) + 0.03


@pytest.mark.parametrize(
    ("sizes", "rate"), [((300.0, 700.0, 1500.0), 0.07), ((400.0,), 0.03), ((2500.0,), 0.07)]
)
def test_on_pure_noise_under_five_percent_of_the_ground_is_called_settled(sizes, rate):
    settled, plain = [], []
    for seed in range(5):
        study = town(100 + seed, residents=8000, rate=rate)
        scales = lattice_variance.run_scales(study, sizes, "hexagon", 50, seed)
        _, p_above, evidence, covered = lattice_variance.decompose_scales(scales)
        code = variance.verdict(p_above, evidence, covered)
        known = ~np.isnan(code)
        settled.append(np.mean(code[known] != 0))
        plain.append(np.mean((p_above[known] >= 0.95) | (p_above[known] <= 0.05)))
    assert max(settled) < 0.05
    # What the second condition is for: the side alone is settled by chance much more often.
    assert np.mean(plain) > 2 * np.mean(settled)


def test_a_true_raised_area_is_found_to_hold():
    study = town(20, residents=20_000, pixels=40)
    generator = np.random.default_rng(21)
    near = np.hypot(study.total_x - 5000, study.total_y - 5000) < 1800
    chosen = generator.random(len(near)) < np.where(near, 0.16, 0.06)
    raised = ground(
        (study.total_x[chosen], study.total_y[chosen], np.ones(chosen.sum())),
        (study.total_x, study.total_y, study.total),
        (study.place_x, study.place_y),
        "share",
    )
    scales = lattice_variance.run_scales(raised, (1000.0, 1500.0, 2000.0), "hexagon", 60, 5)
    _, p_above, evidence, covered = lattice_variance.decompose_scales(scales)
    code = variance.verdict(p_above, evidence, covered)
    distance = np.hypot(raised.place_x - 5000, raised.place_y - 5000)
    assert np.mean(code[distance < 1000] == 1) > 0.9
    assert np.mean(code[distance > 3500] == 1) < 0.01


def spread_halves(study, budget):
    """Halves with every point credited to the nearest place."""
    square = np.hypot(study.x[:, None] - study.place_x, study.y[:, None] - study.place_y).argmin(
        axis=1
    )
    total_square = np.hypot(
        study.total_x[:, None] - study.place_x, study.total_y[:, None] - study.place_y
    ).argmin(axis=1)
    return split(study, square, total_square, budget, np.random.default_rng(77))


def test_events_reached_agree_with_a_recount_and_the_average_is_no_worse_than_the_median():
    study = town(30, residents=3000, rate=0.1, pixels=20)
    halves = spread_halves(study, 0.2)
    assert halves.place_count.sum() == study.count.sum()
    assert halves.place_total.sum() == study.total.sum()
    tiling = random_tiling("hexagon", 1800.0, True, np.random.default_rng(1))
    _, block, statistics = lattice_variance.tiling_values(study, tiling, halves)
    event_cell = cell_numbers(block, study.x, study.y)
    total_cell = cell_numbers(block, study.total_x, study.total_y)
    reached = 0.0
    for chosen_by, counted in (
        (halves.half, study.count - halves.half),
        (study.count - halves.half, halves.half),
    ):
        zones = []
        for cell in np.unique(total_cell):
            people = study.total[total_cell == cell].sum()
            zones.append(
                (
                    chosen_by[event_cell == cell].sum() / people,
                    people,
                    counted[event_cell == cell].sum(),
                )
            )
        left = 0.2 * study.total.sum()
        # Zones of one value share what is left of the budget in proportion.
        for value in sorted({zone[0] for zone in zones}, reverse=True):
            people = sum(zone[1] for zone in zones if zone[0] == value)
            events = sum(zone[2] for zone in zones if zone[0] == value)
            reached += events * min(1.0, left / people)
            left -= min(people, left)
    assert statistics["events_reached"] == pytest.approx(reached, rel=1e-12)

    scales = lattice_variance.run_scales(study, [1000.0, 1800.0], "hexagon", 40, 2, halves=halves)
    found = lattice_variance.allocate(scales, halves)
    assert len(found.scenarios) == 80 and found.events == study.count.sum()
    assert found.scenarios.max() <= found.best <= found.events


def test_cells_below_the_least_total_have_no_value():
    study = town(40, residents=2000, pixels=15)
    events, totals = (study.x, study.y, study.count), (study.total_x, study.total_y, study.total)
    floor = ground(events, totals, (study.place_x, study.place_y), "share", least_total=30)
    tiling = random_tiling("square", 900.0, True, np.random.default_rng(1))
    table, block, statistics = lattice_variance.tiling_values(floor, tiling)
    total = np.bincount(
        cell_numbers(block, study.total_x, study.total_y),
        weights=study.total,
        minlength=block.cells,
    )
    np.testing.assert_array_equal(table[:, 0] == 1, total >= 30)
    assert statistics["zones"] == (total >= 30).sum()


def test_cells_with_too_small_a_part_inside_the_area_have_no_value():
    x, y, share = area_samples(20.0, 0.5, 0.0)
    study = ground(
        (np.array([3.0]), np.array([3.0]), np.ones(1)), (x, y, share), (x, y), "rate",
        least_inside=0.3,
    )  # fmt: skip
    tiling = Tiling("square", 8.0, (-6.0, -4.0), 0.0)
    table, block, _ = lattice_variance.tiling_values(study, tiling)
    cells = cell_numbers(block, np.array([1.0, 6.0, 19.0, 12.0]), np.array([1.0, 6.0, 19.0, 1.0]))
    # Inside lie 2 x 4, 8 x 8, 2 x 8 and 8 x 4 of each cell's 64.
    np.testing.assert_array_equal(table[cells, 0], [0, 1, 0, 1])


def test_points_on_one_spot_count_together():
    study = ground(
        ([1.0, 1.0, 2.0], [5.0, 5.0, 5.0], [1.0, 2.0, 4.0]),
        ([1.0, 2.0], [5.0, 5.0], [10.0, 10.0]),
        ([1.0], [5.0]),
        "rate",
    )
    np.testing.assert_array_equal(study.x, [1, 2])
    np.testing.assert_array_equal(study.count, [3, 4])
    assert study.threshold == pytest.approx(7 / 20)


@pytest.mark.parametrize("workers", [0, 2])
def test_cancelling_stops_the_work_and_leaves_no_task_running(workers):
    study = town(50, residents=3000, pixels=60)
    calls = []

    def cancel(share):
        calls.append(share)
        if len(calls) > 2:
            raise CancelledError("stopped")

    with ThreadPoolExecutor(max(workers, 1)) as pool:
        with pytest.raises(CancelledError):
            lattice_variance.run_scales(
                study, [300.0], "hexagon", 100_000, 1,
                executor=pool if workers else None, progress=cancel,
            )  # fmt: skip
        assert pool.submit(int, "1").result(timeout=1) == 1
    assert len(calls) == 3


def test_progress_rises_to_one():
    study, shares = town(51, residents=500, pixels=10), []
    with ThreadPoolExecutor(2) as pool:
        lattice_variance.run_scales(
            study, [900.0, 2000.0], "square", 60, 1, executor=pool, progress=shares.append
        )
    assert shares == sorted(shares) and shares[-1] == pytest.approx(1)


def test_nothing_to_count_or_to_compare_with_is_refused():
    place = ([1.0], [1.0])
    with pytest.raises(InputError, match="RECORDS"):
        ground(([1.0], [1.0], [0.0]), ([1.0], [1.0], [5.0]), place, "rate")
    with pytest.raises(InputError, match="total"):
        ground(([1.0], [1.0], [1.0]), ([1.0], [1.0], [0.0]), place, "rate")
    with pytest.raises(InputError, match="place"):
        ground(([1.0], [1.0], [1.0]), ([1.0], [1.0], [5.0]), ([], []), "rate")
    with pytest.raises(InputError, match="REPLICATES"):
        lattice_variance.run_scales(town(1, 300, 0.2), [900.0], "square", 0, 1)
