"""Bandwidths that follow the density."""

import numpy as np
import pytest
from steadfield.algorithms.numeric import adaptation, surface
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.kernels import GAUSSIAN


def sharp_and_broad(seed, records):
    """A mixture of a tight cluster and a wide one: places, and its density as a function."""
    rng = np.random.default_rng(seed)
    sharp = rng.random(records) < 0.5
    spread = np.where(sharp, 20.0, 200.0)
    x = np.where(sharp, 350.0, 550.0) + rng.normal(0, 1, records) * spread
    y = np.where(sharp, 600.0, 450.0) + rng.normal(0, 1, records) * spread

    def density(at_x, at_y):
        tight = GAUSSIAN.value((at_x - 350.0) ** 2 + (at_y - 600.0) ** 2, 20.0)
        wide = GAUSSIAN.value((at_x - 550.0) ** 2 + (at_y - 450.0) ** 2, 200.0)
        return 0.5 * tight + 0.5 * wide

    return x, y, density


def bandwidths_of(*arguments, **settings):
    return adaptation.adapt_bandwidths(*arguments, **settings).bandwidths


def test_adapt_zero_gives_one_bandwidth():
    x, y, _ = sharp_and_broad(1, 200)
    assert np.all(bandwidths_of(x, y, 1.0, 33.0, adapt=0.0) == 33.0)


@pytest.mark.parametrize("adapt", [0.25, 0.5, 1.0])
def test_bandwidths_follow_the_power_law_of_the_direct_pilot(adapt):
    x, y, _ = sharp_and_broad(2, 400)
    weights = np.random.default_rng(3).uniform(0.5, 2, 400)
    apart = np.square(x[:, None] - x) + np.square(y[:, None] - y)
    pilot = GAUSSIAN.value(apart, 45.0) @ weights
    mean = np.exp((weights * np.log(pilot)).sum() / weights.sum())
    expected = 45.0 * (pilot / mean) ** -adapt
    found = adaptation.adapt_bandwidths(x, y, weights, 45.0, adapt, trim=1e9)
    assert found.bandwidths == pytest.approx(expected, rel=2e-4)
    assert found.pilot == pytest.approx(pilot, rel=2e-4)
    # by the law itself, the weighted geometric mean of the bandwidths is the pilot bandwidth
    middle = np.exp(np.average(np.log(found.bandwidths), weights=weights))
    assert middle == pytest.approx(45.0, rel=1e-9)


@pytest.mark.parametrize("ratio", [0.4, 1.0, 3.0])
@pytest.mark.parametrize("adapt", [0.5, 1.0])
def test_inflation_is_the_integrated_square_of_what_one_more_record_changes(ratio, adapt):
    # K_h - a h^2 lap K_s with a pilot of bandwidth 1, squared and summed on a fine lattice; the
    # Laplacian of a Gaussian of bandwidth s is K_s (r^2 - 2 s^2) / s^4
    across = np.arange(-12, 12, 0.05) * max(ratio, 1.0)
    squared = across**2 + across[:, None] ** 2
    wide = ratio**2 + 1.0
    own = np.exp(-squared / (2 * ratio**2)) / (2 * np.pi * ratio**2)
    change = np.exp(-squared / (2 * wide)) / (2 * np.pi * wide) * (squared - 2 * wide) / wide**2
    expected = np.sum((own - adapt * ratio**2 * change) ** 2) / np.sum(own**2)
    assert adaptation.variance_inflation(np.array([ratio]), adapt, 0.0) == pytest.approx(
        expected, rel=1e-6
    )
    # a lone record's bandwidth follows nothing but itself
    assert adaptation.variance_inflation(np.array([ratio]), adapt, 1.0) == pytest.approx(1.0)


def test_bandwidths_held_by_trim_or_neighbours_do_not_inflate_the_variance():
    x, y, _ = sharp_and_broad(5, 600)
    records = x, y, np.ones(600), 60.0, 0.8
    free = adaptation.adapt_bandwidths(*records, trim=50.0)
    assert free.inflation.max() > 1.3 and free.inflation.min() >= 1.0
    held = adaptation.adapt_bandwidths(*records, trim=1.0)
    assert np.all(held.inflation == 1.0)
    raised = adaptation.adapt_bandwidths(*records, least_bandwidth=1e4)
    assert np.all(raised.inflation == 1.0)


