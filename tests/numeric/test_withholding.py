"""Complementary withholding: nobody can work out a withheld cell, at little cost."""

import itertools
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import sparse
from steadfield.algorithms.numeric.disclosure import Rules
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.outsider import Sums, Targets, outsider_interval
from steadfield.algorithms.numeric.publication import table_of
from steadfield.algorithms.numeric.withholding import (
    Proofs,
    any_unprotected,
    complementary_withholding,
    unprotected,
)

sys.path.insert(0, str(Path(__file__).parent.parent))
import attacker


def practice_records(rng, most_cells=11):
    """Cells with few and with many records, some of them cut by a region's border."""
    cell_count, region_count = int(rng.integers(4, most_cells)), int(rng.integers(1, 4))
    few = rng.random(cell_count) < 0.45
    counts = np.where(few, rng.integers(1, 10, cell_count), rng.integers(5, 40, cell_count))
    cells = np.repeat(np.arange(cell_count), counts)
    home = rng.integers(0, region_count, cell_count)
    cut = rng.random(cell_count) < 0.25
    stray = (rng.random(len(cells)) < 0.15) & cut[cells]
    return cells, cell_count, np.where(stray, (home[cells] + 1) % region_count, home[cells])


def withhold(table, rng, fixed=None):
    fixed = np.zeros(len(table.unsafe), bool) if fixed is None else fixed
    return complementary_withholding(
        table.sums, table.targets, table.unsafe, table.records.astype(float), fixed, rng
    )


def seen_by_the_attacker(table, published, part=None, knows=()):
    """The attacker's case: pieces of cells, and the exact sums that are published.

    He is told which pieces hold records, and the pieces in `knows`.
    """
    values = table.sums.values.sum(0) if part is None else table.sums.values[part]
    floor = np.ones(len(values)) if part is None else np.zeros(len(values))
    ceiling = np.full(len(values), values.sum())
    floor[list(knows)] = ceiling[list(knows)] = values[list(knows)]
    members = table.sums.members[np.flatnonzero(published)]
    totals = members @ values
    sums = [
        (members.indices[members.indptr[row] : members.indptr[row + 1]], total, total)
        for row, total in enumerate(totals)
    ]
    return attacker.Case(floor, ceiling, sums)


def pieces_of(table, row):
    return table.sums.members[row].indices


def attack_all(tables, published, insider=False):
    """Bounds of every withheld cell and of every unsafe piece, case by case."""
    aims = []
    for table, shown in zip(tables, published):
        cells = [pieces_of(table, row) for row in np.flatnonzero(~shown[: len(table.cells)])]
        few = table.sums.values.sum(0) < 1e9
        cut = np.diff(table.sums.members[: len(table.cells)].tocsc().indptr) > 0
        pieces = [np.array([a]) for a in np.flatnonzero(few & cut)]
        aims.append((cells, pieces))
    most = max(len(cells) for cells, _ in aims)
    results = [[] for _ in tables]
    for turn in range(most):
        which = [k for k, (cells, _) in enumerate(aims) if turn < len(cells)]
        cases = []
        for k in which:
            lone = np.flatnonzero(tables[k].sums.lone) if insider else []
            knows = np.setdiff1d(lone, aims[k][0][turn])
            cases.append(seen_by_the_attacker(tables[k], published[k], knows=knows.astype(int)))
        bounds = attacker.intervals(cases, [aims[k][0][turn] for k in which])
        for k, bound in zip(which, bounds):
            results[k].append((aims[k][0][turn], bound))
    return results


@pytest.fixture(scope="module")
def practice_cases():
    tables, withheld = [], []
    for seed in range(110):
        rng = np.random.default_rng(seed)
        cells, count, regions = practice_records(rng)
        region_totals = bool(rng.random() < 0.8)
        table = table_of(
            cells, count, Rules(int(rng.choice([3, 5, 10]))), regions=regions,
            region_totals=region_totals, grand_total=not region_totals or rng.random() < 0.5,
        )  # fmt: skip
        tables.append(table)
        withheld.append(withhold(table, rng).published)
    return tables, withheld


