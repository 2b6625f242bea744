"""Whole releases by every method, and what the attacker makes of what is published."""

import itertools
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from steadfield.algorithms.numeric.disclosure import Rules
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.release import release
from steadfield.algorithms.numeric.release_plan import METHODS, Plan, Records

sys.path.insert(0, str(Path(__file__).parent.parent))
import attacker

LEAST = 5


def practice(seed, share=False):
    """Records in a strip of hexagons and two or three regions, some cells cut by a border."""
    rng = np.random.default_rng(seed)
    count, region_count = int(rng.integers(5, 14)), int(rng.integers(2, 4))
    few = rng.random(count) < 0.5
    counts = np.where(few, rng.integers(0, 6, count), rng.integers(4, 40, count))
    counts[0] += 25
    cells = np.repeat(np.arange(count), counts)
    home = rng.integers(0, region_count, count)
    stray = (rng.random(len(cells)) < 0.2) & (rng.random(count) < 0.3)[cells]
    regions = np.where(stray, (home[cells] + 1) % region_count, home[cells])
    numerator = (rng.random(len(cells)) < 0.4).astype(float) if share else None
    return Records(cells, regions=regions, numerator=numerator), count, region_count


def run(records, count, region_count, **settings):
    settings = {"rules": Rules(LEAST), "base": LEAST, "seed": 1, **settings}
    q, r = np.arange(count), np.zeros(count, int)
    return release(records, q, r, region_count, Plan(**settings))


def true_counts(records, count):
    return np.bincount(records.cells, minlength=count)


@pytest.mark.parametrize("method", ["withhold", "merge"])
@pytest.mark.parametrize("seed", range(8))
def test_every_published_zone_meets_the_rule_when_the_records_are_counted_again(method, seed):
    records, count, regions = practice(seed)
    made = run(records, count, regions, method=method)
    zones = made.zones[records.cells]
    for zone, value in enumerate(made.count()):
        true = (zones == zone).sum()
        if np.isfinite(value):
            assert value == true >= LEAST


@pytest.mark.parametrize("totals", [False, True])
@pytest.mark.parametrize("method", ["withhold", "merge", "round"])
def test_the_custodian_is_told_who_stands_behind_every_zone(method, totals):
    records, count, regions = practice(3)
    rng = np.random.default_rng(5)
    households, weights = (
        rng.integers(0, 40, len(records.cells)),
        rng.exponential(1, len(records.cells)),
    )
    records = replace(records, contributors=households, weights=weights)
    made = run(records, count, regions, method=method, region_totals=totals, grand_total=totals)
    zones = made.zones[records.cells]
    for zone in range(len(made.count())):
        mine = zones == zone
        by_household = np.sort(np.bincount(households[mine], weights[mine]))[::-1]
        assert made.behind.whole.records[zone] == mine.sum()
        assert made.behind.whole.contributors[zone] == len(set(households[mine]))
        assert made.behind.whole.total[zone] == pytest.approx(weights[mine].sum())
        largest = by_household[0] if mine.any() else 0.0
        assert made.behind.whole.largest[zone] == pytest.approx(largest)
        assert made.unsafe[zone] == (0 < len(set(households[mine])) < LEAST)


@pytest.mark.parametrize("seed", range(6))
def test_published_shares_meet_the_rules_in_both_answers(seed):
    records, count, regions = practice(seed, share=True)
    for method in ("withhold", "merge"):
        made = run(records, count, regions, method=method)
        zones = made.zones[records.cells]
        for zone in np.flatnonzero(np.isfinite(made.count())):
            yes = records.numerator[zones == zone].sum()
            no = (zones == zone).sum() - yes
            assert made.values[:, zone].tolist() == [yes, no]
            assert (yes == 0 or yes >= LEAST) and no >= LEAST
            assert made.share()[zone] == pytest.approx(yes / (yes + no))


def test_empty_cells_look_like_withheld_ones_unless_they_are_to_be_shown():
    records = Records(np.repeat([0, 1], [3, 20]))
    hidden = run(records, 3, 0)
    assert np.isnan(hidden.count()).tolist() == [True, False, True]
    shown = run(records, 3, 0, show_empty=True)
    assert np.isnan(shown.count()).tolist() == [True, False, False]
    assert shown.count()[2] == 0


