"""How far withheld values can deviate by simple exchanges that no published sum tells.

A cheap lower bound of what the linear programmes of `outsider` allow, for all targets at once.
"""

import numpy as np

MOST_PIECES = 12


class _Kinds:
    """Atoms sorted into kinds: those of one kind lie in the same published sums.

    What one atom of a kind gains another can lose without any published sum telling.
    """

    def __init__(self, sums, published):
        members = sums.members[published]
        self.members = members
        self.marks = np.random.default_rng(0).integers(1, 2**62, members.shape[0])
        self.signature = members.T.astype(np.int64) @ self.marks
        sizes = np.diff(members.indptr)
        self.known = np.zeros(members.shape[1], bool)
        self.known[members[sizes == 1].indices] = True
        self.spare = ~self.known & ~sums.lone
        self.signatures, kind = np.unique(self.signature, return_inverse=True)
        self.kind = kind.reshape(-1)
        self.many = len(self.signatures)
        self.unbound = (self.signatures == 0) & (np.bincount(self.kind, ~self.known, self.many) > 0)
        self.spares = self.total(np.ones(len(self.kind)))
        self.parts = np.array([self.total(part) for part in sums.values])
        self.need = self.total(sums.least)

    def total(self, values):
        """Sum over the spare atoms of each kind."""
        return np.bincount(self.kind, np.where(self.spare, values, 0.0), self.many)

    def find(self, signature):
        """Kind of each signature, -1 where no atom has it."""
        place = np.minimum(np.searchsorted(self.signatures, signature), self.many - 1)
        return np.where(self.signatures[place] == signature, place, -1)


def exchange_reach(sums, targets, published, active):
    """How far targets can deviate, down and up, (targets,) arrays each.

    Parameters are those of `withholding.unprotected`; targets that are not active may get less.

    A lower bound of what the linear programmes allow.
    """
    kinds = _Kinds(sums, published)
    down, up = _within_kind(sums, targets, kinds)
    swap_down, swap_up = _across_a_border(sums, targets, kinds, active)
    return np.maximum(down, swap_down), np.maximum(up, swap_up)


def _within_kind(sums, targets, kinds):
    """Exchange with atoms of the same kind: they give what they can spare, or take the rest."""
    rows, atoms = targets.members.nonzero()
    movable = ~kinds.known[atoms]
    pair, place = np.unique(rows * kinds.many + kinds.kind[atoms], return_inverse=True)
    place = place.reshape(-1)
    row, kind = pair // kinds.many, pair % kinds.many
    spare = kinds.spare[atoms]

    def others(total, values):
        return total[kind] - np.bincount(place, np.where(spare, values, 0.0), len(pair))

    room = [others(*pieces) for pieces in zip(kinds.parts, sums.values[:, atoms])]
    need = others(kinds.need, sums.least[atoms])
    wanted = targets.parts[row].T
    offered = sum(np.where(use, part, 0.0) for use, part in zip(wanted, room))
    elsewhere = sum(np.where(use, 0.0, part) for use, part in zip(wanted, room))
    raised = np.maximum(offered - np.maximum(need - elsewhere, 0.0), 0.0)
    raised[np.bincount(place, ~movable, len(pair)) > 0] = 0.0
    raised[kinds.unbound[kind]] = np.inf
    up = np.zeros(targets.members.shape[0])
    np.maximum.at(up, row, raised)

    takes = (others(kinds.spares, np.ones(len(atoms))) > 0) | kinds.unbound[kind]
    lowered = np.where(movable & takes[place], _above_floor(sums, targets, rows, atoms), 0.0)
    return np.bincount(rows, lowered, len(up)), up


def _above_floor(sums, targets, rows, atoms):
    """How far an atom can fall in the parts that its target adds up."""
    use = targets.parts[rows].T
    value = np.where(use, sums.values[:, atoms], 0.0).sum(0)
    rest = np.where(use, 0.0, sums.values[:, atoms]).sum(0)
    return np.maximum(value - np.maximum(sums.least[atoms] - rest, 0.0), 0.0)


def _across_a_border(sums, targets, kinds, active):
    """Exchange of one piece of a published cell with another piece of it.

    What the piece gains its neighbour across the border loses; on either side withheld atoms
    make up for it.
    """
    count = targets.members.shape[0]
    down, up = np.zeros(count), np.zeros(count)
    single = np.flatnonzero((np.diff(targets.members.indptr) == 1) & active)
    piece = targets.members.indices[targets.members.indptr[single]]
    cut = kinds.members[np.diff(kinds.members.indptr) > 1]
    marks = kinds.marks[np.diff(kinds.members.indptr) > 1]
    by_atom = cut.T.tocsr()
    for target, atom in zip(single, piece):
        if kinds.known[atom]:
            continue
        for line in by_atom.indices[by_atom.indptr[atom] : by_atom.indptr[atom + 1]]:
            siblings = cut.indices[cut.indptr[line] : cut.indptr[line + 1]]
            if len(siblings) > MOST_PIECES:
                continue
            beside = kinds.find(kinds.signature[siblings] - marks[line])
            here = beside[siblings == atom][0]
            for sibling, there in zip(siblings, beside):
                if sibling == atom or sums.lone[sibling] or kinds.known[sibling]:
                    continue
                if here < 0 or there < 0:
                    continue
                use = targets.parts[target]
                up[target] = max(up[target], _swapped(sums, kinds, use, sibling, here, there))
                down[target] = max(down[target], _swapped(sums, kinds, use, atom, there, here))
    return down, up


def _swapped(sums, kinds, use, giver, from_kind, to_kind):
    """How much a piece can lose while withheld atoms lose on one side and gain on the other."""
    if not (kinds.spares[to_kind] > 0 or kinds.unbound[to_kind]):
        return 0.0
    given = sums.values[:, giver]
    room = kinds.parts[:, from_kind]
    floor, need = sums.least[giver], kinds.need[from_kind]
    if kinds.unbound[from_kind]:
        room, need = np.full(len(given), np.inf), 0.0
    moved = np.where(use, np.minimum(given, room), 0.0).sum()
    rest, room_rest = given[~use].sum(), room[~use].sum()
    limit = min(
        given[use].sum() - max(floor - rest, 0.0), room[use].sum() - max(need - room_rest, 0.0)
    )
    return max(min(moved, limit), 0.0)
