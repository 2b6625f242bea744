"""Contributors behind a safe surface, recounted by exact sums."""

import numpy as np
import pytest
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.microaggregation import Groups
from steadfield.algorithms.numeric.safe_surface import FAINT, effective_behind, safe_surface
from steadfield.algorithms.numeric.surface import adaptive_surface, direct_surface

GRID = Grid(0, 8000, 50, 160, 160)
LEAST = 10
# near FAINT the surfaces that the count is worked out from are known to about a hundredth
CLOSE = 0.99


def exactly_behind(groups, widths):
    """Kish's (sum k W)^2 / sum k^2 S at every pixel, group by group and pixel by pixel."""
    total = direct_surface(groups.x, groups.y, groups.total, widths, GRID)
    # the square of a Gaussian kernel is a Gaussian, narrower by the root of 2
    masses = groups.squares / (4 * np.pi * widths**2)
    squares = direct_surface(groups.x, groups.y, masses, widths / np.sqrt(2), GRID)
    return np.divide(total**2, squares, out=np.zeros(GRID.shape), where=squares > 1e-200)


@pytest.mark.parametrize(("seed", "east"), [(6, 2200), (14, 1500), (31, 2200)])
def test_no_value_is_shown_where_fewer_contributors_stand(seed, east):
    # a dozen neighbours, and ten people who are both in the one and the other of two loose,
    # light groups: each of these holds 5 effective contributors
    rng = np.random.default_rng(seed)
    places = np.concatenate(
        [
            rng.normal((2500, 2500), 60, (12, 2)),
            rng.normal((2500 + east, 2500 + east / 2), 700, (10, 2)),
            rng.normal((1500, 6500), 700, (10, 2)),
        ]
    )
    people = np.r_[:12, 12:22, 12:22]
    weights = np.r_[np.ones(12), np.full(20, 0.1)]
    made = safe_surface(*places.T, LEAST, 150.0, GRID, np.random.default_rng(1), weights, people)
    valued = np.isfinite(made.density) & (made.density > 0)
    assert made.groups.effective().min() < LEAST
    assert valued.sum() > 100 and made.refused > 100
    assert exactly_behind(made.groups, made.bandwidths)[valued].min() >= LEAST * CLOSE


@pytest.mark.parametrize("crowd", [1, 2, 20])
def test_effective_contributors_are_never_overstated_where_a_value_is_kept(crowd):
    rng = np.random.default_rng(crowd)
    x, y = np.r_[rng.normal(2000, 150, crowd), 4000.0], np.r_[rng.normal(2500, 150, crowd), 4000.0]
    total, widths = np.r_[np.full(crowd, 12.0), 1.0], np.r_[np.full(crowd, 120.0), 1200.0]
    squares = np.r_[np.full(crowd, 12.0), 1 / 3]
    groups = Groups(np.empty(0, int), x, y, total, squares, widths, np.full(crowd + 1, 12))
    density = adaptive_surface(x, y, total, widths, GRID)
    found = effective_behind(groups, widths, density, GRID)
    kept = density > FAINT * density.max()
    exact = exactly_behind(groups, widths)
    # below LEAST a value is withheld, so what matters is on which side of it a pixel is
    assert not (kept & (found >= LEAST) & (exact < LEAST * CLOSE)).any()
    assert (kept & (found < LEAST)).any()


def test_the_tail_of_a_group_has_the_contributors_of_the_group():
    groups = Groups(
        np.empty(0, int), *np.array([[4000.0], [4000.0], [12.0], [12.0], [300.0]]), np.array([12])
    )
    widths = np.array([300.0])
    density = adaptive_surface(groups.x, groups.y, groups.total, widths, GRID)
    found = effective_behind(groups, widths, density, GRID)
    kept = density > FAINT * density.max()
    assert kept.sum() > 1500
    assert found[kept] == pytest.approx(12.0, rel=1e-3)
