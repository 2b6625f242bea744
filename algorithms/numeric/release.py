"""One safe release from confidential records: cells to published values, by one of five methods.

How to release, and what comes of it, is said in `release_plan`.
"""

import secrets
from dataclasses import replace

import numpy as np

from .errors import InputError
from .merging import merge_cells
from .noise import (
    bounded_contributions,
    geometric_noise,
    not_below_zero,
    rehearsal_source,
    system_source,
)
from .outsider import target_values
from .progress import part, silent
from .publication import table_of
from .release_plan import CONTROLLED, MERGE, NOISE, ROUND, Release
from .roundedtotals import rounding_bounds, totals_that_tell
from .rounding import controlled_rounding, keyed_uniforms, random_rounding
from .withholding import complementary_withholding

# A total of n cells tells only where nearly all n + 1 figures were rounded the same way, which has
# a chance of at most ((base + n - 1) / (n + 1) / base)^(n + 1): below 1e-5 beyond so many cells.
FEW_CELLS = 16
LEFT_OUT_ANYWAY = 0.1


def release(records, q, r, region_count, plan, progress=silent, apart=None):
    """Make the release.

    Parameters
    ----------
    records : release_plan.Records
    q, r : (cells,) int arrays
        Axial coordinates of the tiling.
    region_count : int
    plan : release_plan.Plan
    progress : callable
    apart : (cells,) bool array or None
        Cells that are merged with none.

    Returns
    -------
    release_plan.Release
    """
    secret = secrets.randbits(128) if plan.seed is None else plan.seed
    rng = np.random.default_rng(np.random.SeedSequence(secret))
    if plan.method == NOISE:
        return _noisy(records, len(q), region_count, plan, rng, progress)
    zones, failed = np.arange(len(q)), np.zeros(len(q), bool)
    if plan.method == MERGE:
        zones, failed = _merged(records, q, r, plan, rng, part(progress, 0.0, 0.4), apart)
        progress = part(progress, 0.4, 1.0)
    count = int(zones.max(initial=-1)) + 1
    of_record = np.where(records.cells >= 0, zones[records.cells], -1)
    table = table_of(
        of_record, count, plan.rules, records.weights, records.contributors, records.numerator,
        records.regions, plan.region_totals, plan.grand_total,
    )  # fmt: skip
    behind = table.behind.spread(table.cells, count)
    rounded = plan.method in (ROUND, CONTROLLED)
    unsafe = _not_protected_by_rounding(table, plan) if rounded else table.unsafe
    published, complementary = ~unsafe, np.zeros(len(unsafe), bool)
    if (plan.region_totals or plan.grand_total) and (unsafe.any() or not rounded):
        fixed = np.arange(len(unsafe)) >= (len(table.cells) if plan.totals_stand else len(unsafe))
        # rounding hides the pieces that a border cuts off; see _totals_to_leave_out
        targets = table.targets.only_sums() if rounded else table.targets
        withheld = complementary_withholding(
            table.sums, targets, unsafe, table.records.astype(float), fixed, rng,
            part(progress, 0.0, 0.9),
        )  # fmt: skip
        published, complementary = withheld.published, withheld.complementary
    values = table.sums.totals()
    if rounded:
        values, published = _rounded(table, values, published, plan, q, r, secret, rng, progress)
    empty = 0.0 if plan.show_empty or rounded else np.nan
    shown = np.where(published, values, np.nan)
    made = Release(
        zones,
        np.array([_of_zones(table, one, failed, empty) for one in shown]),
        _regions(table, shown, region_count, plan),
        shown[:, -1] if table.grand else np.full(len(shown), np.nan),
        behind.unsafe,
        table.spread(complementary, count, False),
        behind,
    )
    return _apart_where_withheld(made, records, plan) if plan.method == MERGE else made