def test_merging_hides_which_cells_are_empty_unless_they_are_to_be_shown():
    records = Records(np.repeat([0, 1], [3, 20]))
    zones = run(records, 4, 0, method="merge").zones
    assert zones[2] == zones[1] or zones[2] == zones[3]
    shown = run(records, 4, 0, method="merge", show_empty=True)
    assert np.isfinite(shown.count()).all()


def test_a_withheld_zone_does_not_show_by_its_shape_that_it_had_been_merged():
    seen = 0
    for seed in range(40):
        records, count, regions = practice(seed)
        made = run(
            records, count, regions, method="merge", region_totals=True, grand_total=True,
            seed=seed,
        )  # fmt: skip
        sizes = np.bincount(made.zones)
        assert (sizes[made.withheld] == 1).all()
        assert len(sizes) == len(made.unsafe) == len(made.count())
        seen += made.complementary.any()
    assert seen > 5


def test_what_is_withheld_tells_no_count_to_one_who_knows_the_method():
    """Enumeration: all counts of three cells with a total below 7, and what they can lead to."""
    behind = {}
    for counts in itertools.product(range(5), repeat=3):
        if not 3 < sum(counts) < 7:
            continue
        records = Records(np.repeat(np.arange(3), counts))
        for seed in range(4):
            made = run(records, 3, 0, rules=Rules(3), grand_total=True, show_empty=True, seed=seed)
            if np.isfinite(made.grand_values[0]):
                figures = *np.nan_to_num(made.count(), nan=-1.0), made.grand_values[0]
                behind.setdefault(figures, []).append(counts)
    checked = 0
    for figures, tables in behind.items():
        for cell in np.flatnonzero(np.array(figures[:3]) < 0):
            small = {counts[cell] for counts in tables} & {1, 2}
            assert small in (set(), {1, 2}), (figures, tables)
            checked += bool(small)
    assert checked > 0


def test_empty_cells_of_a_zone_that_failed_are_not_shown_as_such():
    """Two cells that hold 1 each: were the third shown as 0, less than 3 would tell both."""
    q, r = np.array([0, 1, 0]), np.array([0, 0, 1])
    for seed in range(5):
        plan = Plan(method="merge", rules=Rules(3), show_empty=True, seed=seed)
        made = release(Records(np.array([1, 2])), q, r, 0, plan)
        assert made.withheld.all() and len(made.withheld) == 3
    far = release(Records(np.array([1, 2])), np.append(q, 40), np.append(r, 0), 0, plan)
    assert far.count()[3] == 0


def rounded_case(made, count, records, base, region_totals, grand_total):
    """What an outsider knows of a rounded release: every figure lies within the base."""
    pieces = np.unique(np.column_stack([records.cells, records.regions]), axis=0)
    far = 1e4
    sums = []
    for cell, value in enumerate(made.count()):
        if np.isfinite(value):
            own = np.flatnonzero(pieces[:, 0] == cell)
            sums.append((own, max(value - base + 1, 0), value + base - 1))
    for region, value in enumerate(made.region_values.sum(0)):
        if region_totals and np.isfinite(value):
            own = np.flatnonzero(pieces[:, 1] == region)
            sums.append((own, max(value - base + 1, 0), value + base - 1))
    total = made.grand_values.sum()
    if grand_total and np.isfinite(total):
        sums.append((np.arange(len(pieces)), max(total - base + 1, 0), total + base - 1))
    return attacker.Case(np.zeros(len(pieces)), np.full(len(pieces), far), sums), pieces


def few_pieces(records, pieces):
    """Pieces, cut off a hexagon by a border, that hold few records."""
    own = (records.cells[:, None] == pieces[:, 0]) & (records.regions[:, None] == pieces[:, 1])
    cut = np.bincount(pieces[:, 0])[pieces[:, 0]] > 1
    return np.flatnonzero(cut & (own.sum(0) < LEAST))


