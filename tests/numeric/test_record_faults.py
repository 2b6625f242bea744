"""Every kind of fault is found where it was put, and clean practice data raise no alarm."""

import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric import field_faults, record_faults, record_stacks
from steadfield.algorithms.numeric.practice import make_district
from steadfield.algorithms.numeric.record_faults import FAULT, FINE, LOOK, RawRecords


@pytest.fixture(scope="module")
def district():
    return make_district(2, 0.1)


@pytest.fixture
def falls(district):
    return raw(district.falls.x.copy(), district.falls.y.copy())


def raw(x, y, **changes):
    state = np.where(np.isfinite(x) & np.isfinite(y), record_faults.PLACED, record_faults.MISSING)
    return RawRecords(x, y, x, y, changes.pop("state", state), **changes)


def rows_of(check):
    return np.flatnonzero(check.found).tolist()


@pytest.mark.parametrize(
    "layer", ["falls", "residents", "resting_places", "unlit_paths", "icy_paths"]
)
def test_clean_practice_data_raise_no_alarm(district, layer):
    points = getattr(district, layer)
    records = raw(points.x, points.y)
    checks = [
        *record_faults.check_geometry(records),
        record_faults.check_number(records),
        record_stacks.check_stacks(records)[0],
        record_faults.check_rounding(records)[0],
        record_faults.check_boundary(records, district.boundary),
        record_faults.check_far(records),
        record_faults.check_distortion(1.0, 1.0, len(points.x)),
        *field_faults.check_weights(np.ones(len(points.x))),
        field_faults.check_duplicates(records, np.arange(len(points.x))),
        field_faults.check_keys(np.arange(len(points.x))),
        field_faults.check_nulls("month", np.ones(len(points.x))),
    ]
    assert [check.words for check in checks if check.severity != FINE] == []
    assert record_faults.verdict(checks) == "No fault was found."


def test_every_kind_of_missing_place_is_told_apart(falls):
    state = falls.state.copy()
    for rows, kind in (([3], 1), ([5, 6], 2), ([8, 9, 10], 3), ([20], 4)):
        state[rows] = kind
    records = RawRecords(falls.x, falls.y, falls.x, falls.y, state)
    missing, empty, infinite, unplaceable = record_faults.check_geometry(records)
    assert rows_of(missing) == [3] and rows_of(empty) == [5, 6]
    assert rows_of(infinite) == [8, 9, 10] and rows_of(unplaceable) == [20]
    assert all(check.severity == FAULT and check.advice for check in (missing, empty, infinite))
    assert "CRS" in unplaceable.advice
    assert empty.words.startswith("2 of ")


def test_few_records_are_worth_a_look():
    check = record_faults.check_number(raw(np.arange(12.0), np.arange(12.0)))
    assert check.severity == LOOK
    assert "12 records" in check.words


def test_a_default_place_of_unknown_addresses_is_found_among_homes(falls):
    falls.x[::40], falls.y[::40] = falls.x[0], falls.y[0]
    check, sizes = record_stacks.check_stacks(falls)
    assert check.severity == FAULT
    piled = len(falls.x[::40])
    assert set(range(0, len(falls.x), 40)) <= set(rows_of(check))
    assert check.count == sizes[0] >= piled
    assert "1 spot of more than 12" in check.words


def test_flats_are_no_fault_until_the_user_says_how_many_may_live_at_one_door(district):
    residents = raw(district.residents.x, district.residents.y)
    check, sizes = record_stacks.check_stacks(residents)
    assert check.severity == FINE
    assert sizes.max() > 12
    strict, _ = record_stacks.check_stacks(residents, largest=20)
    assert strict.severity == FAULT
    assert strict.found.tolist() == (sizes > 20).tolist()


def test_middle_points_of_areas_are_recognised(district):
    # Every fall moved to the middle of its base unit: 90 spots for about 600 records.
    middle = shapely.centroid(district.units.polygons[district.fall_unit])
    x, y = np.append(shapely.get_x(middle), 0.0), np.append(shapely.get_y(middle), 0.0)
    check, _ = record_stacks.check_stacks(raw(x, y))
    assert check.severity == FAULT
    assert "areas" in check.advice
    _, spot, records = np.unique(x + 1j * y, return_inverse=True, return_counts=True)
    assert check.found.tolist() == (records[spot.reshape(-1)] > 1).tolist() and not check.found[-1]


def test_stack_sizes_count_the_records_on_each_spot():
    x = np.array([1.0, 2.0, 1.0, np.nan, 1.0, 2.0, 7.0])
    sizes = record_stacks.stack_sizes(raw(x, x))
    assert sizes.tolist() == [3, 2, 3, 0, 3, 2, 1]


