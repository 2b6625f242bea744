from itertools import permutations

import numpy as np
import pytest
from steadfield.algorithms.numeric import zone_statistics as statistics
from steadfield.algorithms.numeric.zone_statistics import ZoneStatistics, zone_statistics


def zonings(seed=3, number=8, zones=12):
    generator = np.random.default_rng(seed)
    total = generator.integers(20, 400, (number, zones)).astype(float)
    count = generator.binomial(total.astype(int), generator.uniform(0.05, 0.3, total.shape))
    total[generator.random(total.shape) < 0.2] = 0
    return np.where(total > 0, count, 0).astype(float), total


@pytest.mark.parametrize("kind", ["share", "rate"])
def test_many_zonings_at_once_agree_with_the_formulas_written_out_zone_by_zone(kind):
    count, total = zonings()
    threshold = count.sum() / total.sum()
    found = zone_statistics(count, total, threshold, kind)
    for row in range(len(count)):
        pairs = [(c, n) for c, n in zip(count[row], total[row]) if n > 0]
        values = [c / n for c, n in pairs]
        cases, people = sum(c for c, n in pairs), sum(n for c, n in pairs)
        overall = cases / people
        spread = sum(n * (c / n - overall) ** 2 for c, n in pairs) / people
        others = people - cases if kind == "share" else people
        gap = sum(abs(c / cases - (n - c * (kind == "share")) / others) for c, n in pairs) / 2
        expected = {
            "largest": max(values),
            "smallest": min(values),
            "value_range": max(values) - min(values),
            "variation": spread**0.5 / overall,
            "dissimilarity": gap,
            "share_above": sum(n for c, n in pairs if c / n > threshold) / people,
            "zones": len(pairs),
        }
        assert set(expected) == set(ZoneStatistics.names())
        for name, value in expected.items():
            assert getattr(found, name)[row] == pytest.approx(value, rel=1e-12), name


def test_complete_separation_has_dissimilarity_one_and_equal_zones_zero():
    # Limits of the index (Duncan & Duncan 1955): no member shares a zone with another kind, or
    # every zone has the overall share.
    assert statistics.dissimilarity([30.0, 0.0], [30.0, 70.0], "share") == pytest.approx(1.0)
    assert statistics.dissimilarity([3.0, 7.0], [30.0, 70.0], "share") == pytest.approx(0.0)
    assert statistics.dissimilarity([3.0, 7.0], [30.0, 70.0], "rate") == pytest.approx(0.0)


def test_a_zoning_without_any_total_has_no_statistics():
    found = zone_statistics([[0.0, 0.0], [1.0, 2.0]], [[0.0, 0.0], [5.0, 5.0]], 0.2)
    assert np.isnan(found.largest[0]) and np.isnan(found.variation[0])
    assert np.isnan(found.share_above[0]) and np.isnan(found.dissimilarity[0])
    assert found.largest[1] == pytest.approx(0.4) and found.share_above[1] == pytest.approx(0.5)


def test_no_zones_at_all_have_no_statistics():
    found = zone_statistics(np.empty(0), np.empty(0), 0.2, "share")
    assert np.isnan([found.largest, found.smallest, found.variation, found.share_above]).all()
    assert found.zones == 0


def board(rows, columns):
    """Rook neighbours of a board, each pair once."""
    cell = np.arange(rows * columns).reshape(rows, columns)
    i = np.concatenate([cell[:, :-1].ravel(), cell[:-1].ravel()])
    j = np.concatenate([cell[:, 1:].ravel(), cell[1:].ravel()])
    return i, j


def morans_i_by_the_double_sum(value, i, j):
    n = len(value)
    weight = np.zeros((n, n))
    weight[i, j] = weight[j, i] = 1
    deviation = value - value.mean()
    return n / weight.sum() * (deviation @ weight @ deviation) / (deviation @ deviation)


def test_morans_i_agrees_with_the_double_sum():
    value = np.random.default_rng(8).normal(size=30)
    i, j = board(5, 6)
    expected = morans_i_by_the_double_sum(value, i, j)
    assert statistics.morans_i(value, i, j) == pytest.approx(expected, rel=1e-12)


def test_a_checkerboard_has_morans_i_of_minus_one():
    # Every neighbour has the opposite deviation, so the quotient of sums is -1 on an even board.
    value = (np.indices((6, 6)).sum(axis=0) % 2).ravel().astype(float)
    assert statistics.morans_i(value, *board(6, 6)) == pytest.approx(-1, rel=1e-12)


def test_morans_i_averages_minus_one_over_n_minus_one_over_permutations():
    # Expectation under randomisation, -1 / (n - 1) (Cliff & Ord 1981); all 24 orders of 4 values.
    i, j = board(2, 2)
    found = [statistics.morans_i(np.array(p), i, j) for p in permutations([0.3, 1.0, 4.0, 9.0])]
    assert np.mean(found) == pytest.approx(-1 / 3, rel=1e-12)


def test_several_zonings_with_their_own_pairs_and_missing_zones_agree_with_single_ones():
    generator = np.random.default_rng(9)
    i, j = board(4, 4)
    values = generator.normal(size=(3, 16))
    values[0, [2, 9]] = np.nan
    values[2] = 7.1
    both_i, both_j = np.tile(i, 3), np.tile(j, 3)
    found = statistics.morans_i(values, both_i, both_j, np.repeat(np.arange(3), len(i)))
    kept = np.flatnonzero(~np.isnan(values[0]))
    new = np.full(16, -1)
    new[kept] = np.arange(14)
    inside = (new[i] >= 0) & (new[j] >= 0)
    expected = morans_i_by_the_double_sum(values[0, kept], new[i[inside]], new[j[inside]])
    assert found[0] == pytest.approx(expected, rel=1e-12)
    assert found[1] == pytest.approx(statistics.morans_i(values[1], i, j), rel=1e-12)
    assert np.isnan(found[2])


def test_summary_of_a_statistic_skips_what_is_missing():
    values = np.r_[np.arange(101.0), np.nan]
    np.testing.assert_allclose(statistics.summarise(values), [0, 5, 50, 95, 100])
    assert np.isnan(statistics.summarise([np.nan])).all()
