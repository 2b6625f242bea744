import math

import numpy as np
import pytest
from steadfield.algorithms.numeric import cell_size, hexagons
from steadfield.algorithms.numeric.errors import CancelledError, InputError


def leave_one_out_score(cell, area, weight):
    """Integrated square less twice the left-out mean, record by record (Rudemo 1982)."""
    total = weight.sum()
    square = sum(weight[cell == k].sum() ** 2 for k in np.unique(cell)) / (total**2 * area)
    mean = 0.0
    for i in range(len(cell)):
        others = np.arange(len(cell)) != i
        density = weight[others & (cell == cell[i])].sum() / (weight[others].sum() * area)
        mean += weight[i] / total * density
    return square - 2 * mean


def test_cross_validation_score_agrees_with_leaving_out_record_by_record():
    generator = np.random.default_rng(1)
    cell = generator.integers(0, 7, 40)
    ones = np.ones(40)
    found = cell_size.cross_validation_score(cell, ones, 3.0)
    assert found == pytest.approx(leave_one_out_score(cell, 3.0, ones), rel=1e-12)
    # the closed form for equal weights, Rudemo (1982), Scand. J. Stat. 9:65
    n, squares = 40, np.square(np.bincount(cell)).sum()
    closed = 2 / ((n - 1) * 3.0) - (n + 1) / (n**2 * (n - 1) * 3.0) * squares
    assert found == pytest.approx(closed, rel=1e-12)
    weight = generator.uniform(0.5, 4.0, 40)
    found = cell_size.cross_validation_score(cell, weight, 3.0)
    assert found == pytest.approx(leave_one_out_score(cell, 3.0, weight), rel=1e-12)


def test_mean_variance_cost_of_a_few_bins_worked_by_hand():
    # Counts 4, 0, 2: mean 2, variance 8/3 (divided by 3, as the method asks); area 2.
    assert cell_size.mean_variance_cost([4, 0, 2], 2.0) == pytest.approx((4 - 8 / 3) / 4)
    # Weights change what chance gives: sum of squares in place of the count.
    assert cell_size.mean_variance_cost([4, 0, 2], 2.0, [8, 0, 4]) == pytest.approx((8 - 8 / 3) / 4)


def test_mean_variance_cost_estimates_the_integrated_error_up_to_a_constant():
    # Poisson counts in m bins of width 1/m under the rate a + b x on the unit interval. The mean
    # integrated squared error is noise (mean count / width^2) plus bias (b^2 / (12 m^2)); the cost
    # estimates it less the variance of the rate, b^2 / 12. Dividing the variance of m counts by m
    # rather than m - 1 leaves 1/m of the noise on top.
    a, b, m = 40.0, 200.0, 5
    expected_counts = a / m + b * np.diff(np.linspace(0, 1, m + 1) ** 2) / 2
    counts = np.random.default_rng(2).poisson(expected_counts, (6000, m))
    cost = np.mean([cell_size.mean_variance_cost(row, 1 / m) for row in counts])
    noise = expected_counts.mean() * m**2
    expected = noise * (1 + 1 / m) + b**2 / (12 * m**2) - b**2 / 12
    assert cost == pytest.approx(expected, rel=0.02)


@pytest.mark.parametrize("shape", ["hexagon", "square"])
def test_sweep_counts_cells_below_the_least_and_their_error(shape):
    x, y = np.random.default_rng(3).normal(0, 500, (2, 400))
    found = cell_size.sweep(
        x, y, [900.0, 300.0], shape, np.random.default_rng(4), least_records=12, offsets=3
    )
    np.testing.assert_array_equal(found.size, [300, 900])
    generator = np.random.default_rng(4)
    for row, size in enumerate(found.size):
        cells, below, records, errors = [], [], [], []
        for _ in range(3):
            tiling = cell_size.random_tiling(shape, size, True, generator)
            frame = {"origin": tiling.origin, "angle": tiling.angle}
            cut = hexagons.hexagon_cells if shape == "hexagon" else hexagons.square_cells
            q, r = cut(x, y, size, **frame)
            _, counts = np.unique(np.stack([q, r]), axis=1, return_counts=True)
            cells.append(len(counts))
            below.append(np.mean(counts < 12))
            records.append(counts[counts < 12].sum() / 400)
            errors.append(np.median(1 / np.sqrt(counts)))
        assert found.cells[row] == pytest.approx(np.mean(cells))
        assert found.share_below[row] == pytest.approx(np.mean(below))
        assert found.records_below[row] == pytest.approx(np.mean(records))
        assert found.counting_error[row] == pytest.approx(np.mean(errors))


