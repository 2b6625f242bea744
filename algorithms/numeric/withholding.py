"""Withhold cells, and as many more as it takes that none can be worked out from the totals.

A withheld cell is protected when an outsider, by the two linear programmes of `outsider`, can rule
out nothing inside its protection range. Every withheld cell is held to that, unsafe or withheld
to protect another, so that the release does not tell one kind from the other. The outsider is
granted what the rule implies (a withheld cell is not empty) and, since contributors know their
own share, the value of every cell that one contributor has to himself.

The choice of further cells follows the incremental linear programme of complementary suppression
(Kelly, Golden & Assad 1992, Networks 22:397; Fischetti & Salazar 2001): for each unprotected cell,
the cheapest deviation that carries it across its range, where moving a published sum costs its
records. Costs carry a random factor: an outsider who knows the method could otherwise conclude from
"the cheapest cells were withheld" (the minimality attack of Wong et al. 2007, VLDB, 543).
"""

from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.optimize import linprog

from .errors import InputError
from .exchange import exchange_reach
from .outsider import TOLERANCE, Deviations, floors, target_values
from .progress import silent

COST_SPREAD = 0.5
KEEP_ANYWAY = 0.1
MOST_RETRIES = 200


@dataclass(frozen=True)
class Withholding:
    """Which sums are published.

    Attributes
    ----------
    published : (sums,) bool array
    complementary : (sums,) bool array
        Withheld to protect others; tells of the data, not for release.
    """

    published: np.ndarray
    complementary: np.ndarray


class Proofs:
    """Tables that agree with what is published, each showing how far some targets can deviate.

    They are kept because publishing or withholding one more sum leaves most of them standing.
    """

    def __init__(self, sums, targets):
        self.sums = sums
        self.targets = targets
        self.values = target_values(sums, targets)
        self.slack = TOLERANCE * np.maximum(self.values, 1.0)
        count = sums.members.shape[0]
        self._of_all, self._of_one = _Tables(count), _Tables(count)

    def add(self, table, owner=-1):
        """Keep a table of deviations; `owner` is the only target it counts for, -1 for all."""
        changed = np.abs(self.sums.members @ table.T).max(axis=1) > TOLERANCE
        moved = np.zeros(len(self.values))
        for part, deviation in zip(self.targets.parts.T, table):
            moved += part * (self.targets.members @ deviation)
        if owner < 0:
            self._of_all.add(changed, moved)
        else:
            self._of_one.add(changed, (owner, moved[owner]))

    def reach(self, published, direction):
        """How far each target deviates in the tables that agree with what is published."""
        best = np.zeros(len(self.values))
        for moved in self._of_all.agreeing(published):
            np.maximum(best, direction * moved, out=best)
        own = self._of_one.agreeing(published)
        if len(own):
            owner, moved = np.transpose(own)
            np.maximum.at(best, owner.astype(np.int64), direction * moved)
        return best