def _apart_where_withheld(made, records, plan):
    """Withheld zones fall apart into cells: their shapes would tell which were safe."""
    old, withheld = made.zones, made.withheld
    names = np.where(withheld[old], withheld.size + np.arange(len(old)), old)
    first = np.unique(names, return_index=True)[1]
    order = np.argsort(first, kind="stable")
    rank = np.empty(len(first), np.int64)
    rank[order] = np.arange(len(first))
    zones = rank[np.unique(names, return_inverse=True)[1].reshape(-1)]
    before = old[np.unique(zones, return_index=True)[1]]
    behind = records.behind(zones, len(before), plan.rules)
    return replace(
        made,
        zones=zones,
        values=made.values[:, before],
        unsafe=behind.unsafe,
        complementary=made.complementary[before],
        behind=behind,
    )


def _of_zones(table, shown, failed, empty):
    """Values of all zones; an empty cell of a zone that failed looks like the others of it."""
    values = table.spread(shown, len(failed), empty)
    silent_ones = np.setdiff1d(np.flatnonzero(failed), table.cells)
    values[silent_ones] = np.nan
    return values


def _regions(table, shown, region_count, plan):
    values = np.full((len(shown), region_count), np.nan)
    if plan.region_totals:
        if plan.method in (ROUND, CONTROLLED):
            values[:] = 0.0
        first = len(table.cells)
        values[:, table.regions] = shown[:, first : first + len(table.regions)]
    return values


def _merged(records, q, r, plan, rng, progress, apart):
    """Zones in which unsafe cells have found company, and those where it was not enough."""

    def unsafe_zones(zones, count):
        behind = records.behind(zones, count, plan.rules)
        return behind.unsafe if plan.show_empty else behind.unsafe | (behind.whole.records == 0)

    inside = records.cells[records.cells >= 0]
    totals = np.bincount(inside, minlength=len(q)).astype(float)
    return merge_cells(q, r, totals, unsafe_zones, plan.reach, rng, progress, apart)


def _not_protected_by_rounding(table, plan):
    """Unsafe sums that stay unsafe when they are rounded.

    Either of the two neighbouring multiples must leave the whole protection range open. A plain
    count below the base may come out as 0, which tells no more than that few records are there.
    """
    targets, unsafe = table.targets, table.unsafe
    value = target_values(table.sums, targets)
    down = np.floor(value / plan.base) * plan.base
    plain = (table.sums.least > 0).all()
    above = targets.upper > down + plan.base
    told = (targets.lower < down) | (above & ((down > 0) | (not plain)))
    # at its upper end the range is met by the value itself: that column is safe as it is
    matters = (targets.sum_of >= 0) & (value < targets.upper)
    kept = np.zeros(len(unsafe), bool)
    kept[targets.sum_of[told & matters]] = True
    return unsafe & kept


def _rounded(table, values, published, plan, q, r, secret, rng, progress):
    """Rounded sums, and which of them are published."""
    first = len(table.cells)
    if plan.method == CONTROLLED:
        rounded = np.array([_controlled(table, one, plan.base, rng) for one in table.sums.values])
        return rounded.astype(float), published
    names = np.zeros((3, values.shape[1]), np.int64)
    names[0, :first], names[1, :first] = q[table.cells], r[table.cells]
    names[0, first : first + len(table.regions)] = table.regions
    names[2, first:] = 1
    names[2, first + len(table.regions) :] = 2
    rounded = np.empty(values.shape)
    for number, one in enumerate(values):
        kept = np.rint(one * 1e6)
        uniforms = keyed_uniforms(secret, *names, np.full(len(one), number), kept)
        rounded[number] = random_rounding(one, plan.base, uniforms)
    told = _totals_to_leave_out(table, rounded, published, plan, progress)
    anyway = _totals_of_few_cells(table)
    anyway &= keyed_uniforms(secret, *names, np.full(len(anyway), -1)) < LEFT_OUT_ANYWAY
    return rounded, published & ~told & ~anyway


