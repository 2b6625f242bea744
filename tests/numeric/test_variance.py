import math

import numpy as np
import pytest
from scipy.stats import poisson
from steadfield.algorithms.numeric import variance
from steadfield.algorithms.numeric.errors import InputError


def scenarios(seed, shape, missing=0.2):
    generator = np.random.default_rng(seed)
    values = generator.gamma(2.0, 3.0, shape)
    values[generator.random(shape) < missing] = np.nan
    return values


def test_moments_added_one_by_one_agree_with_numpy_on_stored_values():
    values = scenarios(1, (40, 25))
    values[:, 3] = np.nan
    moments = variance.RunningMoments(25)
    for row in values:
        moments.add(row)
    present = np.delete(np.arange(25), 3)
    np.testing.assert_array_equal(moments.count, (~np.isnan(values)).sum(axis=0))
    np.testing.assert_allclose(
        moments.expected()[present], np.nanmean(values[:, present], axis=0), rtol=1e-12
    )
    np.testing.assert_allclose(
        moments.variance()[present], np.nanvar(values[:, present], axis=0), rtol=1e-12
    )
    assert np.isnan(moments.expected()[3]) and np.isnan(moments.variance()[3])


@pytest.mark.parametrize("offset", [0.0, 1e6])
def test_moments_of_batches_merge_to_those_of_the_whole(offset):
    values = scenarios(2, (60, 30)) + offset
    merged = variance.RunningMoments(30)
    for start, stop in [(0, 1), (1, 20), (20, 20), (20, 60)]:
        merged.merge(variance.RunningMoments.of(values[start:stop]))
    np.testing.assert_allclose(merged.expected(), np.nanmean(values, axis=0), rtol=1e-12)
    # An offset of 1e6 leaves ten digits of the deviations.
    np.testing.assert_allclose(
        merged.variance(), np.nanvar(values, axis=0), rtol=1e-12 if offset == 0 else 1e-8
    )


def test_quantiles_lie_within_a_bin_of_those_of_stored_values():
    values = scenarios(3, (400, 12), missing=0.1)
    edges = np.linspace(0, 60, 241)
    binned = variance.BinnedCounts(edges, 12)
    binned.add(values[:150])
    other = variance.BinnedCounts(edges, 12)
    for row in values[150:]:
        other.add(row)
    binned.merge(other)
    np.testing.assert_array_equal(binned.counts.sum(axis=1), (~np.isnan(values)).sum(axis=0))
    for share in (0.05, 0.5, 0.95):
        # Inverted distribution: the smallest stored value with at least this share at or below it.
        stored = [
            np.sort(column[~np.isnan(column)])[math.ceil(share * (~np.isnan(column)).sum()) - 1]
            for column in values.T
        ]
        assert (np.abs(binned.quantile(share) - stored) <= 0.25 + 1e-12).all()


def test_quantiles_stay_inside_the_edges_and_are_missing_without_values():
    binned = variance.BinnedCounts([0.0, 1.0, 2.0], 3)
    binned.add([[-5.0, 1.5, np.nan], [9.0, 1.5, np.nan]])
    np.testing.assert_allclose(binned.quantile(0.0), [0.0, 1.0, np.nan])
    np.testing.assert_allclose(binned.quantile(1.0), [2.0, 2.0, np.nan])
    np.testing.assert_allclose(binned.quantile(0.5), [1.0, 1.5, np.nan])
    with pytest.raises(InputError, match="same"):
        binned.merge(variance.BinnedCounts([0.0, 2.0], 3))
    with pytest.raises(InputError, match="increase"):
        variance.BinnedCounts([0.0, 0.0], 3)


def stored_law(values_by_scale):
    """Mean, scale, zoning and total variance of one place from stored values, written out."""
    weight = {
        s: np.mean(~np.isnan(values))
        for s, values in enumerate(values_by_scale)
        if not np.isnan(values).all()
    }
    whole = sum(weight.values())
    listed = [
        (weight[s] / whole / np.sum(~np.isnan(values_by_scale[s])), value)
        for s in weight
        for value in values_by_scale[s][~np.isnan(values_by_scale[s])]
    ]
    mean = sum(w * v for w, v in listed)
    total = sum(w * (v - mean) ** 2 for w, v in listed)
    scale = sum(w / whole * (np.nanmean(values_by_scale[s]) - mean) ** 2 for s, w in weight.items())
    zoning = sum(w / whole * np.nanvar(values_by_scale[s]) for s, w in weight.items())
    return mean, scale, zoning, total


@pytest.mark.parametrize("missing", [0.0, 0.3])
def test_scale_and_zoning_variance_add_to_the_variance_of_all_scenarios(missing):
    replicates = (30, 50, 12)
    values = [scenarios(10 + s, (n, 20), missing) for s, n in enumerate(replicates)]
    values[1][:, 4] = np.nan
    values[0][1:, 5] = np.nan
    parts = variance.decompose([variance.RunningMoments.of(v) for v in values], replicates)
    for place in range(20):
        mean, scale, zoning, total = stored_law([v[:, place] for v in values])
        assert parts.mean[place] == pytest.approx(mean, rel=1e-12)
        assert parts.scale[place] == pytest.approx(scale, rel=1e-11)
        assert parts.zoning[place] == pytest.approx(zoning, rel=1e-12)
        assert parts.scale[place] + parts.zoning[place] == pytest.approx(total, rel=1e-12)
        assert parts.total[place] == parts.scale[place] + parts.zoning[place]


def test_scales_weigh_the_same_whatever_their_replicates_when_nothing_is_missing():
    weights = variance.scale_weights([[10, 5], [40, 0], [8, 8]], [10, 40, 8])
    np.testing.assert_allclose(weights, [[1 / 3, 0.5 / 1.5], [1 / 3, 0], [1 / 3, 1 / 1.5]])


