"""Records by the value of a field, the groups in an order a reader expects."""

import numpy as np

from .field_faults import null_mask


def rows_by_group(values):
    """Rows of each distinct value that is not missing.

    Parameters
    ----------
    values : (n,) array

    Returns
    -------
    dict of value to (m,) int array
    """
    rows_of = {}
    for row in np.flatnonzero(~null_mask(values)):
        rows_of.setdefault(values[row], []).append(row)
    return {value: np.array(rows) for value, rows in rows_of.items()}


def in_order(rows_of, order=None):
    """Group values in order: by the middle value of another field, else by themselves.

    Numbers go by size, before words by letter (dates in ISO form go by time). A group whose records
    have no value in the other field comes last.

    Parameters
    ----------
    rows_of : dict of value to (m,) int array
    order : (n,) array, optional
        The other field, of all records.

    Returns
    -------
    list of values
    """
    if order is None:
        return sorted(rows_of, key=reading_order)
    known = ~null_mask(order)

    def key(value):
        held = [order[row] for row in rows_of[value] if known[row]]
        if not held:
            return 2, (0, 0.0, ""), reading_order(value)
        middle = sorted(map(reading_order, held))[(len(held) - 1) // 2]
        return 1, middle, reading_order(value)

    return sorted(rows_of, key=key)


def reading_order(value):
    """Sort key: numbers by size, then words by letter."""
    try:
        return 0, float(value), ""
    except ValueError:
        return 1, 0.0, str(value)


def group_name(value):
    """A group's value in words, whole numbers without decimals."""
    whole = isinstance(value, (float, np.floating)) and float(value).is_integer()
    return str(int(value)) if whole else str(value)
