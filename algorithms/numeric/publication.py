"""The table behind a release: cells, regions and totals as sums of atoms, and what to protect."""

from dataclasses import dataclass, fields

import numpy as np
from scipy import sparse

from .disclosure import (
    Contributions,
    contributions,
    protection_range,
    share_parts,
    unsafe_shares,
    unsafe_totals,
)
from .errors import InputError
from .outsider import Sums, Targets


@dataclass(frozen=True)
class Behind:
    """What stands behind the cells of one zoning.

    Attributes
    ----------
    whole : disclosure.Contributions
        Of the count.
    parts : tuple of disclosure.Contributions
        Numerator and rest; empty without a numerator.
    unsafe : (cells,) bool array
    """

    whole: Contributions
    parts: tuple
    unsafe: np.ndarray

    def values(self):
        """(parts, cells) array of totals; one part without a numerator."""
        return np.array([part.total for part in self.parts or (self.whole,)])

    def spread(self, cells, cell_count):
        """The same among all cells of a tiling, of which these hold records."""

        def all_of(part):
            columns = (getattr(part, one.name) for one in fields(part))
            return Contributions(*(_among_all(own, cells, cell_count) for own in columns))

        parts = tuple(all_of(part) for part in self.parts)
        return Behind(all_of(self.whole), parts, _among_all(self.unsafe, cells, cell_count))


@dataclass(frozen=True)
class Table:
    """Everything that is published together.

    Attributes
    ----------
    sums : outsider.Sums
        First the cells that hold records, then the regions that do, then the grand total.
    targets : outsider.Targets
    unsafe : (sums,) bool array
    records : (sums,) int array
    cells, regions : int arrays
        Cell and region numbers of the first and the second stretch of the sums.
    grand : bool
        Whether the last sum is the grand total.
    behind : Behind
        Of the cells that hold records.
    """

    sums: Sums
    targets: Targets
    unsafe: np.ndarray
    records: np.ndarray
    cells: np.ndarray
    regions: np.ndarray
    grand: bool
    behind: Behind

    def spread(self, per_sum, cell_count, empty):
        """Bring a value per sum to all cells of the tiling, `empty` where no record lies."""
        return _among_all(per_sum[: len(self.cells)], self.cells, cell_count, empty)


def _among_all(values, cells, cell_count, empty=0):
    every = np.full(cell_count, empty, values.dtype)
    every[cells] = values
    return every


def stand_behind(cells, cell_count, rules, weights=None, contributors=None, numerator=None):
    """Contributions of every cell, of its numerator and rest, and whether it is unsafe.

    Parameters
    ----------
    cells : (n,) int array
        Cell of each record; negative: outside.
    cell_count : int
    rules : disclosure.Rules
    weights, numerator : (n,) float arrays or None
    contributors : (n,) int array or None
        Codes as from `disclosure.contributor_codes`.

    Returns
    -------
    Behind
    """
    leading = rules.dominance_n
    whole = contributions(cells, cell_count, weights, contributors, leading)
    unsafe = unsafe_totals(whole, rules)
    if numerator is None:
        return Behind(whole, (), unsafe)
    parts = tuple(
        contributions(cells, cell_count, part, contributors, leading)
        for part in share_parts(weights, numerator, len(cells))
    )
    return Behind(whole, parts, unsafe | unsafe_shares(*parts, rules))


