"""Rules for unsafe cells against plain loops over the records."""

import numpy as np
import pytest
from steadfield.algorithms.numeric.disclosure import (
    Rules,
    contributions,
    contributor_codes,
    protection_range,
    share_parts,
    unsafe_shares,
    unsafe_totals,
)
from steadfield.algorithms.numeric.errors import InputError


def random_records(seed, nulls=True):
    rng = np.random.default_rng(seed)
    count, cells = int(rng.integers(1, 400)), int(rng.integers(1, 25))
    contributors = rng.integers(-1 if nulls else 0, 40, count)
    weights = np.round(rng.exponential(5.0, count) * (rng.random(count) > 0.1), 2)
    return rng.integers(-1, cells, count), cells, weights, contributors


def loop_contributions(cells, cell_count, weights, contributors):
    """Each cell's contributions by contributor and the sum that nobody is named for."""
    named = [{} for _ in range(cell_count)]
    unknown, records = [0.0] * cell_count, [0] * cell_count
    for cell, weight, person in zip(cells, weights, contributors):
        if cell < 0:
            continue
        records[cell] += 1
        if person < 0:
            unknown[cell] += weight
        else:
            named[cell][person] = named[cell].get(person, 0.0) + weight
    return named, unknown, records


def worst_case_is_safe(shares, unknown, rules):
    """A total meets the rules however the nameless part is shared out among known persons."""
    values = sorted((v for v in shares.values() if v > 0), reverse=True)
    people = len(values) if values else int(unknown > 0)
    options = [[unknown]] if not values else []
    for place in range(len(values)):
        given = list(values)
        given[place] += unknown
        options.append(sorted(given, reverse=True))
    for option in options:
        total = sum(option)
        if people < rules.least_count:
            return False
        if rules.dominance_n and (
            100 * sum(option[: rules.dominance_n]) > rules.dominance_share * total + 1e-9
        ):
            return False
        rest = total - sum(option[:2])
        if rules.p_percent and 100 * rest < rules.p_percent * option[0] - 1e-9:
            return False
    return people >= rules.least_count


@pytest.mark.parametrize("seed", range(40))
def test_unsafe_totals_are_those_that_a_loop_over_the_records_finds(seed):
    cells, count, weights, contributors = random_records(seed)
    rng = np.random.default_rng(1000 + seed)
    rules = Rules(
        int(rng.integers(2, 8)),
        int(rng.integers(0, 3)),
        float(rng.uniform(40, 95)),
        float(rng.choice([0, 10, 60])),
    )
    behind = contributions(cells, count, weights, contributors, rules.dominance_n)
    found = unsafe_totals(behind, rules)
    named, unknown, records = loop_contributions(cells, count, weights, contributors)
    for cell in range(count):
        expected = records[cell] > 0 and not worst_case_is_safe(named[cell], unknown[cell], rules)
        assert found[cell] == expected


@pytest.mark.parametrize("seed", range(20))
def test_totals_and_largest_contributions_are_those_of_a_loop(seed):
    cells, count, weights, contributors = random_records(seed, nulls=False)
    behind = contributions(cells, count, weights, contributors, 3)
    named, _, records = loop_contributions(cells, count, weights, contributors)
    for cell in range(count):
        values = [*sorted(named[cell].values(), reverse=True), 0, 0]
        assert behind.records[cell] == records[cell]
        assert behind.contributors[cell] == sum(v > 0 for v in values)
        assert behind.total[cell] == pytest.approx(sum(values))
        assert (behind.largest[cell], behind.second[cell]) == pytest.approx(tuple(values[:2]))
        assert behind.leading[cell] == pytest.approx(sum(values[:3]))


def test_records_without_a_contributor_field_are_contributors_each():
    behind = contributions(np.array([0, 0, 1, -1]), 3, leading=2)
    assert behind.contributors.tolist() == [2, 1, 0]
    assert behind.largest.tolist() == [1, 1, 0]
    assert behind.second.tolist() == [1, 0, 0]
    assert behind.leading.tolist() == [2, 1, 0]


def test_nulls_blanks_and_nan_are_unknown_and_padded_text_is_the_same_person():
    codes = contributor_codes(np.array(["a", None, " a ", "", "b", float("nan")], object))
    assert codes.tolist() == [0, -1, 0, -1, 1, -1]
    assert contributor_codes(np.array([7, 3, 7])).tolist() == [1, 0, 1]


def test_unknown_contributors_never_make_a_cell_safe():
    cells = np.zeros(14, int)
    codes = np.array([0, 1, 2, 3] + [-1] * 10)
    behind = contributions(cells, 1, None, codes)
    assert behind.contributors[0] == 4
    assert unsafe_totals(behind, Rules(5))[0]
    assert not unsafe_totals(contributions(cells, 1, None, np.arange(14)), Rules(5))[0]


