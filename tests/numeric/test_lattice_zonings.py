import math

import numpy as np
import pytest
from steadfield.algorithms.numeric import hexagons, lattice_zonings
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.lattice_zonings import Tiling
from steadfield.algorithms.numeric.zone_statistics import morans_i

EXTENT = (-500.0, -300.0, 400.0, 700.0)
SHAPES = pytest.mark.parametrize("shape", ["hexagon", "square"])


def points(seed, number):
    generator = np.random.default_rng(seed)
    left, bottom, right, top = EXTENT
    return generator.uniform(left, right, number), generator.uniform(bottom, top, number)


def cells_by_definition(tiling, x, y):
    if tiling.shape == "hexagon":
        return hexagons.hexagon_cells(x, y, tiling.size, "pointy", tiling.origin, tiling.angle)
    return hexagons.square_cells(x, y, tiling.size, tiling.origin, tiling.angle)


@SHAPES
@pytest.mark.parametrize("rotate", [False, True])
def test_dense_numbers_name_the_same_cells_as_cube_rounding_and_floor(shape, rotate):
    generator = np.random.default_rng(2)
    x, y = points(1, 70_000)
    for size in (11.0, 90.0, 5000.0):
        tiling = lattice_zonings.random_tiling(shape, size, rotate, generator)
        block = lattice_zonings.cell_block(tiling, EXTENT)
        number = lattice_zonings.cell_numbers(block, x, y)
        assert number.min() >= 0 and number.max() < block.cells
        column, row = cells_by_definition(tiling, x, y)
        expected = (row - block.first_row) * block.columns + column - block.first_column
        np.testing.assert_array_equal(number, expected)


def test_centres_and_points_just_beside_edges_are_numbered_right():
    tiling = Tiling("hexagon", 10.0, (3.0, -4.0), 0.0)
    block = lattice_zonings.cell_block(tiling, (-100, -100, 100, 100))
    reach = np.arange(-5, 6)
    q, r = (part.ravel() for part in np.meshgrid(reach, reach))
    expected = (r - block.first_row) * block.columns + q - block.first_column
    x, y = hexagons.hexagon_centres(q, r, 10.0, "pointy", (3.0, -4.0))
    # From the centre out to just before each corner and each side's middle.
    for direction in np.arange(12) * math.pi / 6:
        reach_here = 10 / math.sqrt(3) if round(direction / (math.pi / 6)) % 2 else 5.0
        for share in (0.0, 1e-9, 0.5, 1 - 1e-9):
            number = lattice_zonings.cell_numbers(
                block,
                x + share * reach_here * math.cos(direction),
                y + share * reach_here * math.sin(direction),
            )
            np.testing.assert_array_equal(number, expected)


@SHAPES
def test_a_place_falls_anywhere_in_its_cell_with_equal_chance(shape):
    generator = np.random.default_rng(11)
    number, inside, directions = 4000, 0, np.zeros(2)
    for _ in range(number):
        tiling = lattice_zonings.random_tiling(shape, 2.0, True, generator)
        column, row = cells_by_definition(tiling, np.array([7.3]), np.array([-2.2]))
        if shape == "hexagon":
            centre = hexagons.hexagon_centres(
                column, row, 2.0, "pointy", tiling.origin, tiling.angle
            )
        else:
            centre = hexagons.square_centres(column, row, 2.0, tiling.origin, tiling.angle)
        step = np.array([7.3 - centre[0][0], -2.2 - centre[1][0]])
        inside += np.hypot(*step) < 1.0
        directions += step
    # Share of a regular hexagon, or square, that its inscribed circle takes: pi/(2 sqrt 3), pi/4.
    share = math.pi / (2 * math.sqrt(3)) if shape == "hexagon" else math.pi / 4
    assert abs(inside / number - share) < 4 * math.sqrt(share * (1 - share) / number)
    assert np.abs(directions / number).max() < 4 / math.sqrt(number)


def test_without_rotation_the_tiling_stays_upright():
    tiling = lattice_zonings.random_tiling("square", 5.0, False, np.random.default_rng(1))
    assert tiling.angle == 0
    assert min(tiling.origin) >= 0 and max(tiling.origin) < 5


@SHAPES
def test_morans_i_over_the_block_agrees_with_pairs_of_named_neighbours(shape):
    generator = np.random.default_rng(3)
    tiling = lattice_zonings.random_tiling(shape, 130.0, True, generator)
    block = lattice_zonings.cell_block(tiling, EXTENT)
    value = generator.normal(size=block.cells)
    value[generator.random(block.cells) < 0.3] = np.nan
    sides = np.array([(1, 0), (0, 1), (-1, 0), (0, -1)])
    neighbours = hexagons.HEXAGON_NEIGHBOURS if shape == "hexagon" else sides
    pairs = set()
    for row in range(block.rows):
        for column in range(block.columns):
            for along, down in neighbours.tolist():
                if 0 <= row + down < block.rows and 0 <= column + along < block.columns:
                    here = row * block.columns + column
                    there = (row + down) * block.columns + column + along
                    pairs.add((min(here, there), max(here, there)))
    i, j = np.array(sorted(pairs)).T
    expected = morans_i(value, i, j)
    assert lattice_zonings.lattice_morans_i(value, block) == pytest.approx(expected, rel=1e-12)


def test_morans_i_is_missing_without_spread_or_values():
    block = lattice_zonings.cell_block(Tiling("hexagon", 130.0, (0.0, 0.0), 0.0), EXTENT)
    assert math.isnan(lattice_zonings.lattice_morans_i(np.full(block.cells, 0.1), block))
    assert math.isnan(lattice_zonings.lattice_morans_i(np.full(block.cells, np.nan), block))


def test_an_unknown_shape_is_refused():
    with pytest.raises(InputError, match="triangle"):
        lattice_zonings.random_tiling("triangle", 5.0, True, np.random.default_rng(1))