@pytest.mark.parametrize("method", ["round", "controlled"])
def test_no_unsafe_cell_is_placed_within_its_range_by_rounded_figures(method):
    cases, cells_of, shown = [], [], []
    for seed in range(150):
        records, count, regions = practice(seed)
        made = run(
            records, count, regions, method=method, region_totals=True, grand_total=True, seed=seed
        )
        case, pieces = rounded_case(made, count, records, LEAST, True, True)
        true = true_counts(records, count)
        cases.append(case)
        cells_of.append(
            [np.flatnonzero(pieces[:, 0] == c) for c in np.flatnonzero((true > 0) & (true < LEAST))]
            + [np.array([place]) for place in few_pieces(records, pieces)]
        )
        shown.append(np.isfinite(made.region_values).sum())
    checked = 0
    for turn in range(max(len(own) for own in cells_of)):
        which = [k for k, own in enumerate(cells_of) if turn < len(own)]
        bounds = attacker.intervals([cases[k] for k in which], [cells_of[k][turn] for k in which])
        assert (bounds[:, 0] <= 1 + 1e-6).all()
        assert (bounds[:, 1] >= LEAST - 1 - 1e-6).all()
        checked += len(which)
    assert checked > 300
    # most region totals survive
    assert sum(shown) > 0.7 * sum(practice(seed)[2] for seed in range(150))


def test_totals_rounded_on_their_own_would_tell_if_they_were_all_published(monkeypatch):
    from steadfield.algorithms.numeric import release as module

    won = {}
    for careful in (True, False):
        if not careful:
            monkeypatch.setattr(
                module, "_totals_to_leave_out", lambda t, r, published, *_: published & False
            )
        cases = []
        for seed in range(40):
            records = Records(np.repeat(np.arange(2), [4, 4]), regions=np.zeros(8, int))
            made = run(records, 2, 1, method="round", grand_total=True, seed=seed)
            cases.append(rounded_case(made, 2, records, LEAST, False, True)[0])
        bounds = attacker.intervals(cases, [[0]] * len(cases))
        won[careful] = int(((bounds[:, 0] > 1) | (bounds[:, 1] < LEAST - 1)).sum())
    assert won[True] == 0
    assert won[False] > 0


def test_a_total_that_is_left_out_does_not_tell_why():
    """Enumeration: all pairs of counts below the least, and what releases they can lead to."""
    behind = set()
    for first in (1, 2):
        for second in (1, 2):
            records = Records(np.repeat([0, 1], [first, second]))
            for seed in range(120):
                made = run(
                    records, 2, 0, rules=Rules(3), base=3, method="round", grand_total=True,
                    seed=seed,
                )  # fmt: skip
                if np.isnan(made.grand_values[0]) and (made.count() == 0).all():
                    behind.add((first, second))
    # 2 and 2 alone can round to a total that tells; left out, it must not tell the same
    assert {first for first, _ in behind} == {second for _, second in behind} == {1, 2}
    assert (1, 1) in behind


def test_a_total_of_many_cells_stays_when_a_small_region_tells():
    cells = np.repeat(np.arange(20), [2, 2] + [30] * 18)
    records = Records(cells, regions=(cells > 1).astype(int))
    left_out = 0
    for seed in range(60):
        made = run(
            records, 20, 2, rules=Rules(3), base=3, method="round", region_totals=True,
            grand_total=True, seed=seed,
        )  # fmt: skip
        left_out += np.isnan(made.region_values[0, 0])
        assert np.isfinite(made.grand_values[0]) and np.isfinite(made.region_values[0, 1])
    assert left_out > 0


def test_the_rounded_total_of_an_empty_region_is_0_like_that_of_an_empty_cell():
    records = Records(np.repeat([0, 1], 40), regions=np.zeros(80, int))
    made = run(records, 3, 2, method="round", region_totals=True, seed=3)
    assert made.region_values[0, 1] == made.count()[2] == 0