def _totals_of_few_cells(table):
    """Totals of which some are left out at random, so that a gap does not tell what caused it.

    Whoever knows the method could otherwise conclude from a gap that the total would have told,
    and so what it would have told (simulatable auditing: Kenthapadi, Mishra & Nissim 2005, PODS).
    """
    first = len(table.cells)
    cells_of = table.sums.members @ table.sums.members[:first].T
    few = np.diff(cells_of.tocsr().indptr) <= FEW_CELLS
    few[:first] = False
    return few


def _controlled(table, atoms, base, rng):
    """Sums of one part that are rounded together and add up."""
    cell_rows = table.sums.members[: len(table.cells)].tocoo()
    rows = np.empty(len(atoms), np.int64)
    rows[cell_rows.col] = cell_rows.row
    columns = np.full(len(atoms), len(table.regions), np.int64)
    first = len(table.cells)
    region_rows = table.sums.members[first : first + len(table.regions)].tocoo()
    columns[region_rows.col] = region_rows.row
    return table.sums.members @ controlled_rounding(rows, columns, atoms, base, rng)


def _totals_to_leave_out(table, rounded, published, plan, progress):
    """Totals that would narrow what the rounding of an unsafe cell or piece leaves open."""
    totals = np.arange(len(published)) >= len(table.cells)
    told = np.zeros(len(published), bool)
    if not (totals & published).any():
        return told
    targets = table.targets
    for number, one in enumerate(rounded):
        lower, upper = rounding_bounds(one, plan.base)
        lower, upper = np.where(published, lower, 0.0), np.where(published, upper, np.inf)
        # the sum of two parts is no narrower than they are
        own_part = targets.parts[:, number] & (targets.parts.sum(1) == 1)
        piece = targets.sum_of < 0
        cell = ~piece & table.unsafe[targets.sum_of] & ~totals[targets.sum_of]
        which = np.flatnonzero(own_part & (piece | cell))
        if not len(which):
            continue
        own = targets.sum_of[which]
        low = np.maximum(targets.lower[which], np.where(own < 0, 0.0, lower[own]))
        high = np.minimum(targets.upper[which] - 1.0, np.where(own < 0, np.inf, upper[own]))
        told |= totals_that_tell(
            table.sums.members, lower, upper, targets.members[which],
            np.column_stack([low, np.maximum(low, high)]), totals & published, progress,
        )  # fmt: skip
    return told


def _noisy(records, cell_count, region_count, plan, rng, progress):
    """Counts of records with noise in every cell of the tiling, empty ones too."""
    if records.weights is not None:
        raise InputError(
            "WEIGHT: noise hides persons by counting records; a weight has no bound that it could "
            "hide. Leave WEIGHT empty or choose another method."
        )
    source = system_source() if plan.seed is None else rehearsal_source(rng)
    kept = bounded_contributions(records.contributors, plan.contribution_limit, source)
    cells = np.asarray(records.cells)
    used = cells >= 0 if kept is None else (cells >= 0) & kept
    behind = records.behind(np.arange(cell_count), cell_count, plan.rules)
    if records.numerator is None:
        true = [np.bincount(cells[used], minlength=cell_count)]
    else:
        numerator = np.asarray(records.numerator, float)[used]
        if not np.isin(numerator, (0.0, 1.0)).all():
            raise InputError("NUMERATOR: noise needs a numerator of 0 or 1 in every record.")
        true = [
            np.bincount(cells[used][numerator == answer], minlength=cell_count)
            for answer in (1.0, 0.0)
        ]
    limit = 1 if kept is None else plan.contribution_limit
    values = []
    for place, one in enumerate(true):
        share = part(progress, place / len(true), (place + 1) / len(true))
        noisy = one + geometric_noise(cell_count, plan.epsilon, limit, source, share)
        values.append(not_below_zero(noisy) if plan.clip else noisy)
    values = np.array(values, float)
    return Release(
        np.arange(cell_count),
        values,
        np.full((len(values), region_count), np.nan),
        values.sum(1) if plan.grand_total else np.full(len(values), np.nan),
        behind.unsafe,
        np.zeros(cell_count, bool),
        behind,
        int((cells >= 0).sum() - used.sum()),
    )