def test_a_place_without_any_value_has_no_variance_and_no_verdict():
    values = np.full((5, 1), np.nan)
    parts = variance.decompose([variance.RunningMoments.of(values)], [5])
    assert np.isnan([parts.mean[0], parts.scale[0], parts.zoning[0], parts.total[0]]).all()
    tally = variance.ThresholdTally(1)
    tally.add_many(values, values)
    p_above, evidence = variance.share_above([tally], [5])
    assert np.isnan(variance.verdict(p_above, evidence)).all()


@pytest.mark.parametrize(("kind", "rate"), [("share", 0.08), ("share", 0.6), ("rate", 0.3)])
def test_counting_variance_matches_the_spread_of_resampled_zones(kind, rate):
    generator = np.random.default_rng(21)
    total = np.array([60, 250, 1500])
    draw = (
        generator.binomial if kind == "share" else lambda n, p, size: generator.poisson(n * p, size)
    )
    resampled = draw(total, rate, size=(20_000, 3)) / total
    expected = variance.counting_variance(resampled, total, kind).mean(axis=0)
    np.testing.assert_allclose(expected, resampled.var(axis=0), rtol=0.05)


def test_counts_above_the_total_leave_a_share_without_negative_noise():
    assert variance.counting_variance([1.5], [10.0], "share")[0] == 0
    with pytest.raises(InputError, match="percent"):
        variance.counting_variance([0.5], [10.0], "percent")


def test_equal_to_the_threshold_counts_as_half_above():
    threshold = 0.1 + 0.2
    np.testing.assert_array_equal(
        variance.exceeds([0.3, 0.31, 0.29, np.nan], threshold), [0.5, 1, 0, np.nan]
    )


def test_standardised_excess_has_unit_variance_where_the_true_value_is_the_threshold():
    # Variance stabilisation (Anscombe 1948): mean 0 and variance 1 up to terms in 1/expected count.
    generator = np.random.default_rng(4)
    total = np.array([400.0, 3000.0])
    share = generator.binomial(total.astype(int), 0.2, (20_000, 2)) / total
    rate = generator.poisson(total * 0.2, (20_000, 2)) / total
    for value, kind in ((share, "share"), (rate, "rate")):
        excess = variance.standardised_excess(value, total, 0.2, kind)
        np.testing.assert_allclose(excess.mean(axis=0), 0, atol=0.06)
        np.testing.assert_allclose(excess.std(axis=0), 1, rtol=0.03)


@pytest.mark.parametrize("expected", [0.1, 0.5, 2.0, 6.0])
def test_standardised_excess_of_small_counts_passes_the_limit_no_oftener_than_the_normal(expected):
    # Exact Poisson probabilities; 2.5 % is the normal law's share beyond 1.96. A count is a step,
    # so the share may pass it a little; a plain (v - t) / sd passes it up to four times as often.
    count = np.arange(200)
    probability = poisson.pmf(count, expected)
    excess = variance.standardised_excess(count / 50.0, np.full(200, 50.0), expected / 50, "rate")
    assert probability[excess >= 1.96].sum() < 0.03
    assert abs(probability @ excess) < 0.16
    assert probability @ excess**2 < 1.1


def test_tallies_merge_and_weigh_scales_like_the_moments():
    values = [scenarios(31, (30, 6)), scenarios(32, (10, 6))]
    replicates = [30, 10]
    tallies = []
    for scale in values:
        above = variance.exceeds(scale, 5.0)
        one, other = variance.ThresholdTally(6), variance.ThresholdTally(6)
        one.add(above[0], scale[0])
        other.add_many(above[1:], scale[1:])
        one.merge(other)
        tallies.append(one)
    p_above, evidence = variance.share_above(tallies, replicates)
    weights = variance.scale_weights([t.count for t in tallies], replicates)
    expected = sum(
        w * np.nanmean(np.where(np.isnan(v), np.nan, v > 5.0), axis=0)
        for w, v in zip(weights, values)
    )
    np.testing.assert_allclose(p_above, expected, rtol=1e-12)
    parts = variance.decompose([variance.RunningMoments.of(v) for v in values], replicates)
    np.testing.assert_allclose(evidence, parts.mean, rtol=1e-12)


def test_verdict_asks_for_one_side_under_nearly_every_cut_and_for_more_than_chance():
    p_above = np.array([1.0, 0.95, 0.94, 1.0, 0.0, 0.05, 0.06, 0.0, np.nan, 19 / 20])
    evidence = np.array([3.0, 1.96, 9.0, 1.5, -3.0, -2.0, -9.0, -1.0, np.nan, 4.0])
    np.testing.assert_array_equal(
        variance.verdict(p_above, evidence), [1, 1, 0, 0, -1, -1, 0, 0, np.nan, 1]
    )


def test_a_place_that_most_scenarios_leave_without_a_value_is_not_settled():
    tallies = [variance.ThresholdTally(3), variance.ThresholdTally(3)]
    for scale, counts in enumerate([(10, 0, 0), (20, 20, 12)]):
        tallies[scale].count = np.array(counts)
        tallies[scale].above = np.array(counts, float)
        tallies[scale].evidence = np.array(counts) * 5.0
    covered = variance.coverage(tallies, [10, 20])
    np.testing.assert_allclose(covered, [1.0, 0.5, 0.3])
    p_above, evidence = variance.share_above(tallies, [10, 20])
    np.testing.assert_array_equal(p_above, [1, 1, 1])
    np.testing.assert_array_equal(variance.verdict(p_above, evidence, covered), [1, 1, 0])
