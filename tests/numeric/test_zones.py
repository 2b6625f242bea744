import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from steadfield.algorithms.numeric import allocation
from steadfield.algorithms.numeric.batches import plan_batches
from steadfield.algorithms.numeric.builders import EFFORTS, build
from steadfield.algorithms.numeric.contiguity import from_pairs
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.scenarios import (
    describe,
    neighbouring_zones,
    problem,
    zone_ranks,
    zone_sums,
)
from steadfield.algorithms.numeric.zone_results import place_official
from steadfield.algorithms.numeric.zone_statistics import morans_i
from steadfield.algorithms.numeric.zones import recipes, simulate


def board(rows, columns):
    index = np.arange(rows * columns).reshape(rows, columns)
    across = np.c_[index[:, :-1].ravel(), index[:, 1:].ravel()]
    down = np.c_[index[:-1].ravel(), index[1:].ravel()]
    return from_pairs(rows * columns, np.r_[across, down])


def a_problem(rows=6, columns=7, seed=1, **settings):
    generator = np.random.default_rng(seed)
    units = rows * columns
    totals = generator.integers(0, 200, units)
    totals[3] = 0
    counts = generator.binomial(totals, 0.1)
    return problem(board(rows, columns), counts, totals, generator=generator, **settings)


def stored_zonings(made, plan, replicates, seed):
    """Every label of a simulation, by the same batches, kept as the simulation never does."""
    batch_seed = np.random.SeedSequence(seed).spawn(2)[1]
    efforts = [EFFORTS[recipe.builder] for recipe in plan]
    batches = plan_batches(made.graph.units, [replicates] * len(plan), batch_seed, efforts)
    labels = [[] for _ in plan]
    for batch in batches:
        labels[batch.scale] += list(
            build(made.graph, made.totals, plan[batch.scale], batch.replicates, batch.generator())
        )
    return [np.array(rows) for rows in labels]


def values_on_units(made, labels):
    """Value of the zone of every unit, one zoning and zone at a time."""
    values = np.full(labels.shape, np.nan)
    for row, zoning in enumerate(labels):
        for zone in np.unique(zoning):
            inside = zoning == zone
            total = made.totals[inside].sum()
            if total > 0:
                values[row, inside] = made.counts[inside].sum() / total
    return values


@pytest.mark.parametrize("builder", ["grown", "tree-cut", "balanced"])
def test_running_sums_equal_those_of_stored_values(builder):
    made = a_problem(budget=0.3)
    plan = recipes(made, builder, [4, 9], np.random.default_rng(2), tolerance=0.6)
    run = simulate(made, plan, 150, 7)
    values = [values_on_units(made, labels) for labels in stored_zonings(made, plan, 150, 7)]
    split = run.decomposition()
    both = np.stack(values)  # scales, replicates, units
    scale = np.nanmean(both, axis=1).var(axis=0)
    zoning = np.nanvar(both, axis=1).mean(axis=0)
    whole = ~np.isnan(both).any(axis=(0, 1))
    assert whole.sum() > 35
    np.testing.assert_allclose(split.mean[whole], both.mean(axis=(0, 1))[whole], rtol=1e-12)
    np.testing.assert_allclose(split.scale[whole], scale[whole], rtol=1e-9, atol=1e-18)
    np.testing.assert_allclose(split.zoning[whole], zoning[whole], rtol=1e-9, atol=1e-18)
    np.testing.assert_allclose(
        split.total[whole], both.reshape(-1, made.graph.units).var(axis=0)[whole], rtol=1e-12
    )
    p_above, _ = run.above()
    flat = both.reshape(-1, made.graph.units)
    np.testing.assert_allclose(
        p_above[whole], (flat > made.threshold).mean(axis=0)[whole], atol=1e-12
    )
    width = np.diff(run.value_bins.edges).max()
    for share in (0.05, 0.5, 0.95):
        # the exact quantile is a step; a binned one may lie a bin to either side of it
        low = np.nanquantile(flat, share, axis=0, method="lower")
        high = np.nanquantile(flat, share, axis=0, method="higher")
        found = run.quantiles(share)
        assert (found[whole] >= low[whole] - width).all()
        assert (found[whole] <= high[whole] + width).all()