def narrow(table, pieces, bound, least):
    """Whether the attacker excludes something between one record and the least count."""
    floor = max(1.0, float(len(pieces)))
    return bound[0] > floor + 1e-6 or bound[1] < least - 1e-6


def least_of(table):
    return table.targets.upper[0] / (
        table.sums.values.sum(0)[pieces_of(table, 0)].sum() / table.records[0]
    )


@pytest.mark.parametrize("insider", [False, True])
def test_no_withheld_cell_can_be_placed_inside_its_protection_range(practice_cases, insider):
    tables, published = practice_cases
    found = attack_all(tables, published, insider)
    checked = 0
    for table, bounds in zip(tables, found):
        for pieces, bound in bounds:
            checked += 1
            assert not narrow(table, pieces, bound, least_of(table))
    assert checked > 300


def test_without_complementary_withholding_the_attacker_wins(practice_cases):
    tables, _ = practice_cases
    found = attack_all(tables, [~table.unsafe for table in tables])
    won = sum(
        any(narrow(table, pieces, bound, least_of(table)) for pieces, bound in bounds)
        for table, bounds in zip(tables, found)
    )
    assert won > 30


def test_without_the_grant_to_insiders_an_insider_wins(practice_cases):
    tables, _ = practice_cases
    won = 0
    for seed, table in enumerate(tables[:30]):
        sums = Sums(
            table.sums.members, table.sums.values, table.sums.least, np.zeros_like(table.sums.lone)
        )
        careless = complementary_withholding(
            sums, table.targets, table.unsafe, table.records.astype(float),
            np.zeros(len(table.unsafe), bool), np.random.default_rng(seed),
        )  # fmt: skip
        bounds = attack_all([table], [careless.published], insider=True)[0]
        won += any(narrow(table, pieces, bound, least_of(table)) for pieces, bound in bounds)
    assert won > 1


def test_unsafe_pieces_that_a_border_cuts_off_are_protected_too(practice_cases):
    tables, published = practice_cases
    aims, cases = [], []
    for table, shown in zip(tables, published):
        few = table.targets.sum_of < 0
        for row in np.flatnonzero(few)[:3]:
            pieces = table.targets.members[row].indices
            cases.append(seen_by_the_attacker(table, shown))
            aims.append((pieces, least_of(table)))
    bounds = attacker.intervals(cases, [pieces for pieces, _ in aims])
    assert len(aims) > 50
    for (_, least), bound in zip(aims, bounds):
        assert bound[0] <= 1 + 1e-6
        assert bound[1] >= least - 1e-6


def test_by_every_table_an_attacker_who_knows_the_rules_learns_no_more_than_the_rule():
    """Small cases: all whole-number tables that agree, with something unsafe among the withheld."""
    checked = 0
    for seed in range(30):
        rng = np.random.default_rng(500 + seed)
        count = int(rng.integers(3, 6))
        counts = np.where(
            rng.random(count) < 0.5, rng.integers(1, 3, count), rng.integers(3, 7, count)
        )
        table = table_of(np.repeat(np.arange(count), counts), count, Rules(3), grand_total=True)
        shown = withhold(table, rng).published
        if not shown[-1] or shown[:-1].all():
            continue
        case = seen_by_the_attacker(table, shown)
        tables = attacker.every_table(case, int(counts.sum()))
        hidden = np.flatnonzero(~shown[:-1])
        tables = tables[(tables[:, hidden] < 3).any(axis=1)]
        assert (tables == counts).all(axis=1).any()
        for cell in hidden:
            values = set(tables[:, cell].tolist())
            assert {1, 2} <= values and max(values) >= 3
            checked += 1
    assert checked > 30


