"""Areas beyond tolerance: what they hold is recounted from the points themselves."""

import numpy as np
import pytest
from steadfield.algorithms.numeric import contrast
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.tolerance import tolerance_areas

GRID = Grid(-2000.0, 2000.0, 100.0, 40, 40)


@pytest.fixture(scope="module")
def raised():
    """A raised disc and a hole that records avoid."""
    generator = np.random.default_rng(1)
    background = generator.uniform(-2000, 2000, (2, 5000))
    records = generator.uniform(-2000, 2000, (2, 900))
    records = records[:, np.hypot(records[0] + 900, records[1] - 700) > 600]
    records = np.hstack([records, generator.normal((800, -600), 200, (80, 2)).T])
    pooled = contrast.pool((*records, None), (*background, None))
    found = contrast.density_contrast(pooled, GRID, 250.0)
    return found, contrast.relabel(found, 99, generator)


def test_areas_are_recounted_from_their_pixels_and_points(raised):
    found, relabelling = raised
    areas = tolerance_areas(found, relabelling, [0.05, 0.02])
    pooled = found.pooled
    rows, columns, _ = GRID.pixels(pooled.x, pooled.y)
    is_record = np.arange(pooled.x.size) < pooled.records
    assert areas.side.size > 4 and areas.everywhere.any() and (areas.side == -1).any()
    for position in range(areas.side.size):
        (inside,) = (own == position + 1 for own in areas.labels if (own == position + 1).any())
        assert areas.area[position] == inside.sum() * 100.0**2
        held = inside[rows, columns]
        assert areas.records[position] == (held & is_record).sum()
        assert areas.background[position] == (held & ~is_record).sum()
        first, second = pooled.totals
        assert areas.expected[position] == pytest.approx(
            areas.background[position] * first / second
        )
        name = "p_raised" if areas.side[position] > 0 else "p_lowered"
        p_values = getattr(relabelling, name + ("_anywhere" if areas.everywhere[position] else ""))
        assert p_values[inside].max() <= areas.level[position]
        assert areas.least_p[position] == p_values[inside].min()
        ratios = np.exp(found.log_ratio[inside])
        farthest = ratios.max() if areas.side[position] > 0 else ratios.min()
        assert areas.ratio[position] == pytest.approx(farthest)
        assert inside[areas.row[position], areas.column[position]]


def test_raised_and_lowered_areas_lie_where_they_were_put(raised):
    areas = tolerance_areas(*raised, [0.05])
    x, y = GRID.x_centres()[areas.column], GRID.y_centres()[areas.row]
    up = areas.everywhere & (areas.side > 0)
    down = areas.everywhere & (areas.side < 0)
    assert up.any() and np.all(np.hypot(x - 800, y + 600)[up] < 400)
    assert down.any() and np.all(np.hypot(x + 900, y - 700)[down] < 600)
    assert np.all(areas.ratio[up] > 1) and np.all(areas.ratio[down] < 1)


def test_ranks_follow_the_records_beyond_expectation(raised):
    areas = tolerance_areas(*raised, [0.1, 0.05])
    for everywhere in (False, True):
        for side in (1, -1):
            for level in (0.1, 0.05):
                own = (areas.everywhere == everywhere) & (areas.side == side)
                own &= areas.level == level
                assert areas.rank[own].tolist() == list(range(1, own.sum() + 1))
                beyond = side * (areas.records - areas.expected)[own]
                assert np.all(np.diff(beyond) <= 0)


def test_nothing_beyond_tolerance_is_no_area():
    x, y = np.random.default_rng(2).normal(0, 700, (2, 300))
    pooled = contrast.pool((x, y, None), (x, y, None))
    found = contrast.density_contrast(pooled, GRID, 300.0)
    relabelling = contrast.relabel(found, 39, np.random.default_rng(3))
    areas = tolerance_areas(found, relabelling, [0.05])
    assert areas.side.size == 0 and areas.labels == []


def test_levels_that_the_relabellings_cannot_reach_are_refused(raised):
    with pytest.raises(InputError, match="at least 199 relabellings"):
        tolerance_areas(*raised, [0.005])
    for level in (0.5, 0.6):
        with pytest.raises(InputError, match=f"below 50 %; found {100 * level:g} %"):
            tolerance_areas(*raised, [level])