@settings(max_examples=25, deadline=None, derandomize=True)
@given(st.integers(0, 10_000), st.integers(1, 12))
def test_totals_are_preserved_and_zone_values_lie_between_those_of_their_units(seed, zones):
    made = a_problem(5, 5, seed)
    labels = build(
        made.graph,
        made.totals,
        recipes(made, "grown", [zones], np.random.default_rng(0))[0],
        6,
        np.random.default_rng(seed),
    )
    block = describe(made, labels)
    np.testing.assert_allclose(block.counts.sum(axis=1), made.counts.sum())
    np.testing.assert_allclose(block.totals.sum(axis=1), made.totals.sum())
    # overall value invariant: the total-weighted mean of the zone values
    weighted = np.nansum(block.values * block.totals, axis=1) / block.totals.sum(axis=1)
    np.testing.assert_allclose(weighted, made.overall)
    own = made.counts[made.totals > 0] / made.totals[made.totals > 0]
    assert np.nanmax(block.values) <= own.max() + 1e-12
    assert np.nanmin(block.values) >= own.min() - 1e-12


def test_nested_merging_never_raises_the_largest_zone_value():
    made = a_problem(6, 6, 5)
    plan = recipes(made, "grown", [12], np.random.default_rng(0))
    labels = build(made.graph, made.totals, plan[0], 40, np.random.default_rng(3))
    largest = np.nanmax(describe(made, labels).values, axis=1)
    for count in range(11, 0, -1):
        labels = np.minimum(labels, count - 1)  # the last zone joins another
        merged = np.nanmax(describe(made, labels).values, axis=1)
        assert (merged <= largest + 1e-12).all()
        largest = merged


def test_zone_sums_and_neighbours_match_a_count_one_by_one():
    made = a_problem(4, 5)
    labels = np.random.default_rng(4).integers(0, 4, (5, 20))
    sums = zone_sums(labels, 4, made.totals)
    zoning, first, second = neighbouring_zones(made.graph, labels, 4)
    pairs = set(zip(zoning.tolist(), first.tolist(), second.tolist()))
    expected = set()
    for row in range(5):
        for zone in range(4):
            assert sums[row, zone] == made.totals[labels[row] == zone].sum()
        for a, b in made.graph.pairs:
            one, other = sorted((labels[row, a], labels[row, b]))
            if one != other:
                expected.add((row, one, other))
    assert pairs == expected


def test_many_zones_and_few_give_the_same_neighbours(monkeypatch):
    made = a_problem(5, 5)
    labels = np.random.default_rng(4).integers(0, 6, (7, 25))
    dense = np.array(neighbouring_zones(made.graph, labels, 6))
    monkeypatch.setattr("steadfield.algorithms.numeric.scenarios.FLAGGED_ADJACENCY", 0)
    sorted_out = np.array(neighbouring_zones(made.graph, labels, 6))
    assert np.array_equal(dense, sorted_out)


def test_ranks_match_a_sort_one_by_one():
    values = np.array([[0.2, 0.5, 0.2, np.nan]])
    labels = np.array([[0, 0, 1, 2, 3, 1, 2]])
    ranks = zone_ranks(values, labels)[0]
    # six units have a value: two at 0.5 share ranks 1 to 2, four at 0.2 share 3 to 6
    np.testing.assert_allclose(ranks[:3], [4 / 6, 1 / 6, 4 / 6])
    assert np.isnan(ranks[3])


def test_statistics_row_equals_the_functions_on_one_zoning():
    made = a_problem(budget=0.25)
    labels = build(
        made.graph,
        made.totals,
        recipes(made, "grown", [7], np.random.default_rng(0))[0],
        9,
        np.random.default_rng(8),
    )
    rows = describe(made, labels).statistics
    names = made.statistic_names()
    for row, zoning in zip(rows, labels):
        values = values_on_units(made, zoning[None])[0]
        assert row[names.index("largest")] == pytest.approx(np.nanmax(values))
        assert row[names.index("smallest")] == pytest.approx(np.nanmin(values))
        by_zone = np.array([values[zoning == z][0] for z in range(7)])
        _, first, second = neighbouring_zones(made.graph, zoning[None], 7)
        assert row[names.index("morans_i")] == pytest.approx(morans_i(by_zone, first, second))
        sums = [
            np.bincount(zoning, column, minlength=7)
            for column in (made.half, made.counts, made.totals)
        ]
        assert row[names.index("events_reached")] == pytest.approx(
            allocation.held_out_events(*sums, 0.25)
        )


@pytest.mark.parametrize("statistic", ["largest", "morans_i"])
def test_extremes_are_the_zonings_with_the_extreme_values(statistic):
    made = a_problem()
    plan = recipes(made, "grown", [4, 8], np.random.default_rng(2))
    run = simulate(made, plan, 200, 5, statistic=statistic)
    column = made.statistic_names().index(statistic)
    every = np.concatenate([scale.statistics[:, column] for scale in run.scales])
    for extreme, value in ((run.largest, np.nanmax(every)), (run.smallest, np.nanmin(every))):
        assert extreme.value == value
        row = describe(made, extreme.labels[None]).statistics[0]
        assert row[column] == pytest.approx(value)
        assert extreme.labels.max() + 1 == extreme.zone_count