def test_which_cell_was_withheld_first_cannot_be_told():
    """Either of two withheld cells can be the unsafe one, in tables that give the same release."""
    table = table_of(np.repeat(np.arange(3), [2, 12, 30]), 3, Rules(10), grand_total=True)
    shown = withhold(table, np.random.default_rng(1)).published
    hidden = np.flatnonzero(~shown[:-1])
    tables = attacker.every_table(seen_by_the_attacker(table, shown), 44)
    for cell in hidden:
        assert (tables[:, cell] < 10).any() and (tables[:, cell] >= 10).any()


def test_the_choice_of_cells_is_not_determined_by_their_counts():
    """A method that always takes the cheapest cell tells that the withheld one is the cheapest."""
    table = table_of(np.repeat(np.arange(4), [2, 12, 13, 14]), 4, Rules(10), grand_total=True)
    chosen = set()
    for seed in range(25):
        result = withhold(table, np.random.default_rng(seed))
        chosen.update(np.flatnonzero(result.complementary).tolist())
    assert {1, 2, 3} <= chosen


def test_the_quick_answer_agrees_with_the_full_check_whatever_was_proven_before():
    rng = np.random.default_rng(23)
    answers = []
    for _ in range(25):
        cells, cell_count, regions = practice_records(rng)
        table = table_of(
            cells, cell_count, Rules(10), regions=regions, region_totals=True, grand_total=True
        )
        proofs = Proofs(table.sums, table.targets)  # kept from one choice of sums to the next
        published = withhold(table, rng).published
        for row in rng.permutation(len(published))[:6]:
            tried = published.copy()
            tried[row] = ~tried[row]
            below, above = unprotected(table.sums, table.targets, tried)  # from no proof at all
            suspects = rng.random(len(below)) < 0.3
            answers.append(bool(below.any() or above.any()))
            assert any_unprotected(proofs, tried, suspects) == answers[-1]
    assert 20 < sum(answers) < len(answers) - 20


def cheapest_by_trial(table):
    """Records lost by the cheapest protected choice among all of them."""
    candidates = np.flatnonzero(~table.unsafe)
    best = np.inf
    for size in range(len(candidates) + 1):
        for extra in itertools.combinations(candidates, size):
            cost = table.records[list(extra)].sum()
            if cost >= best:
                continue
            published = ~table.unsafe
            published[list(extra)] = False
            below, above = unprotected(table.sums, table.targets, published)
            if not (below.any() or above.any()):
                best = cost
    return best


def test_the_cost_is_near_the_least_that_any_choice_has():
    spent, least = 0.0, 0.0
    for seed in range(5):
        rng = np.random.default_rng(900 + seed)
        cells, count, regions = practice_records(rng, 7)
        table = table_of(cells, count, Rules(5), regions=regions, region_totals=True)
        least += cheapest_by_trial(table)
        spent += np.mean(
            [table.records[withhold(table, np.random.default_rng(s)).complementary].sum()
             for s in range(2)]
        )  # fmt: skip
    assert least > 0
    assert least <= spent <= 1.6 * least


def test_numerators_are_protected_as_well_as_counts():
    """Counts alone would be safe with two withheld cells; the numerators give them away."""
    counts, yes = [20, 25, 40, 60], [2, 10, 15, 25]
    cells = np.repeat(np.arange(4), counts)
    numerator = np.concatenate([[1.0] * y + [0.0] * (n - y) for n, y in zip(counts, yes)])
    table = table_of(cells, 4, Rules(5), numerator=numerator, grand_total=True)
    assert table.unsafe.tolist()[:4] == [True, False, False, False]
    shown = withhold(table, np.random.default_rng(0)).published
    for part in (0, 1):
        case = seen_by_the_attacker(table, shown, part)
        low, high = attacker.intervals([case], [[0]])[0]
        if part == 0:
            assert low <= 1 and high >= 5
    careless = np.array([False, True, True, True, True])
    low, high = attacker.intervals([seen_by_the_attacker(table, careless, 0)], [[0]])[0]
    assert low == high == 2