def test_trim_holds_bandwidths_and_counts_those_held():
    x, y, _ = sharp_and_broad(4, 1000)
    free = adaptation.adapt_bandwidths(x, y, 1.0, 30.0, 1.0, trim=1e9)
    held = adaptation.adapt_bandwidths(x, y, 1.0, 30.0, 1.0, trim=1.5)
    assert held.bandwidths.min() == pytest.approx(20.0)
    assert held.bandwidths.max() == pytest.approx(45.0)
    assert held.narrowest == np.count_nonzero(free.bandwidths < 20.0)
    assert held.widest == np.count_nonzero(free.bandwidths > 45.0)


def test_least_records_reaches_the_kth_other_record_by_brute_force():
    x, y, _ = sharp_and_broad(5, 300)
    x[:4], y[:4] = x[0], y[0]
    apart = np.sort(np.hypot(x[:, None] - x, y[:, None] - y), axis=1)
    for count in (1, 3, 5, 299):
        assert adaptation.neighbour_distances(x, y, count) == pytest.approx(apart[:, count])
    assert adaptation.neighbour_distances(x, y, 5000) == pytest.approx(apart[:, -1])
    found = adaptation.adapt_bandwidths(x, y, 1.0, 10.0, 0.5, least_records=5)
    assert np.all(found.bandwidths >= apart[:, 5] * (1 - 1e-12))
    plain = bandwidths_of(x, y, 1.0, 10.0, 0.5)
    assert found.raised == np.count_nonzero(plain < apart[:, 5]) > 0
    assert found.bandwidths == pytest.approx(np.maximum(plain, apart[:, 5]))


def test_least_bandwidth_is_a_floor():
    x, y, _ = sharp_and_broad(6, 300)
    found = bandwidths_of(x, y, 1.0, 10.0, 0.5, least_bandwidth=9.0)
    assert found.min() == 9.0 and found.max() > 9.0


def test_single_and_stacked_records_keep_the_pilot_bandwidth():
    one = bandwidths_of([5.0], [5.0], 1.0, 10.0, 0.5, least_records=3)
    assert one == pytest.approx([10.0])
    stacked = bandwidths_of(np.full(9, 5.0), np.full(9, 5.0), 1.0, 10.0, 0.5)
    assert stacked == pytest.approx(np.full(9, 10.0))


def test_pilot_stays_bounded_where_the_bandwidth_is_tiny_beside_the_extent(monkeypatch):
    monkeypatch.setattr(adaptation, "_MOST_PILOT_PIXELS", 200 * 200)
    x, y, _ = sharp_and_broad(7, 2000)
    found = adaptation.adapt_bandwidths(x, y, 1.0, 2.0, 0.5)
    assert np.all(np.isfinite(found.bandwidths)) and found.pilot.min() > 0


def test_adaptive_error_is_below_the_fixed_one_at_each_ones_best_bandwidth():
    # integrated squared error over 5 patterns of 2,000; each method at the best of a range
    grid = Grid(-100, 1150, 10.0, 125, 135)
    centre_x, centre_y = grid.centres()
    errors = {0.0: [], 0.5: []}
    for bandwidth in (10.0, 16.0, 25.0, 40.0, 64.0):
        for adapt, found in errors.items():
            squared = []
            for seed in range(5):
                x, y, density = sharp_and_broad(100 + seed, 2000)
                widths = bandwidths_of(x, y, 1.0, bandwidth, adapt, trim=10.0)
                estimate = surface.adaptive_surface(x, y, 1 / len(x), widths, grid)
                squared.append(np.square(estimate - density(centre_x, centre_y)).sum())
            found.append(np.mean(squared) * grid.cell_area)
    assert min(errors[0.5]) < 0.8 * min(errors[0.0])


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"pilot_bandwidth": 0.0}, "BANDWIDTH must be above 0; found 0.0"),
        ({"adapt": 1.2}, "ADAPT must lie between 0 and 1; found 1.2"),
        ({"trim": 0.5}, "TRIM must be 1 or more; found 0.5"),
        ({"least_records": -1}, "LEAST_RECORDS must be 0 or more; found -1"),
        ({"weights": [1.0, -1.0]}, "Weights must not be negative"),
        ({"weights": [0.0, 0.0]}, "sum above 0"),
        ({"x": [], "y": [], "weights": []}, "no records"),
    ],
)
def test_settings_out_of_range_are_refused_with_what_was_found(settings, message):
    arguments = {"x": [0.0, 9.0], "y": [0.0, 1.0], "weights": [1.0, 1.0], "pilot_bandwidth": 5.0}
    with pytest.raises(InputError, match=message):
        bandwidths_of(**{**arguments, **settings})
