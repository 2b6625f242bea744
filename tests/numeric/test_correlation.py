import numpy as np
import pytest
import statsmodels.api as sm
from steadfield.algorithms.numeric.builders import Recipe
from steadfield.algorithms.numeric.contiguity import from_pairs
from steadfield.algorithms.numeric.correlation import (
    correlation_and_slope,
    relation,
    simulate_correlation,
)
from steadfield.algorithms.numeric.errors import InputError


def board(side):
    index = np.arange(side * side).reshape(side, side)
    across = np.c_[index[:, :-1].ravel(), index[:, 1:].ravel()]
    down = np.c_[index[:-1].ravel(), index[1:].ravel()]
    return from_pairs(side * side, np.r_[across, down])


def test_r_and_slope_match_numpy_and_statsmodels():
    generator = np.random.default_rng(1)
    x = generator.random((30, 12))
    y = 0.4 * x + generator.random((30, 12))
    weights = generator.integers(1, 50, (30, 12)).astype(float)
    r, slope = correlation_and_slope(x, y, np.ones(x.shape))
    weighted_r, weighted_slope = correlation_and_slope(x, y, weights)
    for row in range(30):
        assert r[row] == pytest.approx(np.corrcoef(x[row], y[row])[0, 1])
        assert slope[row] == pytest.approx(np.polyfit(x[row], y[row], 1)[0])
        fit = sm.WLS(y[row], sm.add_constant(x[row]), weights=weights[row]).fit()
        assert weighted_slope[row] == pytest.approx(fit.params[1])
        assert weighted_r[row] ** 2 == pytest.approx(fit.rsquared)


def test_weights_of_whole_numbers_equal_repeated_zones():
    x, y = np.array([1.0, 2, 4, 3]), np.array([2.0, 1, 5, 3])
    weights = np.array([3, 1, 2, 4])
    repeated = np.repeat(x, weights), np.repeat(y, weights)
    r, slope = correlation_and_slope(x, y, weights.astype(float))
    assert r == pytest.approx(np.corrcoef(*repeated)[0, 1])
    assert slope == pytest.approx(np.polyfit(*repeated, 1)[0])


def test_zones_without_a_value_drop_out_and_two_are_too_few():
    x = np.array([[1.0, 2, 4, np.nan], [1, 2, np.nan, np.nan], [3, 3, 3, 3]])
    y = np.array([[2.0, 1, 5, 9], [2, 1, 5, 9], [1, 2, 3, 4]])
    r, slope = correlation_and_slope(x, y, np.ones(x.shape))
    assert r[0] == pytest.approx(np.corrcoef(x[0, :3], y[0, :3])[0, 1])
    assert np.isnan(r[1:]).all() and np.isnan(slope[1:]).all()


def test_a_shift_far_from_zero_does_not_blur_the_correlation():
    generator = np.random.default_rng(2)
    x, y = generator.random(20), generator.random(20)
    near = correlation_and_slope(x, y, np.ones(20))
    far = correlation_and_slope(x + 1e6, y + 1e6, np.ones(20))
    np.testing.assert_allclose(near, far, atol=1e-9)


def smooth_field(generator, side, width):
    """Gaussian random field by averaging white noise; width 0 leaves it white."""
    noise = generator.standard_normal((side, side))
    if not width:
        return noise.ravel()
    from scipy.ndimage import gaussian_filter

    smooth = gaussian_filter(noise, width, mode="wrap")
    return (smooth / smooth.std()).ravel()


def medians(width, maps=25, side=24):
    """Median r over zonings at the base units and at 96 and 24 zones, averaged over maps.

    Both rates share one field and have noise of their own, as rates of small units do.
    """
    graph, totals = board(side), np.full(side * side, 1000.0)
    found = []
    for seed in range(maps):
        generator = np.random.default_rng(seed)
        common = smooth_field(generator, side, width)
        rates = [
            0.2 + 0.02 * (common + 1.5 * generator.standard_normal(side * side)) for _ in range(2)
        ]
        made = relation(graph, rates[0] * 1000, totals, rates[1] * 1000, totals)
        plan = [Recipe("grown", 24), Recipe("grown", 96)]
        spread = simulate_correlation(made, plan, 30, seed)
        by_scale = [np.median(rows[:, 0]) for rows in spread.scenarios]
        found.append([spread.base[0], by_scale[1], by_scale[0]])
    return np.mean(found, axis=0)


def test_correlation_rises_as_units_are_merged_where_neighbours_are_alike():
    # Gehlke & Biehl (1934), J. Am. Stat. Assoc. 29:169: grouping contiguous areas raises r
    units, middle, few = medians(width=2.5)
    # r of the units: variance 1 of the field over 1 + 1.5^2
    assert units == pytest.approx(1 / 3.25, abs=0.1)
    assert units + 0.1 < middle < few
    assert few - units > 0.25


def test_correlation_stays_where_it_is_when_neighbours_are_unlike():
    # without autocorrelation the field and the noise shrink alike, so r keeps its expectation
    units, middle, few = medians(width=0)
    assert abs(middle - units) < 0.06
    assert abs(few - units) < 0.1


def test_a_total_for_every_person_makes_the_base_value_the_plain_correlation():
    generator = np.random.default_rng(3)
    counts = generator.integers(1, 40, (2, 36))
    totals = generator.integers(50, 90, (2, 36))
    made = relation(board(6), counts[0], totals[0], counts[1], totals[1])
    x, y = counts / totals
    assert made.base_measures()[0] == pytest.approx(np.corrcoef(x, y)[0, 1])
    fit = sm.WLS(y, sm.add_constant(x), weights=totals[1]).fit()
    assert made.base_measures()[3] == pytest.approx(fit.params[1])


def test_summary_has_a_row_for_each_scale_and_measure():
    generator = np.random.default_rng(4)
    counts = generator.integers(1, 40, (2, 36))
    totals = np.full((2, 36), 90)
    made = relation(board(6), counts[0], totals[0], counts[1], totals[1])
    spread = simulate_correlation(made, [Recipe("grown", 5), Recipe("grown", 9)], 80, 1)
    rows = spread.summary()
    assert [(row[0], row[1]) for row in rows[:2]] == [(5, "r"), (5, "slope")]
    assert len(rows) == 8
    r = spread.scenarios[0][:, 0]
    np.testing.assert_allclose(rows[0][2:7], np.quantile(r, (0, 0.05, 0.5, 0.95, 1)))
    assert rows[0][7] == np.mean(r > 0)


@pytest.mark.parametrize(
    ("name", "values", "words"),
    [
        ("x_totals", np.zeros(9), "X_TOTAL: it is 0"),
        ("y_counts", np.full(9, 2), "Y_COUNT: its rate is the same"),
        ("y_counts", np.r_[np.nan, np.ones(8)], "Y_COUNT: 1 units"),
    ],
)
def test_rates_that_cannot_be_compared_are_refused_in_words(name, values, words):
    given = {
        "x_counts": np.arange(9),
        "x_totals": np.full(9, 20),
        "y_counts": np.arange(9)[::-1],
        "y_totals": np.full(9, 20),
        name: values,
    }
    with pytest.raises(InputError, match=words):
        relation(board(3), **given)


def test_two_zones_are_refused_because_they_always_correlate():
    made = relation(board(3), np.arange(9), np.full(9, 20), np.arange(9) ** 2, np.full(9, 99))
    with pytest.raises(InputError, match="needs 3 zones"):
        simulate_correlation(made, [Recipe("grown", 2)], 10, 0)