def test_controlled_figures_add_up_and_move_less_than_the_base():
    for seed in range(20):
        records, count, regions = practice(seed, share=bool(seed % 2))
        made = run(
            records, count, regions, method="controlled", region_totals=True, grand_total=True,
            seed=seed,
        )  # fmt: skip
        parts = [records.numerator, None if records.numerator is None else 1 - records.numerator]
        for number, values in enumerate(made.values):
            weight = parts[number]
            true = np.bincount(records.cells, weight, count)
            assert np.abs(values - true).max() < LEAST
            assert np.nansum(made.region_values[number]) == values.sum()
            assert made.grand_values[number] == values.sum()


def test_a_cell_of_few_people_with_many_records_is_not_left_to_rounding():
    people = np.r_[np.zeros(12, int), np.arange(1, 21)]
    records = Records(np.repeat([0, 1], [12, 20]), contributors=people)
    made = run(records, 2, 0, method="round", base=10)
    assert np.isnan(made.count()).tolist() == [True, False]


def test_rounded_shares_cannot_tell_that_everybody_gave_the_same_answer():
    records = Records(np.zeros(40, int), numerator=np.r_[np.ones(38), np.zeros(2)])
    shares = {run(records, 1, 0, method="round", seed=seed).share()[0] for seed in range(40)}
    everyone = Records(np.zeros(40, int), numerator=np.ones(40))
    assert run(everyone, 1, 0, method="round").share()[0] in shares


def test_noise_covers_every_cell_and_follows_its_distribution_around_the_counts():
    cells = np.repeat(np.arange(3), [0, 4, 50])
    draws = []
    for seed in range(400):
        made = run(Records(cells), 3, 0, method="noise", epsilon=1.0, seed=seed)
        draws.append(made.count())
    draws = np.array(draws)
    a = np.exp(-1.0)
    error = np.sqrt(2 * a / (1 - a) ** 2 / len(draws))
    assert np.abs(draws.mean(0) - [0, 4, 50]).max() < 4 * error
    assert (draws[:, 0] < 0).any()


def test_noise_bounds_what_one_person_adds():
    people = np.r_[np.zeros(500, int), np.arange(1, 41)]
    records = Records(np.r_[np.zeros(500, int), np.ones(40, int)], contributors=people)
    made = run(records, 2, 0, method="noise", epsilon=5.0, contribution_limit=2)
    assert made.left_out == 498
    assert abs(made.count()[0] - 2) < 12


def test_a_share_with_noise_is_made_of_noisy_figures():
    records = Records(np.zeros(100, int), numerator=np.r_[np.ones(30), np.zeros(70)])
    made = run(records, 1, 0, method="noise", epsilon=0.5, clip=True)
    yes, no = made.values[:, 0]
    assert made.share()[0] == yes / (yes + no)


@pytest.mark.parametrize("method", METHODS)
def test_a_seed_repeats_a_release_to_the_bit(method):
    records, count, regions = practice(3)
    totals = method != "noise"
    one, two = (
        run(records, count, regions, method=method, region_totals=totals, grand_total=True, seed=8)
        for _ in range(2)
    )
    assert np.array_equal(one.values, two.values, equal_nan=True)
    assert np.array_equal(one.region_values, two.region_values, equal_nan=True)
    assert (one.zones == two.zones).all()


@pytest.mark.parametrize(
    ("words", "settings"),
    [
        ("METHOD", {"method": "shred"}),
        ("ROUNDING_BASE", {"method": "round", "base": 3}),
        ("budget", {"method": "noise", "region_totals": True}),
        ("public already", {"method": "noise", "totals_stand": True}),
        ("step", {"method": "merge", "reach": 0}),
        ("REGIONS", {"region_totals": True}),
    ],
)
def test_plans_that_promise_what_they_cannot_keep_are_refused(words, settings):
    records, count, _ = practice(0)
    bare = Records(records.cells)
    with pytest.raises(InputError, match=words):
        run(bare, count, 0, **settings)


def test_noise_refuses_weights():
    with pytest.raises(InputError, match="WEIGHT"):
        run(Records(np.zeros(3, int), weights=np.ones(3)), 1, 0, method="noise")


def test_records_outside_the_area_only_are_refused():
    with pytest.raises(InputError, match="No record lies inside"):
        run(Records(np.full(5, -1)), 2, 0)
