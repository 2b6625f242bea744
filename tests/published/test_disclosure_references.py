"""Disclosure control against the worked examples of its literature.

HANDBOOK: Hundepool et al., Handbook on Statistical Disclosure Control, 2nd edition, August 2024,
https://sdctools.github.io/HandbookSDC; the chapter and example are named beside each check. The
values were read from its text, none is from memory.
"""

import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import sparse
from steadfield.algorithms.numeric.disclosure import (
    Rules,
    contributions,
    protection_range,
    unsafe_totals,
)
from steadfield.algorithms.numeric.outsider import Sums, Targets, outsider_interval
from steadfield.algorithms.numeric.rounding import controlled_rounding, random_rounding
from steadfield.algorithms.numeric.withholding import complementary_withholding

sys.path.insert(0, str(Path(__file__).parent.parent))


def one_cell(values, rules):
    """A cell with these contributions of as many respondents."""
    cells = np.zeros(len(values), int)
    return contributions(
        cells, 1, np.array(values, float), np.arange(len(values)), rules.dominance_n
    )


def is_unsafe(values, rules):
    return bool(unsafe_totals(one_cell(values, rules), rules)[0])


def test_example_1_is_safe_by_one_ninety_dominance_though_the_second_knows_the_first():
    # HANDBOOK 4.2.1, example 1: X = 100,000, x1 = 50,000, x2 = 49,000; (1,90): safe. The second
    # largest contributor overestimates the largest by 2 %: unsafe by any p above 2.
    values = [50_000, 49_000, 400, 300, 200, 100]
    assert not is_unsafe(values, Rules(2, 1, 90.0))
    assert is_unsafe(values, Rules(2, p_percent=2.1))
    assert not is_unsafe(values, Rules(2, p_percent=1.9))


def test_example_2_is_safe_by_the_p_rule_and_unsafe_by_two_k_dominance():
    # HANDBOOK 4.2.1, example 2: X = 110,000, x1 = 52,000, x2 = 50,000, p = 10, k = 90.9: the
    # estimate is off by 15.4 %, and 102,000 > 100,000.
    values = [52_000, 50_000, 4_000, 2_000, 1_000, 1_000]
    assert not is_unsafe(values, Rules(2, p_percent=10.0))
    assert is_unsafe(values, Rules(2, 2, 100 * 100 / 110))
    assert not is_unsafe(values, Rules(2, p_percent=15.3))
    assert is_unsafe(values, Rules(2, p_percent=15.5))


@pytest.mark.parametrize("seed", range(20))
def test_what_is_safe_by_two_k_dominance_is_safe_by_the_p_rule(seed):
    # HANDBOOK 4.2.1, statement A with its proof: k = 100 * 100 / (100 + p)
    rng = np.random.default_rng(seed)
    p = float(rng.uniform(1, 60))
    for _ in range(50):
        values = rng.lognormal(0, 1.5, int(rng.integers(3, 9)))
        if not is_unsafe(values, Rules(2, 2, 100 * 100 / (100 + p))):
            assert not is_unsafe(values, Rules(2, p_percent=p * (1 - 1e-9)))


def test_example_4_upper_protection_level_of_the_dominance_rule():
    # HANDBOOK 4.2.2, example 4: X = 330 of 300, 20, 10; (1,85): unsafe; the feasible upper bound
    # must reach 100/85 * 300 = 352.94.
    rules = Rules(2, 1, 85.0)
    assert is_unsafe([300, 20, 10], rules)
    lower, upper = protection_range(one_cell([300, 20, 10], rules), rules)
    assert upper[0] == pytest.approx(352.94, abs=0.005)
    assert lower[0] <= 330 - 22.94


def test_upper_protection_level_of_the_p_rule():
    # HANDBOOK 4.2.2, table "Upper protection levels" and example 5: p/100 x1 - (X - x1 - x2)
    rules = Rules(2, p_percent=20.0)
    _, upper = protection_range(one_cell([300, 280, 10, 5], rules), rules)
    assert upper[0] == pytest.approx(max(595 + 0.2 * 300 - 15, 2 * 595 / 4))


