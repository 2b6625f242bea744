"""Groups come in the order a reader expects."""

import numpy as np
from steadfield.algorithms.numeric.grouping import group_name, in_order, rows_by_group

GROUPS = np.array(["10", "b", "9", None, "a", "9", "10", ""], object)


def test_missing_values_form_no_group():
    rows = rows_by_group(GROUPS)
    assert {value: found.tolist() for value, found in rows.items()} == {
        "10": [0, 6],
        "b": [1],
        "9": [2, 5],
        "a": [4],
    }


def test_numbers_go_by_size_before_words_by_letter():
    assert in_order(rows_by_group(GROUPS)) == ["9", "10", "a", "b"]
    assert in_order(rows_by_group(np.array([2.5, 10.0, np.nan, 1.0]))) == [1.0, 2.5, 10.0]


def test_another_field_orders_groups_by_its_middle_value():
    # Middle values: 10 -> 3 (of 3 and 8), b -> 7, 9 -> 1 (of 1 and 90), a has none.
    order = np.array([3.0, 7.0, 1.0, 5.0, np.nan, 90.0, 8.0, 0.0])
    assert in_order(rows_by_group(GROUPS), order) == ["9", "10", "b", "a"]


def test_dates_as_text_order_groups_by_time():
    groups = np.array(["late", "early"], object)
    dates = np.array(["2023-11-02", "2023-02-14"], object)
    assert in_order(rows_by_group(groups), dates) == ["early", "late"]


def test_whole_numbers_are_named_without_decimals():
    assert [group_name(value) for value in (3.0, 3.5, np.int64(4), "x")] == ["3", "3.5", "4", "x"]