def test_an_official_zoning_is_placed_among_those_with_as_many_zones():
    made = a_problem(budget=0.2)
    generator = np.random.default_rng(2)
    plan = recipes(made, "grown", [4], generator)
    reference = recipes(made, "grown", [6], generator)[0]
    official = np.arange(42) // 7
    run = simulate(made, plan, 300, 5, official=official, reference=reference)
    assert run.reference.recipe.zone_count == run.official.zone_count == 6
    row = describe(made, official[None]).statistics[0]
    np.testing.assert_allclose(run.official.statistics, row)
    for column, place in enumerate(run.official.places):
        simulated = run.reference.statistics[:, column]
        expected = np.mean(simulated < row[column]) + np.mean(simulated == row[column]) / 2
        assert place == pytest.approx(expected)
    # the reference counts for nothing else
    without = simulate(made, plan, 300, 5)
    assert np.array_equal(run.value_bins.counts, without.value_bins.counts)
    assert run.largest.value == without.largest.value


def test_a_simulated_zoning_taken_for_official_falls_anywhere():
    # places of zonings drawn from the same law are uniform: mean 1/2, variance 1/12
    made = a_problem()
    plan = recipes(made, "grown", [6], np.random.default_rng(2))
    run = simulate(made, plan, 400, 5)
    more = build(made.graph, made.totals, plan[0], 300, np.random.default_rng(99))
    column = made.statistic_names().index("variation")
    places = [place_official(made, labels, run.scales).places[column] for labels in more]
    assert abs(np.mean(places) - 0.5) < 4 * np.sqrt(1 / 12 / 300 + 1 / 12 / 400)


def test_allocation_figures_match_a_recount_by_brute_force():
    made = a_problem(budget=0.2)
    plan = recipes(made, "grown", [6], np.random.default_rng(2))
    official = np.arange(42) // 7
    run = simulate(made, plan, 60, 5, official=official)
    labels = stored_zonings(made, plan, 60, 5)[0]

    def recount(values, weights):
        """Events among the places of highest value that a fifth of the people covers."""
        left, reached = 0.2 * made.totals.sum(), 0.0
        for value in sorted(set(values[~np.isnan(values)]), reverse=True):
            group = values == value
            people = made.totals[group].sum()
            share = min(1.0, left / people) if people else 1.0
            reached += share * weights[group].sum()
            left -= share * people
            if left <= 0:
                break
        return reached

    def zone_rates(zoning, events):
        rates = np.full(42, np.nan)
        for zone in set(zoning.tolist()):
            inside = zoning == zone
            if made.totals[inside].sum() > 0:
                rates[inside] = events[inside].sum() / made.totals[inside].sum()
        return rates

    half, other = made.half, made.counts - made.half
    rates = [(zone_rates(zoning, half), zone_rates(zoning, other)) for zoning in labels]
    reached = [recount(a, other) + recount(b, half) for a, b in rates]
    np.testing.assert_allclose(run.allocation.scenarios, reached)
    with np.errstate(all="ignore"):
        means = [np.nanmean([pair[side] for pair in rates], axis=0) for side in (0, 1)]
    averaged = recount(np.round(means[0], 12), other) + recount(np.round(means[1], 12), half)
    assert run.allocation.averaged == pytest.approx(averaged)
    by_official = recount(zone_rates(official, half), other)
    by_official += recount(zone_rates(official, other), half)
    assert run.allocation.official == pytest.approx(by_official)


def town(generator, side=12):
    """A town with a smooth risk surface: hot spots of random place, height and width."""
    y, x = np.divmod(np.arange(side * side), side)
    risk = np.full(side * side, 0.03)
    for _ in range(3):
        centre = generator.uniform(0, side, 2)
        width = generator.uniform(1.0, 2.5)
        bump = np.exp(-((x - centre[0]) ** 2 + (y - centre[1]) ** 2) / (2 * width**2))
        risk += generator.uniform(0.05, 0.15) * bump
    totals = generator.integers(40, 120, side * side)
    return totals, generator.binomial(totals, risk)


def test_the_average_over_zonings_reaches_more_than_the_median_single_zoning():
    # the finding of Tuson et al. (2020), Int. J. Health Geogr. 19:42, on simulated towns
    generator = np.random.default_rng(20)
    gains = []
    for seed in range(12):
        totals, counts = town(generator)
        made = problem(board(12, 12), counts, totals, budget=0.15, generator=generator)
        plan = recipes(made, "grown", [16, 30], generator)
        found = simulate(made, plan, 150, seed).allocation
        gains.append(found.averaged - found.median)
        assert found.averaged <= found.best
    assert np.mean(gains) > 0
    assert np.mean(np.array(gains) >= 0) >= 0.9


