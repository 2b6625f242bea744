"""Point records stacked on one spot, beyond what people who share an address explain."""

import numpy as np

from .record_faults import FAULT, FINE, SMALL_NUMBER, Check
from .record_words import of_all, share_words, spots_words, whole
from .words import Words

HOUSE_STACK, CARE_HOME_STACK = 12, 60
STACK_SHARE = 1 / 400
FEW_SPOTS_SHARE = 0.1
CROWDED_SHARE = 0.2

STACK_ADVICE = Words(
    "Look these spots up: a spot that stands for “address unknown” makes a false "
    "peak; leave its records out or place them. A true large home may stay."
)
AREAS_ADVICE = Words(
    "So many records on so few spots look like the middle points of areas. Map "
    "such data by those areas; a density surface or small cells would show the "
    "middle points and not the people."
)


def check_stacks(records, largest=0):
    """Many records on exactly one spot, beyond what a block of flats or a care home explains.

    People who share an address share a place, so stacks as such are no fault. By default a spot is
    too full when it holds more records than the largest of 12, one in 400 of all records and, where
    most records share their spot anyway as in a register of residents, 60, a large care home. When
    a fifth of all records lies on spots of more than 12, or there are ten records to a spot, the
    places are those of areas and not of addresses. Common practice, no source.

    Parameters
    ----------
    records : RawRecords
    largest : int
        The most records that one address may truly have; 0 for the default.

    Returns
    -------
    Check
    sizes : (n,) int array
        Records on the spot of each record, 0 for those without a place.
    """
    sizes = stack_sizes(records)
    placed = sizes[records.placed]
    count = len(placed)
    if count == 0:
        return Check(Words("stacked"), FINE, sizes > 0, Words("No place to look at.")), sizes
    spots = _spots(placed)
    summary = Words(
        "{} records lie on {}; {} share theirs with another.",
        whole(count),
        spots_words(spots),
        share_words(np.mean(placed > 1)),
    )
    crowded = sizes > (largest or HOUSE_STACK)
    if count >= SMALL_NUMBER and (
        spots < FEW_SPOTS_SHARE * count or crowded.sum() > CROWDED_SHARE * count
    ):
        return Check(Words("stacked"), FAULT, sizes > 1, summary, AREAS_ADVICE), sizes
    limit = largest or _usual_limit(placed)
    found = sizes > limit
    if found.any():
        full = _spots(sizes[found])
        words = Words(
            "{} lie on {} of more than {} records each, the fullest with {}. {}",
            of_all(found),
            spots_words(full),
            whole(limit),
            whole(sizes.max()),
            summary,
        )
        return Check(Words("stacked"), FAULT, found, words, STACK_ADVICE), sizes
    words = Words(
        "{} The fullest spot has {}, as homes, flats or a care home may.",
        summary,
        whole(placed.max()),
    )
    return Check(Words("stacked"), FINE, found, words), sizes


def stack_sizes(records):
    """Number of records on the spot of each record, 0 for those without a place, (n,) int array."""
    sizes = np.zeros(len(records.x), np.int64)
    placed = records.placed
    places = np.column_stack([records.stored_x[placed], records.stored_y[placed]])
    if len(places):
        _, inverse, times = np.unique(places, axis=0, return_inverse=True, return_counts=True)
        sizes[placed] = times[inverse.ravel()]
    return sizes


def _spots(sizes):
    """Number of spots behind the stack sizes of records."""
    return int(np.round(np.sum(1.0 / sizes)))


def _usual_limit(sizes):
    """The most records on one spot that homes explain, from the stack sizes of placed records."""
    shared = CARE_HOME_STACK if np.median(sizes) >= 2 else HOUSE_STACK
    return max(shared, int(np.ceil(STACK_SHARE * len(sizes))))
