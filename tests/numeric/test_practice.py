"""The practice district: what must hold for every seed, and for a large district."""

import dataclasses

import numpy as np
import pytest
import shapely
from scipy.sparse.csgraph import connected_components
from steadfield.algorithms.numeric.errors import CancelledError, InputError
from steadfield.algorithms.numeric.grid import covering
from steadfield.algorithms.numeric.practice import WARD_COUNT, make_district
from steadfield.algorithms.numeric.practice_units import shared_borders

SMALL = 0.1


@pytest.fixture(scope="module", params=[0, 119])
def small(request):
    return make_district(request.param, SMALL)


@pytest.fixture(scope="module")
def large():
    """A third of the full district: enough people for their numbers to be judged."""
    return make_district(1, 1 / 3)


def every_array(thing):
    """All arrays and geometries of nested dataclasses, geometries as bytes."""
    for field in dataclasses.fields(thing):
        value = getattr(thing, field.name)
        if dataclasses.is_dataclass(value):
            yield from every_array(value)
        elif isinstance(value, shapely.Geometry) or (
            isinstance(value, np.ndarray) and value.dtype == object
        ):
            yield field.name, shapely.to_wkb(value)
        elif isinstance(value, np.ndarray):
            yield field.name, value.tobytes()


def test_the_same_seed_gives_the_same_district_to_the_bit():
    first, second = make_district(5, 0.1), make_district(5, 0.1)
    for (name, one), (_, other) in zip(every_array(first), every_array(second)):
        assert np.array_equal(one, other), name


def test_another_seed_gives_another_district(small):
    other = make_district(small.seed + 77, 0.1)
    assert not small.boundary.equals(other.boundary)


def test_base_units_tile_the_district_exactly(small):
    units = small.units.polygons
    assert shapely.is_valid(units).all()
    assert set(shapely.get_type_id(units)) == {shapely.GeometryType.POLYGON}
    # Areas add up to the whole, and so does their union: neither gap nor overlap.
    assert shapely.area(units).sum() == pytest.approx(small.boundary.area, rel=1e-12)
    assert shapely.union_all(units).area == pytest.approx(small.boundary.area, rel=1e-12)
    assert shapely.union_all(units).symmetric_difference(small.boundary).area < 1e-3


def test_wards_are_connected_and_made_of_whole_units(small):
    links = shared_borders(small.units.polygons)
    for number in range(WARD_COUNT):
        members = np.flatnonzero(small.units.ward == number)
        assert len(members) >= 1
        assert connected_components(links[members][:, members], directed=False)[0] == 1
        united = shapely.union_all(small.units.polygons[members])
        assert united.symmetric_difference(small.wards.polygons[number]).area < 1e-3


def test_wards_stay_on_one_bank_of_the_river(small):
    banks = shapely.get_parts(shapely.difference(small.boundary, small.river))
    banks = banks[np.argsort(shapely.area(banks))[-2:]]
    dry = shapely.difference(small.wards.polygons, small.river)
    share = shapely.area(shapely.intersection(dry[:, None], banks)) / shapely.area(dry)[:, None]
    assert (share.max(axis=1) > 0.99).all()


def test_counts_of_units_and_wards_are_those_of_the_points(small):
    for x, y, unit, counts, ward_counts in (
        (
            small.residents.x,
            small.residents.y,
            small.resident_unit,
            small.units.residents,
            small.wards.residents,
        ),
        (small.falls.x, small.falls.y, small.fall_unit, small.units.falls, small.wards.falls),
    ):
        held = shapely.intersects(small.units.polygons[unit], shapely.points(x, y))
        assert held.all()
        assert np.array_equal(np.bincount(unit, minlength=len(counts)), counts)
        assert np.array_equal(np.bincount(small.units.ward, counts, WARD_COUNT), ward_counts)


def test_nobody_lives_in_the_river_or_outside(small):
    homes = shapely.points(small.residents.x, small.residents.y)
    assert not shapely.intersects(small.river, homes).any()
    assert shapely.intersects(small.boundary, homes).all()