def test_example_3_feasibility_interval_of_a_small_two_way_table():
    # HANDBOOK 4.2.2, example 3 (Geurts 1992, table 10): rows 7 and 3, columns 6 and 4 remain;
    # cell (1,1) lies between 3 and 6.
    members = sparse.csr_matrix(
        np.array([[1, 1, 0, 0], [0, 0, 1, 1], [1, 0, 1, 0], [0, 1, 0, 1]], float)
    )
    inside = np.array([[5.0, 2.0, 1.0, 2.0]])
    table = Sums(members, inside, np.zeros(4), np.zeros(4, bool))
    assert (members @ inside[0]).tolist() == [7, 3, 6, 4]
    low, high = outsider_interval(table, np.ones(4, bool), [0])
    assert (low, high) == (pytest.approx(3), pytest.approx(6))


def test_example_1a_a_sector_total_gives_the_withheld_subsector_away():
    # HANDBOOK 4.1, example 1a: 56,600 - 47,600 - 8,002 = 998; "one of the two non-sensitive
    # subsector cells" has to go as well.
    values = np.array([[998.0, 47_600.0, 8_002.0]])
    members = sparse.vstack([sparse.identity(3), np.ones((1, 3))]).tocsr()
    table = Sums(members, values, np.zeros(3), np.zeros(3, bool))
    assert members[3] @ values[0] == 56_600
    unsafe = np.array([True, False, False, False])
    low, high = outsider_interval(table, ~unsafe, [0])
    assert low == high == pytest.approx(998)
    targets = Targets(
        sparse.identity(3, format="csr"), np.ones((3, 1), bool), np.full(3, 500.0),
        np.array([1500.0, 0.0, 0.0]), np.arange(3),
    )  # fmt: skip
    result = complementary_withholding(
        table, targets, unsafe, values[0][[0, 1, 2, 0]] + [0, 0, 0, 56_600],
        np.array([False, False, False, True]), np.random.default_rng(0),
    )  # fmt: skip
    assert result.complementary.sum() == 1
    low, high = outsider_interval(table, result.published, [0])
    assert low <= 500 and high >= 1500


def test_random_rounding_to_base_3_has_the_published_probabilities():
    # HANDBOOK 5.5, random rounding: residual 1 goes down with 2/3, residual 2 goes up with 2/3,
    # residual 0 stays. Counted over an even grid of uniform numbers: exact up to one step.
    steps = (np.arange(30_000) + 0.5) / 30_000
    published = {0: (0, 1), 1: (0, 2 / 3), 2: (3, 2 / 3), 3: (3, 1), 4: (3, 2 / 3), 5: (6, 2 / 3),
                 6: (6, 1)}  # fmt: skip
    for value, (likely, chance) in published.items():
        rounded = random_rounding(np.full(len(steps), value), 3, steps)
        assert (rounded == likely).mean() == pytest.approx(chance, abs=1e-4)


def test_controlled_rounding_reaches_the_published_solution_and_is_unbiased():
    # HANDBOOK 5.5: counts of two sexes in three areas (1 0 / 3 3 / 12 20), controlled rounding to
    # base 5, one solution: 5 0 / 0 5 / 10 20 with totals 5, 5, 30; 15, 25; 40.
    values = np.array([1, 0, 3, 3, 12, 20])
    rows, columns = np.repeat(np.arange(3), 2), np.tile(np.arange(2), 3)
    rng = np.random.default_rng(11)
    draws = np.array([controlled_rounding(rows, columns, values, 5, rng) for _ in range(3000)])
    assert (draws == [5, 0, 0, 5, 10, 20]).all(axis=1).any()
    # Cox 1987: adjacent multiples for entries and totals, additive, unbiased
    for members in (rows, columns, np.zeros(6, int)):
        sums = np.stack([draws[:, members == k].sum(1) for k in np.unique(members)], 1)
        true = np.bincount(members, values)
        assert (sums % 5 == 0).all() and np.abs(sums - true).max() < 5
    spread = draws.std(0) / np.sqrt(len(draws))
    assert (np.abs(draws.mean(0) - values) <= 3.5 * spread + 1e-12).all()