def test_rounded_records_are_found_with_the_step_on_the_ground(falls):
    rng = np.random.default_rng(4)
    rounded = rng.uniform(size=len(falls.x)) < 0.15
    falls.x[rounded] = 100 * np.round(falls.x[rounded] / 100)
    falls.y[rounded] = 100 * np.round(falls.y[rounded] / 100)
    check, step = record_faults.check_rounding(falls)
    assert (check.severity, step) == (FAULT, pytest.approx(100.0))
    assert np.array_equal(check.found, rounded)
    assert "100 m" in check.words


def test_records_outside_the_boundary_are_found_with_their_distance(falls, district):
    left, _, _, top = district.boundary.bounds
    falls.x[[4, 90]], falls.y[[4, 90]] = left - 250.0, top + 4000.0
    falls.state[7] = record_faults.MISSING
    check = record_faults.check_boundary(falls, district.boundary)
    assert rows_of(check) == [4, 90]
    away = district.boundary.distance(shapely.Point(falls.x[4], falls.y[4]))
    assert f"{away:,.0f} m".replace(",", "\u202f") in check.words


def test_exchanged_coordinates_are_far_away(falls):
    falls.x[13], falls.y[13] = falls.y[13], falls.x[13]
    falls.x[15], falls.y[15] = 0.0, 0.0
    assert rows_of(record_faults.check_far(falls)) == [13, 15]


def test_repeated_records_are_found_but_not_people_who_share_a_home():
    x = np.array([1.0, 1.0, 1.0, 2.0, 1.0, np.nan])
    content = np.array([7, 8, 7, 7, 7, 7])
    check = field_faults.check_duplicates(raw(x, x), content)
    assert rows_of(check) == [2, 4]
    assert check.severity == FAULT
    assert field_faults.check_duplicates(raw(x, x)).severity == FINE


def test_repeated_and_missing_record_numbers_are_found():
    keys = np.array([10, 11, 10, None, 12, None], object)
    check = field_faults.check_keys(keys)
    assert rows_of(check) == [2, 3, 5]
    assert "1 of 6 records have a number that was given before, 2 of 6 records have none" in (
        check.words
    )


def test_each_kind_of_weight_fault_is_found():
    weights = np.ones(40)
    weights[[0, 3]] = np.nan, np.inf
    weights[5], weights[7], weights[9] = -2.0, 0.0, 30.0
    null, negative, zero, dominant = field_faults.check_weights(weights)
    assert (rows_of(null), rows_of(negative)) == ([0, 3], [5])
    assert (rows_of(zero), rows_of(dominant)) == ([7], [9])
    assert [check.severity for check in (null, negative, zero, dominant)] == [
        FAULT,
        FAULT,
        LOOK,
        LOOK,
    ]


def test_missing_values_are_those_that_hold_nothing():
    values = np.array(["a", None, "", "b", np.nan], object)
    assert field_faults.null_mask(values).tolist() == [False, True, True, False, True]
    assert field_faults.null_mask(np.array([1.0, np.nan])).tolist() == [False, True]
    assert field_faults.null_mask(np.array([1, 2])).tolist() == [False, False]
    check = field_faults.check_nulls("ward", values)
    assert "3 of 5" in check.words and "ward" in check.words


def test_area_distortion_beyond_one_percent_is_worth_a_look():
    assert record_faults.check_distortion(0.995, 1.004, 5).severity == FINE
    stretched = record_faults.check_distortion(2.4, 2.9, 5)
    assert stretched.severity == LOOK and "2.9" in stretched.words
    assert record_faults.check_distortion(np.nan, np.nan, 5).severity == LOOK


def test_faults_of_a_record_are_joined_and_fine_ones_left_out():
    found = np.array([True, False, True])
    other = np.array([False, False, True])
    checks = [
        record_faults.Check("outside", FAULT, found, ""),
        record_faults.Check("rounded", LOOK, other, ""),
        record_faults.Check("stacked", FINE, np.ones(3, bool), ""),
    ]
    words = record_faults.faults_in_words(checks, 3)
    assert words.tolist() == ["outside", None, "outside; rounded"]
    assert record_faults.verdict(checks).startswith("2 of 3 records are concerned by faults")


def test_no_records_at_all_raise_no_error():
    records = raw(np.empty(0), np.empty(0))
    assert record_stacks.check_stacks(records)[0].severity == FINE
    assert record_faults.check_rounding(records)[0].severity == FINE
    assert record_faults.check_far(records).severity == FINE
    assert record_faults.check_number(records).severity == LOOK
    inside = record_faults.check_boundary(records, shapely.box(0, 0, 1, 1))
    assert inside.severity == FINE
