"""Which cells of a table could give somebody away: the rules of disclosure control.

Terms and rules as in Hundepool et al. (2012), Statistical Disclosure Control, Wiley, and in the
Handbook on Statistical Disclosure Control (2nd edition 2024), sections 4.2.1 and 4.2.2. Wherever
the data leave a doubt the cell counts as unsafe: records without a contributor might all be the
largest contributor's, and a contributor who contributes nothing protects nobody.
"""

import math
from dataclasses import dataclass

import numpy as np

from .errors import InputError

UNKNOWN = -1


@dataclass(frozen=True)
class Rules:
    """Rules that a published cell has to meet.

    Attributes
    ----------
    least_count : int
        Fewest distinct contributors, 2 or more.
    dominance_n : int
        Number of largest contributors that are looked at together; 0 switches the rule off.
    dominance_share : float
        The most they may hold, per cent of the cell's total.
    p_percent : float
        How far, per cent of the largest contribution, the second largest contributor's estimate
        of it must be off; 0 switches the rule off.
    none_is_group : bool
        Whether a share of none tells as much about everybody in a cell as a share of all.
    """

    least_count: int = 10
    dominance_n: int = 0
    dominance_share: float = 85.0
    p_percent: float = 0.0
    none_is_group: bool = False

    def __post_init__(self):
        if self.least_count != int(self.least_count) or self.least_count < 2:
            raise InputError(
                "LEAST_COUNT must be a whole number of 2 or more; found {}. A threshold of 1 "
                "would publish single contributors.",
                self.least_count,
            )
        if self.dominance_n != int(self.dominance_n) or self.dominance_n < 0:
            raise InputError(
                "DOMINANCE_N must be a whole number, 0 for off; found {}.", self.dominance_n
            )
        if self.dominance_n and not 0 < self.dominance_share < 100:
            raise InputError(
                "DOMINANCE_SHARE must lie between 0 and 100 %, without either; found {}.",
                self.dominance_share,
            )
        if not (math.isfinite(self.p_percent) and self.p_percent >= 0):
            raise InputError("P_PERCENT must be 0 (off) or more; found {}.", self.p_percent)


@dataclass(frozen=True)
class Contributions:
    """What stands behind each cell, (cells,) arrays.

    Attributes
    ----------
    records : int
        Number of records.
    contributors : int
        Fewest distinct contributors above zero that the records could come from.
    total : float
        Sum of the contributions.
    largest, second : float
        The two largest contributions; what cannot be attributed is added to the largest.
    leading : float
        Sum of the `dominance_n` largest contributions, reckoned the same way.
    """

    records: np.ndarray
    contributors: np.ndarray
    total: np.ndarray
    largest: np.ndarray
    second: np.ndarray
    leading: np.ndarray


def contributor_codes(values):
    """Number the distinct contributors.

    Parameters
    ----------
    values : (n,) sequence
        Identifiers of any kind; None, NaN and blank text mean that the contributor is unknown.

    Returns
    -------
    (n,) int64 array
        0, 1, ... in order of appearance, and -1 for an unknown contributor.
    """
    values = np.asarray(values)
    if values.dtype.kind in "iub":
        return np.unique(values, return_inverse=True)[1].astype(np.int64).reshape(-1)
    codes = {}
    numbered = np.empty(len(values), np.int64)
    for place, value in enumerate(values.tolist()):
        if value is None or value != value:
            numbered[place] = UNKNOWN
            continue
        if isinstance(value, str):
            value = value.strip()
            if not value:
                numbered[place] = UNKNOWN
                continue
        numbered[place] = codes.setdefault(value, len(codes))
    return numbered


def contributions(cells, cell_count, weights=None, contributors=None, leading=0):
    """Contributors, totals and largest contributions of every cell, in one pass.

    Parameters
    ----------
    cells : (n,) int array
        Cell of each record, 0 to cell_count - 1; negative: outside, not counted.
    cell_count : int
    weights : (n,) float array or None
        What a record contributes, 0 or more; None: 1 each.
    contributors : (n,) int array or None
        Codes as from `contributor_codes`; None: every record is a contributor of its own.
    leading : int
        How many of the largest contributions to sum.

    Returns
    -------
    Contributions

    Raises
    ------
    InputError
        If a weight is negative or not finite: the rules hold for contributions of one sign.
    """
    cells = np.asarray(cells)
    inside = cells >= 0
    if not inside.all():
        cells = cells[inside]
        weights = None if weights is None else np.asarray(weights)[inside]
        contributors = None if contributors is None else np.asarray(contributors)[inside]
    records = np.bincount(cells, minlength=cell_count)
    if weights is None and contributors is None:
        counted = records.astype(float)
        return Contributions(
            records,
            records,
            counted,
            np.minimum(counted, 1.0),
            np.clip(counted - 1.0, 0.0, 1.0),
            np.minimum(counted, leading),
        )
    weights = np.ones(len(cells)) if weights is None else np.asarray(weights, float)
    if len(weights) and not (np.isfinite(weights).all() and weights.min() >= 0):
        bad = int((~np.isfinite(weights) | (weights < 0)).sum())
        raise InputError(
            "{} records have a negative or missing weight; leave them out or correct them, "
            "because the disclosure rules hold for contributions of one sign only.",
            bad,
        )
    total = np.bincount(cells, weights, cell_count)
    unknown = np.zeros(cell_count)
    pair_cells, pair_values = cells, weights
    if contributors is not None:
        contributors = np.asarray(contributors)
        nameless = contributors < 0
        unknown = np.bincount(cells[nameless], weights[nameless], cell_count)
        named = ~nameless
        span = int(contributors.max(initial=0)) + 1
        keys = cells[named].astype(np.int64) * span + contributors[named]
        pairs, pair_of_record = np.unique(keys, return_inverse=True)
        pair_values = np.bincount(pair_of_record.reshape(-1), weights[named], len(pairs))
        pair_cells = pairs // span
    above = pair_values > 0
    pair_cells, pair_values = pair_cells[above], pair_values[above]
    known = np.bincount(pair_cells, minlength=cell_count)
    largest, second, leading_sum = _largest(pair_cells, pair_values, cell_count, leading)
    return Contributions(
        records,
        np.maximum(known, unknown > 0),
        total,
        largest + unknown,
        second,
        leading_sum + (unknown if leading else 0.0),
    )