def table_of(
    cells,
    cell_count,
    rules,
    weights=None,
    contributors=None,
    numerator=None,
    regions=None,
    region_totals=False,
    grand_total=False,
):
    """The table that a release and the totals beside it make.

    Parameters
    ----------
    cells, cell_count, rules, weights, contributors, numerator
        As in `stand_behind`.
    regions : (n,) int array or None
        Region of each record, negative: in none.
    region_totals, grand_total : bool
        Whether these totals are published too.

    Returns
    -------
    Table
    """
    cells = np.asarray(cells)
    if region_totals and regions is None:
        raise InputError("REGIONS: region totals are to be published, but no regions are given.")
    inside = cells >= 0
    if not inside.any():
        raise InputError("No record lies inside the area; check the boundary and the CRS.")
    region_of = np.full(len(cells), -1) if regions is None or not region_totals else regions
    region_of = np.asarray(region_of)[inside]
    cell_of = cells[inside]
    named = {
        "weights": _only(weights, inside),
        "contributors": _only(contributors, inside),
        "numerator": _only(numerator, inside),
    }
    width = int(region_of.max(initial=-1)) + 2
    key, atom = np.unique(cell_of.astype(np.int64) * width + region_of + 1, return_inverse=True)
    atom = atom.reshape(-1)
    atom_cell, atom_region = key // width, key % width - 1
    count = len(key)

    occupied, cell_sum = np.unique(atom_cell, return_inverse=True)
    stretches = [(cell_sum.reshape(-1), len(occupied))]
    present = np.empty(0, np.int64)
    if region_totals:
        present = np.unique(atom_region[atom_region >= 0])
        place = np.searchsorted(present, atom_region)
        stretches.append((np.where(atom_region >= 0, place, -1), len(present)))
    if grand_total:
        stretches.append((np.zeros(count, np.int64), 1))

    atoms_behind = stand_behind(atom, count, rules, **named)
    members, behinds = [], []
    for sum_of_atom, sums in stretches:
        used = np.flatnonzero(sum_of_atom >= 0)
        members.append(
            sparse.csr_matrix((np.ones(len(used)), (sum_of_atom[used], used)), (sums, count))
        )
        if np.array_equal(sum_of_atom, np.arange(sums)):
            behinds.append(atoms_behind)
        else:
            behinds.append(stand_behind(sum_of_atom[atom], sums, rules, **named))
    sums = Sums(
        sparse.vstack(members).tocsr(),
        atoms_behind.values(),
        np.ones(count) if weights is None else np.zeros(count),
        (atoms_behind.whole.contributors <= 1)
        | _smallest(atoms_behind.whole, behinds[0].unsafe[stretches[0][0]], atom_region),
    )
    targets = _targets(sums, behinds, atoms_behind, rules)
    return Table(
        sums,
        targets,
        np.concatenate([behind.unsafe for behind in behinds]),
        np.concatenate([behind.whole.records for behind in behinds]),
        occupied,
        present,
        grand_total,
        behinds[0],
    )


def _smallest(whole, unsafe, region):
    """The smallest unsafe atom of each region: it protects no other, as if it were one person's.

    Were only those left out that are one person's, a total published over two withheld cells would
    tell that neither is.
    """
    order = np.lexsort((whole.total, ~unsafe, region))
    first = np.unique(region[order], return_index=True)[1]
    smallest = np.zeros(len(unsafe), bool)
    smallest[order[first]] = True
    return smallest & unsafe


def _only(values, inside):
    return None if values is None else np.asarray(values)[inside]


def _targets(sums, behinds, atoms_behind, rules):
    """Every sum once it is withheld, and every unsafe piece of a cell that a border cuts."""
    members, parts, lower, upper, sum_of = [], [], [], [], []
    first = 0
    for behind in behinds:
        rows = np.arange(first, first + len(behind.unsafe))
        first += len(rows)
        for use, low, high, which in _ranges(behind, rules, sums.parts, behind.unsafe >= 0):
            members.append(sums.members[rows[which]])
            sum_of.append(rows[which])
            parts.append(np.tile(use, (which.sum(), 1)))
            lower.append(low[which])
            upper.append(high[which])
    cell_rows = sums.members[: len(behinds[0].unsafe)]
    cut = np.zeros(sums.members.shape[1], bool)
    sizes = np.diff(cell_rows.indptr)
    cut[cell_rows.indices] = np.repeat(sizes > 1, sizes)
    pieces = sparse.identity(len(cut), format="csr")
    for use, low, high, which in _ranges(
        atoms_behind, rules, sums.parts, cut & atoms_behind.unsafe, pieces=True
    ):
        members.append(pieces[np.flatnonzero(which)])
        sum_of.append(np.full(which.sum(), -1))
        parts.append(np.tile(use, (which.sum(), 1)))
        lower.append(low[which])
        upper.append(high[which])
    together = sparse.vstack(members).tocsr()
    parts = np.concatenate(parts)
    # the outsider is granted which pieces hold somebody, so nothing below that can be asked for
    granted = np.where(parts.all(axis=1), together @ sums.least, 0.0)
    return Targets(
        together,
        parts,
        np.maximum(np.concatenate(lower), granted),
        np.concatenate(upper),
        np.concatenate(sum_of),
    )


def _ranges(behind, rules, part_count, among, pieces=False):
    """Protection ranges of the count, and of numerator and rest where these are unsafe."""
    low, high = protection_range(behind.whole, rules)
    everything = np.ones(part_count, bool)
    yield everything, low, high, among & (unsafe_totals(behind.whole, rules) if pieces else True)
    mean_of_whole = high / rules.least_count
    for place, part in enumerate(behind.parts):
        low, high = protection_range(part, rules)
        none = part.total <= 0
        matters = (place == 1) or rules.none_is_group
        low = np.where(none, 0.0, low)
        high = np.where(none, rules.least_count * mean_of_whole, high)
        which = np.where(none, matters, unsafe_totals(part, rules))
        yield np.arange(part_count) == place, low, high, among & which