def test_criteria_of_normal_records_are_smallest_near_the_closed_form():
    # Integrated squared error of a histogram of squares (Scott 1992): 1 / (n h^2) + h^2 R / 12, R
    # the integral of the squared gradient, 1 / (4 pi) for the standard normal; least at
    # h^4 = 12 / (n R).
    n = 20_000
    x, y = np.random.default_rng(5).normal(0, 1, (2, n))
    best = (12 / (n / (4 * math.pi))) ** 0.25
    sizes = best * 1.25 ** np.arange(-5, 6)
    found = cell_size.sweep(x, y, sizes, "square", np.random.default_rng(6), offsets=12)
    advice = cell_size.advise(found)
    assert abs(math.log(found.size[advice.by_cross_validation] / best)) < math.log(1.6)
    assert abs(math.log(found.size[advice.by_mean_variance] / best)) < math.log(1.6)
    assert advice.agree and not advice.at_the_end


def figures(records_below, cross_validation, mean_variance):
    size = 100.0 * 2.0 ** np.arange(len(records_below))
    rest = np.ones(len(size))
    return cell_size.Sweep(
        size, rest, rest, np.array(records_below), rest, np.array(cross_validation),
        np.array(mean_variance),
    )  # fmt: skip


def test_advice_follows_the_criteria_and_grows_until_few_records_stand_in_thin_cells():
    advice = cell_size.advise(figures([0.9, 0.6, 0.08, 0.05], [3, 1, 2, 4], [3, 1, 2, 4]))
    assert (advice.by_cross_validation, advice.by_mean_variance) == (1, 1)
    assert advice.by_least_records == 2 and advice.advised == 2 and advice.agree
    assert cell_size.advise(figures([0.2, 0.1, 0.1, 0.1], [3, 1, 2, 4], [3, 1, 2, 4])).advised == 1


def test_advice_says_when_criteria_differ_or_no_size_has_enough_records():
    advice = cell_size.advise(figures([0.9, 0.6, 0.5, 0.4], [1, 2, 3, 4], [4, 3, 1, 2]))
    assert not advice.agree and advice.at_the_end
    assert advice.by_least_records is None and advice.advised == 3


def test_one_record_or_one_spot_is_refused():
    with pytest.raises(InputError, match="at least 2"):
        cell_size.sweep([1.0], [1.0], [5.0], "square", np.random.default_rng(1))
    with pytest.raises(InputError, match="one spot"):
        cell_size.sizes_to_try(np.ones(5), np.ones(5))
    with pytest.raises(InputError, match="above 0"):
        cell_size.sweep([1.0, 2.0], [1.0, 2.0], [0.0], "square", np.random.default_rng(1))


def test_sweep_can_be_cancelled():
    def cancel(share):
        raise CancelledError

    x, y = np.random.default_rng(1).normal(size=(2, 50))
    with pytest.raises(CancelledError):
        cell_size.sweep(x, y, [1.0], "hexagon", np.random.default_rng(1), progress=cancel)


def test_sizes_for_zonings_rise_from_readable_counts_to_a_thirtieth_of_the_area():
    x, y = np.random.default_rng(8).uniform(0, 10_000, (2, 6000))
    sizes = cell_size.sizes_for_zonings(x, y, np.ones(6000), 1e8, np.random.default_rng(1))
    assert (np.diff(sizes) > 0).all() and len(sizes) == 6
    assert hexagons.hexagon_area(sizes[-1]) == pytest.approx(1e8 / 30, rel=0.1)
    # Uniform records: a cell of the smallest size holds about twenty.
    assert 14 < 6000 * hexagons.hexagon_area(sizes[0]) / 1e8 < 35


def test_the_sizes_tried_bracket_the_reference_rule():
    x, y = np.random.default_rng(9).normal(0, 700, (2, 2000))
    sizes = cell_size.sizes_to_try(x, y)
    reference = 3.5 * 700 * 2000**-0.25
    assert sizes[0] < reference / 5 and sizes[-1] > reference * 3.5
    assert (sizes == [float(f"{size:.1e}") for size in sizes]).all()
