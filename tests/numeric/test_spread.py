import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric import spread
from steadfield.algorithms.numeric.errors import InputError


def units():
    return np.array(
        [
            shapely.box(0, 0, 100, 50),
            shapely.MultiPolygon([shapely.box(200, 0, 230, 30), shapely.box(300, 0, 330, 30)]),
            shapely.box(500, 500, 500.5, 500.5),
        ]
    )


def test_counts_keep_their_sum_and_stay_inside_their_polygon():
    x, y, (count, total), owner = spread.spread_evenly(
        units(), [np.array([7.0, 3.0, 5.0]), np.array([70.0, 0.0, 50.0])], 10.0
    )
    np.testing.assert_allclose(np.bincount(owner, weights=count), [7, 3, 5], rtol=1e-12)
    np.testing.assert_allclose(np.bincount(owner, weights=total), [70, 0, 50], rtol=1e-12)
    assert shapely.contains_xy(units()[owner], x, y).all()
    # 10 x 5 squares of the lattice, twice 3 x 3, and one point for what is smaller than a square.
    np.testing.assert_array_equal(np.bincount(owner), [50, 18, 1])


def test_area_samples_sum_to_the_area_and_follow_its_shape():
    area = shapely.Point(0, 0).buffer(100, quad_segs=64).difference(shapely.box(-20, -20, 20, 20))
    x, y, share = spread.area_samples(area, 2.0)
    assert share.sum() == pytest.approx(area.area, rel=1e-12)
    assert shapely.contains_xy(area, x, y).all()
    east = shapely.intersection(area, shapely.box(30, -200, 200, 200)).area
    assert share[x > 30].sum() == pytest.approx(east, rel=0.02)


def test_an_area_smaller_than_a_square_has_one_sample():
    x, y, share = spread.area_samples(shapely.box(1, 1, 2, 2), 50.0)
    assert len(x) == 1 and share[0] == 1 and 1 < x[0] < 2 and 1 < y[0] < 2


def test_too_many_samples_are_refused():
    with pytest.raises(InputError, match="larger cells"):
        spread.lattice_inside(shapely.box(0, 0, 1e6, 1e6), 1.0)