def test_a_share_of_all_is_hidden_although_its_rest_is_zero():
    counts, yes = [20, 30, 40], [20, 12, 20]
    cells = np.repeat(np.arange(3), counts)
    numerator = np.concatenate([[1.0] * y + [0.0] * (n - y) for n, y in zip(counts, yes)])
    table = table_of(cells, 3, Rules(5), numerator=numerator, grand_total=True)
    shown = withhold(table, np.random.default_rng(3)).published
    _, high = attacker.intervals([seen_by_the_attacker(table, shown, 1)], [[0]])[0]
    assert high >= 5


def test_intervals_agree_with_the_attackers_own():
    for seed in range(15):
        rng = np.random.default_rng(seed)
        cells, count, regions = practice_records(rng)
        table = table_of(cells, count, Rules(5), regions=regions, region_totals=True)
        published = rng.random(len(table.unsafe)) < 0.6
        row = int(rng.integers(len(table.cells)))
        low, high = outsider_interval(table.sums, published, pieces_of(table, row))
        case = seen_by_the_attacker(table, published)
        case.upper[:] = 1e5
        expected = attacker.intervals([case], [pieces_of(table, row)])[0]
        assert low == pytest.approx(expected[0], abs=1e-5)
        assert min(high, 1e5) == pytest.approx(min(expected[1], 1e5), rel=1e-6)


def test_a_two_way_table_is_protected_across_both_of_its_totals():
    """Rows and columns both add up, so four cells or more have to go."""
    rng = np.random.default_rng(5)
    counts = np.array([[3, 30, 25], [40, 22, 31], [28, 35, 41]])
    atoms = counts.size
    sums = [sparse.identity(atoms, format="csr")]
    for axis in (0, 1):
        places = np.indices(counts.shape)[axis].ravel()
        sums.append(sparse.csr_matrix((np.ones(atoms), (places, np.arange(atoms))), (3, atoms)))
    table = Sums(
        sparse.vstack(sums).tocsr(), counts.reshape(1, -1).astype(float), np.ones(atoms),
        np.zeros(atoms, bool),
    )  # fmt: skip
    targets = Targets(
        sparse.identity(atoms, format="csr"), np.ones((atoms, 1), bool), np.ones(atoms),
        np.full(atoms, 10.0), np.arange(atoms),
    )  # fmt: skip
    unsafe = np.zeros(15, bool)
    unsafe[0] = True
    cost = (table.members @ table.values[0]).astype(float)
    result = complementary_withholding(table, targets, unsafe, cost, np.arange(15) >= 9, rng)
    assert (~result.published).sum() >= 4
    for cell in np.flatnonzero(~result.published):
        low, high = outsider_interval(table, result.published, [cell])
        assert low <= 1 + 1e-6 and high >= 10 - 1e-6


def test_totals_that_are_public_already_and_give_a_cell_away_are_reported():
    table = table_of(np.zeros(4, int), 1, Rules(10), grand_total=True)
    with pytest.raises(InputError, match="public already"):
        withhold(table, np.random.default_rng(0), np.array([False, True]))
    cells = np.repeat(np.arange(2), [4, 1])
    table = table_of(cells, 2, Rules(5), grand_total=True)
    with pytest.raises(InputError, match="public already"):
        withhold(table, np.random.default_rng(0), np.array([False, False, True]))


def test_a_region_with_one_occupied_cell_loses_its_total():
    cells = np.repeat(np.arange(3), [4, 30, 30])
    regions = np.repeat([0, 1, 1], [4, 30, 30])
    table = table_of(cells, 3, Rules(10), regions=regions, region_totals=True)
    shown = withhold(table, np.random.default_rng(0)).published
    assert shown.tolist() == [False, True, True, False, True]