def test_the_small_ward_has_the_highest_rate_but_the_base_risk(small):
    rate = small.wards.falls / small.wards.residents
    assert np.argmax(rate) == small.wards.small
    assert np.argmin(small.wards.residents) == small.wards.small
    inside = small.units.ward == small.wards.small
    assert small.units.true_risk[inside] == pytest.approx(small.risk.base, rel=1e-6)


def test_a_fall_belongs_to_the_household_of_its_resident(small):
    assert np.array_equal(small.residents.household[small.falls.resident], small.falls.household)
    assert np.array_equal(small.residents.age_band[small.falls.resident], small.falls.age_band)
    at_home = ~small.falls.outdoors
    who = small.falls.resident[at_home]
    assert np.array_equal(small.falls.x[at_home], small.residents.x[who])
    assert np.unique(small.falls.household).size < len(small.falls.household)


def test_numbers_are_as_announced(large):
    assert len(large.falls.x) == pytest.approx(6000 / 3, rel=0.07)
    assert len(large.residents.x) == pytest.approx(90000 / 3, rel=0.03)
    assert len(large.units.polygons) == 900 / 3
    assert len(large.wards.names) == len(set(large.wards.names)) == 14
    area = shapely.area(large.units.polygons)
    assert np.quantile(area, 0.95) > 25 * np.quantile(area, 0.05)
    doors = np.column_stack([large.residents.x, large.residents.y])
    assert np.unique(doors, axis=0, return_counts=True)[1].max() > 20


def test_falls_follow_the_true_risk(large):
    # A household factor of variance 1/2 makes a sum of falls vary more than a Poisson one: by
    # sum of squared household means / 2, under 15 % here.
    risk = large.risk.at(large.residents.x, large.residents.y)
    fell = np.bincount(large.falls.resident, minlength=len(risk))
    marsh = large.units.ward[large.resident_unit] == large.wards.small
    for factor_from, factor_to in ((0.99, 1.05), (1.5, 3.0)):
        held = (
            (risk >= factor_from * large.risk.base) & (risk < factor_to * large.risk.base) & ~marsh
        )
        expected = risk[held].sum()
        assert held.sum() > 300
        assert abs(fell[held].sum() - expected) < 3.5 * np.sqrt(1.15 * expected)


def test_wards_dilute_the_straddling_area(large):
    risk = large.risk
    away = np.hypot(large.residents.x - risk.x[1], large.residents.y - risk.y[1])
    ward = large.units.ward[large.resident_unit]
    share = np.bincount(ward[away < risk.radius[1]], minlength=14) / np.sum(away < risk.radius[1])
    assert (share[large.wards.straddled] > 0.3).all()
    true_rate = np.bincount(ward, risk.at(large.residents.x, large.residents.y), 14)
    true_rate /= large.wards.residents
    # The area itself doubles the risk; a reader of the ward table would see less than an eighth.
    assert (true_rate[large.wards.straddled] < 1.125 * risk.base).all()
    assert true_rate[large.wards.contained] > 1.1 * risk.base


def test_the_risk_grid_agrees_with_the_risk_at_places(small):
    grid = covering(small.boundary.bounds, 250.0)
    surface = small.risk.on(grid)
    assert surface.shape == grid.shape
    x, y = grid.centres()
    assert surface[3, 5] == small.risk.at(x[3, 5], y[3, 5])
    middle = small.risk.at(small.risk.x, small.risk.y)
    assert middle == pytest.approx(small.risk.base * small.risk.factor, rel=1e-9)


def test_cancelling_stops_the_making():
    def cancel(share):
        if share > 0.2:
            raise CancelledError

    with pytest.raises(CancelledError):
        make_district(1, 0.1, cancel)


@pytest.mark.parametrize(
    ("seed", "size", "name"), [(-1, 1.0, "SEED"), (1, 0.09, "SIZE"), (1, 2.0, "SIZE")]
)
def test_settings_out_of_range_are_named(seed, size, name):
    with pytest.raises(InputError, match=name):
        make_district(seed, size)
