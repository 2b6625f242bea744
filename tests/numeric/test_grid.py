import numpy as np
import pytest
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.grid import Grid, covering


def test_covering_holds_the_extent_and_sits_on_multiples():
    grid = covering((3.2, -7.9, 18.1, 4.4), 2.5, margin=1.0)
    left, bottom, right, top = grid.bounds
    assert left <= 2.2 and bottom <= -8.9 and right >= 19.1 and top >= 5.4
    assert np.allclose(np.array(grid.bounds) % 2.5, 0)


def test_a_point_lies_in_the_pixel_whose_centre_is_nearest():
    grid = Grid(10, 50, 2, 7, 5)
    rng = np.random.default_rng(3)
    x, y = rng.uniform(10, 20, 500), rng.uniform(36, 50, 500)
    rows, columns, inside = grid.pixels(x, y)
    assert inside.all()
    assert np.abs(grid.x_centres()[columns] - x).max() <= 1
    assert np.abs(grid.y_centres()[rows] - y).max() <= 1


def test_points_outside_are_told():
    _, _, inside = Grid(0, 10, 1, 10, 10).pixels([-0.1, 5, 10.0], [5, 5, 5])
    assert inside.tolist() == [False, True, False]


@pytest.mark.parametrize("cell", [0, -1, float("nan")])
def test_a_cell_size_that_is_not_above_zero_is_refused(cell):
    with pytest.raises(InputError, match="Cell size"):
        covering((0, 0, 1, 1), cell)
