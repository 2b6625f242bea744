import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import sparse

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

from differencing_reference import all_tables, intervals_of_all_unions
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.intervals import (
    PublishedCounts,
    below_threshold,
    components,
    exact,
    extreme,
    interval,
    noisy,
    reconcile,
    restricted,
    rounded,
    tighten,
)


def published(membership, lower, upper):
    return PublishedCounts(
        sparse.csr_matrix(np.asarray(membership)), np.array(lower, float), np.array(upper, float)
    )


def random_case(seed):
    """Up to five atoms under three to five random zones with exact, rounded or no counts."""
    generator = np.random.default_rng(seed)
    membership = generator.integers(0, 2, (generator.integers(3, 6), generator.integers(2, 6)))
    membership = np.vstack([membership, np.ones(membership.shape[1], int)])
    truth = generator.integers(0, 3, membership.shape[1])
    sums = membership @ truth
    spread = generator.integers(0, 3, len(sums))
    lower, upper = np.maximum(sums - spread, 0), sums + generator.integers(0, 3, len(sums))
    return published(membership, lower, upper), truth


def tables_of(counts):
    return all_tables(counts.membership.toarray(), counts.lower, counts.upper, 12)


@pytest.mark.parametrize("seed", range(12))
def test_linear_programmes_give_bounds_that_enclose_all_whole_number_tables(seed):
    counts, _ = random_case(seed)
    for union, (low, high) in intervals_of_all_unions(tables_of(counts)).items():
        region = np.isin(np.arange(counts.atoms), list(union))
        found = interval(counts, region)
        assert found[0] <= low and high <= found[1]
        whole = extreme(counts, region, largest=True, whole=True).value
        assert whole == high


@pytest.mark.parametrize("seed", range(12))
def test_tightened_bounds_enclose_all_tables(seed):
    counts, _ = random_case(seed)
    low, high = tighten(counts)
    tables = tables_of(counts)
    assert (low <= tables.min(axis=0)).all() and (tables.max(axis=0) <= high).all()


def test_tightening_finds_a_withheld_cell_from_its_total():
    counts = published([[1, 0, 0], [0, 1, 0], [0, 0, 1], [1, 1, 1]], [5, 0, 7, 15], [5, 99, 7, 15])
    low, high = tighten(counts)
    assert low.tolist() == high.tolist() == [5, 3, 7]


def test_multipliers_add_and_subtract_the_rows_that_leave_the_region():
    counts = published([[1, 1, 1], [0, 1, 0], [0, 0, 1]], [20, 9, 8], [20, 9, 8])
    most = extreme(counts, np.array([True, False, False]))
    assert most.value == 3
    assert most.multipliers == pytest.approx([1, -1, -1])
    assert most.counts.tolist() == [3, 9, 8]


def test_a_region_that_nothing_limits_is_endless():
    counts = published([[1, 1]], [4], [np.inf])
    assert interval(counts, np.array([True, False])) == (0, np.inf)


@pytest.mark.parametrize("seed", range(8))
def test_statements_without_contradiction_stay_as_they_are(seed):
    counts, _ = random_case(seed)
    loosened, table, by = reconcile(counts)
    assert (by == 0).all() and (loosened.lower == counts.lower).all()
    assert loosened.holds(table) or not np.allclose(table, np.round(table))


def test_contradicting_counts_are_loosened_by_what_is_missing():
    counts = published([[1, 1], [1, 0], [0, 1]], [10, 7, 5], [10, 7, 5])
    loosened, table, by = reconcile(counts)
    assert by.sum() == 2
    assert loosened.holds(np.round(table))


def test_components_are_the_atoms_that_share_rows():
    label = components(sparse.csr_matrix([[1, 1, 0, 0], [0, 1, 1, 0], [0, 0, 0, 1]]))
    assert label[0] == label[1] == label[2] != label[3]


def test_holding_the_rest_or_forgetting_it_brackets_the_interval():
    counts = published([[1, 1, 0], [0, 1, 1], [1, 1, 1]], [4, 5, 7], [4, 5, 7])
    truth = np.array([2.0, 2.0, 3.0])
    region = np.array([True, False])
    atoms = np.array([0, 1])
    held = interval(restricted(counts, atoms, truth)[0], region)
    forgotten = interval(restricted(counts, atoms)[0], region)
    whole = interval(counts, np.array([True, False, False]))
    assert forgotten[0] <= whole[0] <= held[0] <= held[1] <= whole[1] <= forgotten[1]


@pytest.mark.parametrize("base", [2, 3, 5, 10])
def test_a_rounded_count_says_all_values_that_rounding_can_come_from(base):
    for shown in range(0, 4 * base, base):
        low, high = rounded([shown], base)
        origins = [v for v in range(100) if shown in (v // base * base, -(-v // base) * base)]
        assert (low[0], high[0]) == (min(origins), max(origins))
        low, high = rounded([shown], base, at_random=False)
        origins = [v for v in range(100) if abs(v - shown) <= base / 2]
        assert (low[0], high[0]) == (min(origins), max(origins))


@pytest.mark.parametrize("epsilon", [0.2, 0.7, 2.0])
def test_the_interval_of_a_noisy_count_leaves_the_stated_doubt(epsilon):
    low, high = noisy([1000], epsilon, doubt=0.01)
    reach = high[0] - 1000
    noise = np.arange(-5000, 5001)
    weight = np.exp(-epsilon * np.abs(noise))
    outside = weight[np.abs(noise) > reach].sum() / weight.sum()
    narrower = weight[np.abs(noise) > reach - 1].sum() / weight.sum()
    assert outside <= 0.01 < narrower
    assert low[0] == 1000 - reach


def test_null_counts_are_withheld_and_a_published_zero_gives_away_that_they_hold_someone():
    low, high = exact([4, np.nan])
    assert (low.tolist(), high.tolist()) == ([4, 0], [4, np.inf])
    low, high = below_threshold([12, np.nan], *exact([12, np.nan]), 10)
    assert (low.tolist(), high.tolist()) == ([12, 0], [12, 9])
    low, high = below_threshold([12, np.nan, 0], *exact([12, np.nan, 0]), 10)
    assert (low.tolist(), high.tolist()) == ([12, 1, 0], [12, 9, 0])


def test_counts_that_cannot_be_counts_are_said():
    with pytest.raises(InputError, match=r"whole numbers; found 2\.5"):
        exact([2.5])
    with pytest.raises(InputError, match="0 or more; found -3"):
        exact([-3])
    with pytest.raises(InputError, match="hold 7, which is no multiple of 5"):
        rounded([5, 7], 5)
    with pytest.raises(InputError, match="rounding base must be"):
        rounded([5], 1)
    with pytest.raises(InputError, match="privacy budget"):
        noisy([5], 0)
    with pytest.raises(InputError, match="threshold must be 2 or more"):
        below_threshold([5], [5], [5], 1)