def test_pure_noise_is_not_called_holding():
    # constant true rate: places called "holds" must stay under 5 % on average
    generator = np.random.default_rng(30)
    called = []
    for seed in range(30):
        totals = generator.integers(50, 300, 100)
        counts = generator.binomial(totals, 0.08)
        made = problem(board(10, 10), counts, totals)
        plan = recipes(made, "grown", [8, 20], generator)
        verdicts = simulate(made, plan, 120, seed).verdicts()
        called.append(np.mean(verdicts != 0))
    assert np.mean(called) < 0.05


def test_a_true_concentration_holds_and_a_small_number_one_does_not():
    totals = np.full(144, 200.0)
    totals[143] = 4
    y, x = np.divmod(np.arange(144), 12)
    hot = (np.abs(x - 5) <= 1) & (np.abs(y - 5) <= 1)
    counts = np.round(totals * np.where(hot, 0.3, 0.05))
    counts[143] = 3  # three of four
    made = problem(board(12, 12), counts, totals)
    plan = recipes(made, "grown", [20, 40], np.random.default_rng(0))
    verdicts = simulate(made, plan, 300, 4).verdicts()
    assert verdicts[5 * 12 + 5] == 1
    assert verdicts[143] != 1


def test_constant_values_have_no_variance_and_no_extremes_apart():
    made = problem(board(4, 4), np.full(16, 5), np.full(16, 50))
    plan = recipes(made, "grown", [3, 5], np.random.default_rng(0))
    run = simulate(made, plan, 50, 1)
    split = run.decomposition()
    assert split.total.max() < 1e-30
    assert (run.verdicts() == 0).all()
    np.testing.assert_allclose(run.quantiles(0.5), 0.1, rtol=0.5)


def test_a_least_total_is_kept_in_every_simulated_zoning():
    made = a_problem()
    plan = recipes(made, "tree-cut", [6, 12], np.random.default_rng(1), least_total=500)
    for recipe in plan:
        assert recipe.least_total >= 500
        labels = build(made.graph, made.totals, recipe, 50, np.random.default_rng(3))
        for zoning in labels:
            assert np.bincount(zoning, made.totals).min() >= 500


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"totals": np.zeros(6)}, "TOTAL: it is 0 in every unit"),
        ({"counts": np.zeros(6)}, "COUNT: it is 0 in every unit"),
        ({"counts": [1, 2, np.nan, 1, 1, 1]}, "COUNT: 1 units have a missing"),
        ({"totals": [1, 2, -3, 1, 1, 1]}, "number 3: -3"),
        ({"counts": [1, 2]}, "6 values are needed"),
        ({"budget": 1.5}, "BUDGET"),
    ],
)
def test_counts_that_cannot_be_worked_with_are_refused_in_words(change, words):
    given = {"counts": np.ones(6), "totals": np.full(6, 9.0), **change}
    with pytest.raises(InputError, match=words):
        problem(board(2, 3), generator=np.random.default_rng(0), **given)


def test_counts_above_totals_make_a_rate():
    assert problem(board(2, 3), np.full(6, 4), np.full(6, 3)).kind == "rate"
    assert problem(board(2, 3), np.full(6, 2), np.full(6, 3)).kind == "share"


@pytest.mark.parametrize(
    ("builder", "counts", "settings", "words"),
    [
        ("grown", [7], {}, "7 zones cannot be made of 6 units"),
        ("grown", [], {}, "no number of zones"),
        ("grown", [2], {"least_total": 5}, "kept by tree-cut zones only"),
        ("tree-cut", [2], {"least_total": 999}, "more than there is"),
        ("grown", [0], {}, "1 or more"),
    ],
)
def test_zones_that_cannot_be_made_are_refused_before_the_work(builder, counts, settings, words):
    made = problem(board(2, 3), np.ones(6), np.full(6, 9.0))
    with pytest.raises(InputError, match=words):
        recipes(made, builder, counts, np.random.default_rng(0), **settings)


def test_settings_of_a_simulation_are_checked():
    made = problem(board(2, 3), np.ones(6), np.full(6, 9.0))
    plan = recipes(made, "grown", [2], np.random.default_rng(0))
    with pytest.raises(InputError, match="REPLICATES"):
        simulate(made, plan, 1, 0)
    with pytest.raises(InputError, match="statistic"):
        simulate(made, plan, 5, 0, statistic="brightest")