def test_contributors_of_nothing_protect_nobody():
    weights = np.array([8.0] + [0.0] * 20)
    behind = contributions(np.zeros(21, int), 1, weights, np.arange(21))
    assert behind.contributors[0] == 1
    assert unsafe_totals(behind, Rules(2))[0]


def test_a_share_is_unsafe_when_either_answer_has_few_people_or_all_give_the_same():
    rules = Rules(3)
    cases = {  # (yes, no) persons: unsafe?
        (5, 5): False,
        (2, 8): True,
        (8, 2): True,
        (0, 8): False,
        (8, 0): True,
        (0, 0): False,
    }
    cells = np.concatenate([[k] * sum(c) for k, c in enumerate(cases)]).astype(int)
    numerator = np.concatenate([[1.0] * yes + [0.0] * no for yes, no in cases])
    yes, no = share_parts(None, numerator, len(cells))
    parts = [contributions(cells, len(cases), part) for part in (yes, no)]
    assert unsafe_shares(*parts, rules).tolist() == list(cases.values())
    strict = unsafe_shares(*parts, Rules(3, none_is_group=True))
    assert strict.tolist() == [False, True, True, True, True, False]


def test_numerators_are_counted_by_contributor_not_by_record():
    cells = np.zeros(40, int)
    numerator = np.r_[np.ones(20), np.zeros(20)]
    one_house = np.r_[np.zeros(20), np.arange(1, 21)].astype(int)
    parts = [contributions(cells, 1, part, one_house) for part in share_parts(None, numerator, 40)]
    assert unsafe_shares(*parts, Rules(5))[0]


@pytest.mark.parametrize(
    ("rules", "weights"),
    [
        (Rules(2, 1, 80, 15), [25, 2, 2, 2]),  # dominance alone catches it
        (Rules(2, 1, 80, 15), [50, 49, 1]),  # p % alone
        (Rules(5, 1, 80, 15), [1, 1, 1, 1]),  # least count alone
    ],
)
def test_every_rule_catches_a_cell_that_the_others_pass(rules, weights):
    weights = np.array(weights, float)
    cells = np.zeros(len(weights), int)

    def caught(rules):
        behind = contributions(cells, 1, weights, np.arange(len(weights)), rules.dominance_n)
        return bool(unsafe_totals(behind, rules)[0])

    without = [
        Rules(2, rules.dominance_n, rules.dominance_share, rules.p_percent),
        Rules(rules.least_count, 0, 80, rules.p_percent),
        Rules(rules.least_count, rules.dominance_n, rules.dominance_share, 0),
    ]
    assert caught(rules)
    assert [caught(one) for one in without].count(False) == 1


def test_plain_counts_are_protected_from_one_to_the_least_count():
    lower, upper = protection_range(contributions(np.array([0, 0, 0, 1]), 2), Rules(10))
    assert lower.tolist() == [1, 1]
    assert upper.tolist() == [10, 10]


@pytest.mark.parametrize("seed", range(10))
def test_at_the_upper_protection_level_a_cell_would_have_been_safe(seed):
    rng = np.random.default_rng(seed)
    weights = rng.exponential(10, 12)
    rules = Rules(2, 2, 60.0, 40.0)
    behind = contributions(np.zeros(12, int), 1, weights, np.arange(12) // 2, 2)
    _, upper = protection_range(behind, rules)
    grown = upper[0]
    if unsafe_totals(behind, rules)[0]:
        assert 100 * behind.leading[0] <= rules.dominance_share * grown * (1 + 1e-12)
        rest = grown - behind.largest[0] - behind.second[0]
        assert 100 * rest >= rules.p_percent * behind.largest[0] * (1 - 1e-12)


@pytest.mark.parametrize(
    ("words", "settings"),
    [
        ("LEAST_COUNT", {"least_count": 1}),
        ("LEAST_COUNT", {"least_count": 2.5}),
        ("DOMINANCE_N", {"dominance_n": -1}),
        ("DOMINANCE_SHARE", {"dominance_n": 1, "dominance_share": 100}),
        ("P_PERCENT", {"p_percent": -1}),
    ],
)
def test_rules_that_protect_nobody_are_refused(words, settings):
    with pytest.raises(InputError, match=words):
        Rules(**settings)


@pytest.mark.parametrize("weight", [-1.0, np.nan, np.inf])
def test_negative_and_missing_weights_are_refused(weight):
    with pytest.raises(InputError, match="negative or missing weight"):
        contributions(np.zeros(2, int), 1, np.array([1.0, weight]))


@pytest.mark.parametrize("numerator", [-0.5, 1.5, np.nan])
def test_a_numerator_outside_its_weight_is_refused(numerator):
    with pytest.raises(InputError, match="NUMERATOR"):
        share_parts(None, np.array([1.0, numerator]), 2)
