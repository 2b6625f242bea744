import numpy as np
import pytest
from steadfield.algorithms.numeric import allocation
from steadfield.algorithms.numeric.errors import InputError


def brute_force_reached(values, totals, events, budget):
    """People one by one: each place is a row of small equal portions of its people."""
    left = budget * sum(totals)
    reached = 0.0
    for value in sorted(set(values), reverse=True):
        group = [i for i, other in enumerate(values) if other == value]
        people = sum(totals[i] for i in group)
        share = 1.0 if people <= left else left / people
        reached += share * sum(events[i] for i in group)
        left -= share * people
        if left <= 0:
            break
    return reached


@pytest.mark.parametrize("budget", [0.07, 0.25, 0.5, 0.93])
def test_events_reached_match_a_recount_place_by_place(budget):
    generator = np.random.default_rng(41)
    for _ in range(50):
        totals = generator.integers(1, 60, 12)
        events = generator.integers(0, 9, 12)
        values = generator.integers(0, 6, 12) / 7  # with ties
        fast = allocation.events_reached(values, totals, events, budget)
        assert fast == pytest.approx(brute_force_reached(values, totals, events, budget))


def test_many_scenarios_at_once_equal_one_by_one():
    generator = np.random.default_rng(5)
    counts = generator.poisson(4, (9, 30))
    half = generator.binomial(counts, 0.5)
    totals = generator.integers(20, 90, (9, 30))
    together = allocation.held_out_events(half, counts, totals, 0.3)
    alone = [
        allocation.held_out_events(half[:, i], counts[:, i], totals[:, i], 0.3) for i in range(30)
    ]
    np.testing.assert_allclose(together, alone, rtol=1e-12)


def test_order_of_places_does_not_matter_even_with_ties():
    generator = np.random.default_rng(6)
    values = np.array([2.0, 1, 1, 1, 0, np.nan])
    totals = np.array([10.0, 20, 5, 30, 10, 0])
    events = np.array([3.0, 9, 1, 0, 2, 0])
    expected = allocation.events_reached(values, totals, events, 0.5)
    for _ in range(20):
        mixed = generator.permutation(6)
        got = allocation.events_reached(values[mixed], totals[mixed], events[mixed], 0.5)
        assert got == pytest.approx(expected, rel=1e-12)


def test_a_flat_map_reaches_the_share_of_the_budget():
    # closed form: nothing to choose by, so the expectation is budget x events
    totals = np.array([5.0, 10, 15])
    events = np.array([4.0, 0, 2])
    assert allocation.events_reached(np.ones(3), totals, events, 0.4) == pytest.approx(2.4)


def test_best_possible_is_reached_by_no_other_choice_of_places():
    generator = np.random.default_rng(8)
    counts = generator.poisson(3, 20)
    totals = generator.integers(10, 50, 20)
    best = allocation.best_possible(counts, totals, 0.35)
    for _ in range(200):
        assert allocation.events_reached(generator.random(20), totals, counts, 0.35) <= best + 1e-9


def test_halves_are_disjoint_and_complete_and_fair():
    counts = np.full(4000, 7)
    half = allocation.random_half(counts, np.random.default_rng(9))
    assert half.min() >= 0 and (half <= counts).all() and (half == np.floor(half)).all()
    # binomial(28000, 1/2): standard deviation 83.7
    assert abs(half.sum() - 14000) < 4 * 83.7


def test_weighted_events_keep_their_weight_undivided():
    half = allocation.random_half(np.full(2000, 0.4), np.random.default_rng(10))
    assert set(np.unique(half)) == {0.0, 0.4}


def test_held_out_choice_on_pure_noise_gains_nothing():
    # halves of a Poisson count are independent (thinning), so without true differences a
    # held-out choice is a random choice and reaches budget x events
    generator = np.random.default_rng(11)
    totals = np.full(50, 100.0)
    counts = generator.poisson(5, (50, 4000))
    half = generator.binomial(counts, 0.5)
    reached = allocation.held_out_events(half, counts, np.repeat(totals[:, None], 4000, 1), 0.2)
    share = reached / counts.sum(0)
    assert abs(share.mean() - 0.2) < 4 * share.std() / np.sqrt(4000)


def test_luck_alone_spreads_zonings_of_equally_good_places_as_stated():
    # 400 zones of 25 people each and one risk everywhere: whatever 40 zones are chosen, they are
    # as good as any others, and nine tenths of such choices spread by luck alone.
    rng = np.random.default_rng(41)
    people = np.full(400, 25.0)
    counts = rng.poisson(0.1 * people).astype(float)
    reached = [allocation.events_reached(rng.random(400), people, counts, 0.1) for _ in range(4000)]
    found = allocation.Allocation(0.1, counts.sum(), np.array(reached), 0.0, None, 0.0)
    low, _, high = found.quantiles()
    assert found.by_luck == pytest.approx(high - low, rel=0.1)


def test_summary_places_the_official_zoning_among_the_scenarios():
    made = allocation.Allocation(0.2, 100.0, np.array([20.0, 30, 30, 40]), 41.0, 30.0, 60.0)
    assert made.official_place() == 0.5
    assert made.by_chance == pytest.approx(20)
    assert made.median == 30


@pytest.mark.parametrize("budget", [0, 1, -0.1, 12])
def test_a_budget_that_is_no_share_is_refused_with_its_value(budget):
    with pytest.raises(InputError, match="BUDGET"):
        allocation.check_budget(budget)


def test_events_that_cannot_be_split_are_refused():
    with pytest.raises(InputError, match="not negative"):
        allocation.random_half(np.array([1.0, -2]), np.random.default_rng(0))