def _largest(cells, values, cell_count, leading):
    """The largest, the second largest and the sum of the `leading` largest values by cell."""
    order = np.lexsort((-values, cells))
    cells, values = cells[order], values[order]
    first = np.searchsorted(cells, np.arange(cell_count))
    rank = np.arange(len(cells)) - first[cells]
    largest, second = np.zeros(cell_count), np.zeros(cell_count)
    largest[cells[rank == 0]] = values[rank == 0]
    second[cells[rank == 1]] = values[rank == 1]
    front = rank < leading
    return largest, second, np.bincount(cells[front], values[front], cell_count)


def unsafe_totals(behind, rules):
    """Cells whose total may not be published.

    A cell with records is unsafe when contributors < least_count; or the n largest contributors
    hold more than k % of the total ((n,k) dominance); or total - largest - second < p % of the
    largest (p % rule).

    Parameters
    ----------
    behind : Contributions
    rules : Rules

    Returns
    -------
    (cells,) bool array

    References
    ----------
    Handbook on Statistical Disclosure Control (2024), section 4.2.1, formulas 4.1 and 4.2.
    """
    unsafe = behind.contributors < rules.least_count
    if rules.dominance_n:
        unsafe |= 100.0 * behind.leading > rules.dominance_share * behind.total
    if rules.p_percent:
        rest = behind.total - behind.largest - behind.second
        unsafe |= 100.0 * rest < rules.p_percent * behind.largest
    return unsafe & (behind.records > 0)


def unsafe_shares(numerator, rest, rules):
    """Cells whose share, numerator over denominator, may not be published.

    Unsafe when the numerator, or what the denominator has besides it, is above zero and fails the
    rules for a total; or when the numerator is the whole denominator, which tells everybody's
    answer (group disclosure); with `none_is_group` also when the numerator is zero.

    Parameters
    ----------
    numerator, rest : Contributions
        Of the numerator, and of denominator - numerator.
    rules : Rules

    Returns
    -------
    (cells,) bool array
    """
    unsafe = np.zeros(len(numerator.records), bool)
    for part in (numerator, rest):
        unsafe |= (part.total > 0) & unsafe_totals(part, rules)
    occupied = numerator.records > 0
    unsafe |= occupied & (rest.total <= 0)
    if rules.none_is_group:
        unsafe |= occupied & (numerator.total <= 0)
    return unsafe


def share_parts(weights, numerator, count):
    """Split every record's weight into its numerator and the rest.

    Parameters
    ----------
    weights : (n,) float array or None
        None: 1 each.
    numerator : (n,) float array
    count : int
        Number of records.

    Returns
    -------
    numerator, rest : (n,) float arrays

    Raises
    ------
    InputError
        If a numerator is missing, negative or above the record's weight.
    """
    numerator = np.asarray(numerator, float)
    weights = np.ones(count) if weights is None else np.asarray(weights, float)
    rest = weights - numerator
    bad = ~np.isfinite(numerator) | (numerator < 0) | (rest < -1e-9 * np.maximum(weights, 1.0))
    if bad.any():
        raise InputError(
            "NUMERATOR: {} records hold a missing value, one below 0 or one above the "
            "record's weight (1 without WEIGHT); a share needs 0 ≤ numerator ≤ weight.",
            int(bad.sum()),
        )
    return numerator, np.maximum(rest, 0.0)


def protection_range(behind, rules):
    """The values of a withheld cell that no outsider may be able to rule out.

    From what the cell would hold with one contributor of its average to what it would hold with
    `least_count` of them (for plain counts: 1 to least_count); widened to total +- the upper
    protection level of the dominance and p % rules, (100/k)(x_1 + ... + x_n) - X and
    (p/100) x_1 - (X - x_1 - x_2), the lower level being set equal to the upper.

    Parameters
    ----------
    behind : Contributions
    rules : Rules

    Returns
    -------
    lower, upper : (cells,) float arrays
        In the unit of the totals.

    References
    ----------
    Handbook on Statistical Disclosure Control (2024), table "Upper protection levels" of section
    4.2.2. The range for the least count is this project's: the Handbook's level of zero for that
    rule prevents exact disclosure only.
    """
    some = behind.contributors > 0
    everyone = behind.contributors.sum()
    typical = behind.total.sum() / everyone if everyone else 1.0
    mean = np.divide(behind.total, behind.contributors, out=np.full(len(some), typical), where=some)
    lower = np.where(some, mean, 0.0)
    upper = rules.least_count * mean
    level = np.zeros(len(some))
    if rules.dominance_n:
        level = np.maximum(level, 100.0 / rules.dominance_share * behind.leading - behind.total)
    if rules.p_percent:
        rest = behind.total - behind.largest - behind.second
        level = np.maximum(level, rules.p_percent / 100.0 * behind.largest - rest)
    level = np.where(level > 0, level, 0.0)
    lower = np.where(level > 0, np.minimum(lower, behind.total - level), lower)
    upper = np.where(level > 0, np.maximum(upper, behind.total + level), upper)
    return np.maximum(lower, 0.0), upper
