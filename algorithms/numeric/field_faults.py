"""Faults in the fields of point records: repeats, record numbers, weights and missing values."""

import numpy as np

from .record_faults import FAULT, FINE, LOOK, SMALL_NUMBER, Check
from .record_words import of_all, share_words
from .words import Words

DOMINANT_SHARE = 0.1


def check_duplicates(records, content=None):
    """Records that repeat another one, place and contents alike.

    Parameters
    ----------
    records : RawRecords
    content : (n,) int array, optional
        A number for each distinct set of field values, the record's own number included. Without it
        nothing can be told from flats, where people share a place, and nothing is reported.

    Returns
    -------
    Check
        The first of each set of duplicates is not among those found.
    """
    found = np.zeros(len(records.x), bool)
    if content is None:
        return Check(
            Words("duplicate"), FINE, found, Words("Without fields, duplicates cannot be told.")
        )
    placed = np.flatnonzero(records.placed)
    rows = np.column_stack([records.stored_x, records.stored_y, content])[placed]
    _, first, inverse = np.unique(rows, axis=0, return_index=True, return_inverse=True)
    repeated = np.arange(len(placed)) != first[inverse.ravel()]
    found[placed[repeated]] = True
    if not found.any():
        return Check(
            Words("duplicate"),
            FINE,
            found,
            Words("No record repeats another in place and all fields."),
        )
    return Check(
        Words("duplicate"),
        FAULT,
        found,
        Words(
            "{} repeat another record, with the same place and the same value in every field.",
            of_all(found),
        ),
        Words("Most likely a file was loaded twice; remove the repeats, which would count double."),
    )


def check_keys(keys):
    """Record numbers that were given twice or are missing.

    Parameters
    ----------
    keys : (n,) array
        Of comparable values; None or NaN where missing.

    Returns
    -------
    Check
        All but the first of each repeated number, and those without one.
    """
    missing = null_mask(keys)
    labels = np.array([str(key) for key in keys], object)
    _, first, inverse = np.unique(labels.astype(str), return_index=True, return_inverse=True)
    repeated = (np.arange(len(labels)) != first[inverse.ravel()]) & ~missing
    found = repeated | missing
    key = Words("record number")
    if not found.any():
        return Check(key, FINE, found, Words("Every record has a number of its own."))
    return Check(
        key,
        FAULT,
        found,
        Words(
            "{} have a number that was given before, {} have none.",
            of_all(repeated),
            of_all(missing),
        ),
        Words("Find out whether a record was loaded twice or two records were given one number."),
    )


def check_weights(weights):
    """Weights that are null, negative, zero, or carried by one record.

    Parameters
    ----------
    weights : (n,) float array
        NaN for null and for what is not a number.

    Returns
    -------
    list of Check
    """
    known = np.isfinite(weights)
    total = weights[known & (weights > 0)].sum()
    with np.errstate(invalid="ignore"):
        negative, zero = known & (weights < 0), weights == 0
        dominant = known & (weights > DOMINANT_SHARE * total) & (known.sum() >= SMALL_NUMBER)
    return [
        _weight_check(
            Words("null weight"),
            FAULT,
            ~known,
            Words("{} have no weight or one that is not a number."),
            Words("Find the weight, or give 1 where a record counts once. They are left out."),
        ),
        _weight_check(
            Words("negative weight"),
            FAULT,
            negative,
            Words("{} have a negative weight."),
            Words("A weight is a number of events or people; correct it. They are left out."),
        ),
        _weight_check(
            Words("zero weight"),
            LOOK,
            zero,
            Words("{} have the weight 0."),
            Words("They count for nothing; make sure that 0 does not stand for “unknown”."),
        ),
        _weight_check(
            Words("dominant weight"),
            LOOK,
            dominant,
            Words("{} have more than {} of the total weight each."),
            Words("A map of this weight shows these records and little else; check the value."),
            share_words(DOMINANT_SHARE),
        ),
    ]


def check_nulls(name, values):
    """Missing values of a field.

    Parameters
    ----------
    name : str
    values : (n,) array

    Returns
    -------
    Check
    """
    found = null_mask(values)
    key = Words("null {}", name)
    if not found.any():
        return Check(key, FINE, found, Words("The field {} has a value in every record.", name))
    share = found.mean()
    return Check(
        key,
        FAULT,
        found,
        Words(
            "{} have no value in the field {} ({} of all).", of_all(found), name, share_words(share)
        ),
        Words(
            "Records without a group form no group of their own; complete them or count them apart."
        ),
    )


def null_mask(values):
    """Which values are missing: None, NaN or an empty text, (n,) bool array."""
    values = np.asarray(values)
    if values.dtype != object:
        return np.isnan(values) if values.dtype.kind == "f" else np.zeros(len(values), bool)
    return np.array([value is None or value != value or value == "" for value in values], bool)


def _weight_check(key, severity, found, template, advice, *values):
    if not found.any():
        return Check(key, FINE, found, template.filled(Words("No records"), *values))
    return Check(key, severity, found, template.filled(of_all(found), *values), advice)