class _Tables:
    """What tables show, and the sums they change as one bit each, for a quick comparison."""

    def __init__(self, sums):
        self._shown = []
        self._changed = np.empty((64, -(-sums // 8)), np.uint8)

    def add(self, changed, shown):
        many = len(self._shown)
        if many == len(self._changed):
            self._changed = np.concatenate([self._changed, np.empty_like(self._changed)])
        self._changed[many] = np.packbits(changed)
        self._shown.append(shown)

    def agreeing(self, published):
        """What those tables show that change no published sum."""
        if not self._shown:
            return []
        bits = self._changed[: len(self._shown)] & np.packbits(published)
        return [self._shown[place] for place in np.flatnonzero(~bits.any(axis=1))]


def unprotected(sums, targets, published, progress=silent, proofs=None, among=None):
    """Targets that an outsider can place more narrowly than their protection range.

    Parameters
    ----------
    sums : outsider.Sums
    targets : outsider.Targets
    published : (sums,) bool array
    progress : callable
    proofs : Proofs or None
        Filled, and used again by the next call.
    among : (targets,) bool array or None
        Check only these.

    Returns
    -------
    below, above : (targets,) bool arrays
        Unprotected towards the lower, and towards the upper end of the range.
    """
    proofs = Proofs(sums, targets) if proofs is None else proofs
    sides = _sides(proofs, published, among)
    _prove_by_exchange(proofs, published, sides)
    for side in sides:
        side.prove_together(progress)
        side.prove_each(side.open_ones(), progress)
    return tuple(side.short() for side in sides)


def any_unprotected(proofs, published, suspects, progress=silent):
    """Whether `unprotected` would find a target; stops at the first one.

    Parameters
    ----------
    proofs : Proofs
    published : (sums,) bool array
    suspects : (targets,) bool array
        Targets that are likely to be found, to be tried first.
    progress : callable

    Returns
    -------
    bool
    """
    sides = _sides(proofs, published)
    for side in sides:
        likely = side.open_ones()
        if side.prove_each(likely[suspects[likely]], progress, stop=True):
            return True
    _prove_by_exchange(proofs, published, sides)
    for side in sides:
        side.prove_together(progress)
        if side.prove_each(side.open_ones(), progress, stop=True):
            return True
    return False


def _sides(proofs, published, among=None):
    """The lower and the upper ends of the ranges."""
    active = proofs.targets.active(published) & (True if among is None else among)
    programmes = Deviations(proofs.sums, published)
    return [_Side(proofs, programmes, active, direction) for direction in (-1, 1)]


def _prove_by_exchange(proofs, published, sides):
    unproven = np.zeros(len(proofs.values), bool)
    for side in sides:
        unproven[side.open_ones()] = True
    within = exchange_reach(proofs.sums, proofs.targets, published, unproven)
    for side, reach in zip(sides, within):
        # what a programme decided is the most there is
        np.maximum(side.reached, reach, out=side.reached, where=~side.decided)


class _Side:
    """How far the active targets are known to deviate towards one end of their ranges."""

    def __init__(self, proofs, programmes, active, direction):
        self.proofs, self.programmes, self.direction = proofs, programmes, direction
        self.active = active
        targets = proofs.targets
        end = targets.upper if direction > 0 else targets.lower
        self.gap = direction * (end - proofs.values)
        self.needed = self.gap - proofs.slack
        self.reached = proofs.reach(programmes.published, direction)
        self.decided = ~active

    def short(self):
        """Targets not known to reach their end; once none is open, those that cannot."""
        return self.active & (self.reached < self.needed)

    def open_ones(self):
        """Those that are neither proven nor decided by a programme of their own."""
        return np.flatnonzero(self.short() & ~self.decided)

    def prove_together(self, progress):
        """Prove many targets by few tables, as long as each table proves something."""
        while True:
            progress(0.0)
            places = self.open_ones()
            if len(places) < 2:
                return
            table = self.programmes.together(
                self.proofs.targets, places, self.gap[places], self.direction
            )
            if table is None:
                return
            self.proofs.add(table)
            shown = self.proofs.reach(self.programmes.published, self.direction)
            np.maximum(self.reached, shown, out=self.reached)
            if len(self.open_ones()) == len(places):
                return

    def prove_each(self, places, progress, stop=False):
        """Decide targets by a programme each; whether one fell short, the first with `stop`."""
        targets = self.proofs.targets
        found = False
        for place in places:
            progress(0.0)
            members = targets.members[place].indices
            parts = np.flatnonzero(targets.parts[place])
            reached, table = self.programmes.reach(members, parts, self.direction, self.gap[place])
            self.reached[place], self.decided[place] = reached, True
            if table is not None:
                self.proofs.add(table, place)
            found |= reached < self.needed[place]
            if found and stop:
                break
        return found


def complementary_withholding(sums, targets, withheld, cost, fixed, rng, progress=silent):
    """Withhold further sums until every target is protected.

    Parameters
    ----------
    sums : outsider.Sums
    targets : outsider.Targets
    withheld : (sums,) bool array
        Sums that are unsafe by themselves.
    cost : (sums,) float array
        What withholding a sum loses: its records.
    fixed : (sums,) bool array
        Sums that cannot be withheld, because they are public already.
    rng : numpy.random.Generator
    progress : callable

    Returns
    -------
    Withholding

    Raises
    ------
    InputError
        If the fixed sums give a target away whatever else is withheld.
    """
    published = ~withheld
    if (withheld & fixed).any():
        raise InputError(
            "{} totals that are said to be public already are unsafe by the rules; they "
            "cannot be protected here. Raise it with the data's owner.",
            int((withheld & fixed).sum()),
        )
    costs = cost * np.exp(COST_SPREAD * rng.standard_normal(len(cost)))
    proofs = Proofs(sums, targets)
    values = proofs.values
    total_rounds, unsure = 0, targets.active(published)
    while True:
        below, above = unprotected(sums, targets, published, progress, proofs, unsure)
        gaps = np.where(above, targets.upper - values, np.where(below, values - targets.lower, 0))
        open_ones = np.flatnonzero(gaps > 0)
        if not len(open_ones):
            break
        # withholding more makes no interval narrower, so what is protected stays so
        unsure = ~targets.active(published)
        unsure[open_ones] = True
        for place in _spread_over_sums(sums, targets, published, open_ones, gaps):
            total_rounds += 1
            progress(min(0.9, total_rounds / (total_rounds + 20.0)))
            direction = 1 if above[place] else -1
            added = _cheapest_cover(
                sums, targets, published, fixed, costs, place, direction, gaps[place]
            )
            published[added] = False
    complementary = ~published & ~withheld
    _publish_what_is_not_needed(proofs, published, complementary, costs, rng, progress)
    return Withholding(published, ~published & ~withheld)


def _spread_over_sums(sums, targets, published, open_ones, gaps):
    """The widest gaps first, one target for each set of published sums that contain it."""
    members = sums.members[published]
    members = members[np.diff(members.indptr) < 0.5 * members.shape[1]]
    inside = (targets.members[open_ones] @ members.T).tocsr()
    inside.sort_indices()
    chosen, seen = [], set()
    for index in np.argsort(-gaps[open_ones], kind="stable"):
        touched = inside.indices[inside.indptr[index] : inside.indptr[index + 1]].tolist()
        if not seen.intersection(touched):
            chosen.append(open_ones[index])
        seen.update(touched)
    return chosen


def _cheapest_cover(sums, targets, published, fixed, costs, place, direction, gap):
    """Sums to withhold so that one target can deviate by its gap."""
    members = targets.members[place].indices
    free = ~sums.lone
    free[members] = True
    columns = np.flatnonzero(free)
    rows = np.flatnonzero(published)
    part_of = sums.members[rows][:, columns]
    size = np.asarray(sums.members[rows] @ sums.values.sum(0)).ravel()
    worth = np.clip(size, TOLERANCE, gap)
    movable = np.flatnonzero(~fixed[rows])
    slack = sparse.csr_matrix(
        (np.ones(len(movable)), (movable, np.arange(len(movable)))), (len(rows), len(movable))
    )
    equal = sparse.block_diag([sparse.hstack([part_of, slack, -slack])] * sums.parts).tocsr()
    block = len(columns) + 2 * len(movable)
    lower, floor, floor_at = floors(sums, columns)
    lower = lower.reshape(sums.parts, -1)
    objective = np.zeros((sums.parts, block))
    price = costs[rows][movable] / worth[movable]
    objective[:, len(columns) :] = np.concatenate([price, price])
    bounds = np.zeros((sums.parts, block, 2))
    bounds[:, :, 1] = np.inf
    bounds[:, : len(columns), 0] = lower
    aim = np.zeros((sums.parts, block))
    aim[
        np.ix_(targets.parts[place], np.isin(np.arange(block), np.searchsorted(columns, members)))
    ] = 1
    unequal = at_most = None
    if floor is not None:
        pad = sparse.csr_matrix((len(columns), 2 * len(movable)))
        unequal = sparse.hstack(
            [piece for _ in range(sums.parts) for piece in (-sparse.identity(len(columns)), pad)]
        ).tocsr()
        at_most = floor_at
    solution = linprog(
        objective.ravel(),
        A_ub=unequal,
        b_ub=at_most,
        A_eq=sparse.vstack([equal, sparse.csr_matrix(aim.reshape(1, -1))]).tocsr(),
        b_eq=np.concatenate([np.zeros(equal.shape[0]), [direction * gap]]),
        bounds=bounds.reshape(-1, 2),
        method="highs",
    )
    if solution.status != 0:
        raise InputError(
            "The totals that are said to be public already give an unsafe cell away whatever else "
            "is withheld. Choose larger cells, or settle with the data's owner which totals stand."
        )
    moved = solution.x.reshape(sums.parts, block)[:, len(columns) :]
    moved = np.abs(moved[:, : len(movable)] - moved[:, len(movable) :]).max(0)
    return rows[movable[moved > TOLERANCE]]


def _publish_what_is_not_needed(proofs, published, complementary, costs, rng, progress):
    """Publish again, dearest first, what turns out not to be needed; `published` is changed.

    A few are left withheld at random, so that nobody can reckon that each one was needed.
    """
    order = np.flatnonzero(complementary)
    order = order[np.argsort(-costs[order], kind="stable")][:MOST_RETRIES]
    for number, candidate in enumerate(order):
        progress(0.9 + 0.1 * number / len(order))
        if rng.random() < KEEP_ANYWAY:
            continue
        published[candidate] = True
        touched = proofs.sums.members[candidate]
        suspects = np.asarray((proofs.targets.members @ touched.T).sum(axis=1)).ravel() > 0
        if any_unprotected(proofs, published, suspects, progress):
            published[candidate] = False
