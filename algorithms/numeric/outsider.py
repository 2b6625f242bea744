"""What an outsider can work out about withheld cells from the sums that are published.

The unknowns are atoms: the pieces into which the published zonings cut the ground. Every published
figure is the sum of some atoms. An outsider knows that nothing is negative, so each unknown lies
in an interval between the optima of two linear programmes, the feasibility interval (Fischetti &
Salazar 2001, Math. Program. 89:283; Handbook on Statistical Disclosure Control, section 4.2.2).
"""

from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.optimize import linprog

from .errors import InputError

TOLERANCE = 1e-6


@dataclass(frozen=True)
class Sums:
    """The sums of a table and the atoms they are made of.

    Attributes
    ----------
    members : (sums, atoms) csr array of 0 and 1
        Which atoms a sum adds up: cells, regions, the grand total.
    values : (parts, atoms) float array
        True values, 0 or more. Parts are the columns that are published with one another: the
        count alone, or the numerator and the rest of the denominator.
    least : (atoms,) float array
        What an outsider knows each atom to hold at least, all parts together.
    lone : (atoms,) bool array
        Atoms that protect no other: those of one contributor, who knows them, and with them the
        smallest unsafe atom of each region, so that it does not show where one contributor is.
    """

    members: sparse.csr_matrix
    values: np.ndarray
    least: np.ndarray
    lone: np.ndarray

    @property
    def parts(self):
        return self.values.shape[0]

    def totals(self):
        """True value of every sum, (parts, sums) array."""
        return (self.members @ self.values.T).T


@dataclass(frozen=True)
class Targets:
    """Values that need protection, each a sum of atoms over some of the parts.

    Attributes
    ----------
    members : (targets, atoms) csr array of 0 and 1
    parts : (targets, parts) bool array
    lower, upper : (targets,) float arrays
        No outsider may be able to exclude anything between them.
    sum_of : (targets,) int array
        The published sum that the target is when it is not withheld, which switches the target
        off; -1: a target whatever is published.
    """

    members: sparse.csr_matrix
    parts: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    sum_of: np.ndarray

    def only_sums(self):
        """The targets that are sums of the table, without pieces of them."""
        kept = np.flatnonzero(self.sum_of >= 0)
        return Targets(
            self.members[kept],
            self.parts[kept],
            self.lower[kept],
            self.upper[kept],
            self.sum_of[kept],
        )

    def active(self, published):
        """Targets that nobody may work out while these sums are published."""
        return (self.sum_of < 0) | ~published[self.sum_of]


def target_values(sums, targets):
    """True value of every target, (targets,) array."""
    return np.einsum("pt,tp->t", (targets.members @ sums.values.T).T, targets.parts.astype(float))


class Deviations:
    """The linear programmes over all tables that agree with what is published.

    The variables are deviations from the true values, one per part and unknown atom. An atom that
    is published by itself does not deviate; a lone one only where it is the target.
    """

    def __init__(self, sums, published):
        self.sums = sums
        self.published = published
        kept = sums.members[published]
        sizes = np.diff(kept.indptr)
        self.known = np.zeros(sums.members.shape[1], bool)
        self.known[kept[sizes == 1].indices] = True
        self.equations = kept[sizes > 1].tocsc()

    def reach(self, members, parts, direction, limit, exact=False):
        """How far a sum of atoms can deviate up (1) or down (-1), at most `limit`.

        With `exact` lone atoms deviate as well: the view of somebody who knows no cell.

        Returns
        -------
        reached : float
        table : (parts, atoms) float array or None
            Deviations that do it; None where the limit is reached in a table without bound.
        """
        sums = self.sums
        free = ~self.known & (~sums.lone | exact)
        free[members] = ~self.known[members]
        columns = np.flatnonzero(free)
        objective = np.zeros((sums.parts, len(columns)))
        objective[np.ix_(parts, np.isin(columns, members))] = -direction
        if not objective.any():
            return 0.0, self._table(columns, np.zeros(objective.shape))
        aim = sparse.csr_matrix(-objective.reshape(1, -1))
        solution = self._solve(objective.ravel(), columns, aim, limit)
        if solution is None:
            return limit, None
        table = self._table(columns, solution.x)
        return max(-float(solution.fun), 0.0), table

    def together(self, targets, which, gaps, direction):
        """One agreeing table that brings as many targets as possible to their gaps.

        Returns
        -------
        (parts, atoms) float array or None
            Deviations; lone atoms have none.
        """
        sums = self.sums
        columns = np.flatnonzero(~self.known & ~sums.lone)
        if not len(columns):
            return None
        use = targets.members[which][:, columns]
        rows = sparse.hstack(
            [sparse.diags(targets.parts[which, p].astype(float)) @ use for p in range(sums.parts)]
        )
        count, width = len(which), sums.parts * len(columns)
        objective = np.concatenate([np.zeros(width), -np.ones(count)])
        link = sparse.hstack([-direction * rows, sparse.identity(count)]).tocsr()
        solution = self._solve(objective, columns, None, None, link, gaps)
        return None if solution is None else self._table(columns, solution.x[:width])

    def _table(self, columns, deviations):
        table = np.zeros(self.sums.values.shape)
        table[:, columns] = np.reshape(deviations, (self.sums.parts, len(columns)))
        return table

    def _solve(self, objective, columns, aim, limit, link=None, gaps=None):
        """Maximise over the agreeing tables; None where the programme is unbounded."""
        sums = self.sums
        width = sums.parts * len(columns)
        extra = 0 if link is None else link.shape[0]
        equations = self.equations[:, columns].tocsr()
        equations = equations[np.diff(equations.indptr) > 0]
        equal = sparse.block_diag([equations] * sums.parts)
        if extra:
            equal = sparse.hstack([equal, sparse.csr_matrix((equal.shape[0], extra))])
        lower, floor, floor_at = floors(sums, columns)
        bounds = np.column_stack([lower, np.full(width, np.inf)])
        unequal, at_most = [], []
        if floor is not None:
            unequal.append(sparse.hstack([floor, sparse.csr_matrix((floor.shape[0], extra))]))
            at_most.append(floor_at)
        if aim is not None:
            unequal.append(sparse.csr_matrix(-objective.reshape(1, -1)))
            at_most.append(np.array([limit]))
        if extra:
            unequal.append(link)
            at_most.append(np.zeros(extra))
            bounds = np.vstack([bounds, np.column_stack([np.zeros(extra), gaps])])
        solution = linprog(
            objective,
            A_ub=sparse.vstack(unequal).tocsr() if unequal else None,
            b_ub=np.concatenate(at_most) if unequal else None,
            A_eq=equal.tocsr() if equal.shape[0] else None,
            b_eq=np.zeros(equal.shape[0]) if equal.shape[0] else None,
            bounds=bounds,
            method="highs",
        )
        if solution.status == 3:
            return None
        if solution.status != 0:
            raise InputError(
                "The linear programme over the published sums could not be solved ({}); choose "
                "larger cells or publish no totals.",
                solution.message.strip(),
            )
        return solution


def floors(sums, columns):
    """Bounds of the deviations: no part below 0, all parts of an atom not below its least.

    Returns
    -------
    lower : (parts * columns,) float array
    matrix, limit : csr array and float array, or None and None with one part
    """
    values = sums.values[:, columns]
    slack = np.maximum(values.sum(0) - sums.least[columns], 0.0)
    if sums.parts == 1:
        return -slack, None, None
    matrix = sparse.hstack([-sparse.identity(len(columns))] * sums.parts).tocsr()
    return -values.ravel(), matrix, slack


def outsider_interval(sums, published, members, parts=None, insider=False):
    """The interval in which an outsider can place a sum of atoms.

    Parameters
    ----------
    sums : Sums
    published : (sums,) bool array
    members : (k,) int array
        Atoms of the sum in question.
    parts : (parts,) bool array or None
        Which parts it adds up; None: all.
    insider : bool
        Grant the outsider every cell that one contributor has to himself.

    Returns
    -------
    lowest, highest : float
        The optima of the two linear programmes; infinity where nothing bounds the sum.
    """
    members = np.atleast_1d(members)
    chosen = np.flatnonzero(np.ones(sums.parts, bool) if parts is None else parts)
    value = sums.values[np.ix_(chosen, members)].sum()
    programmes = Deviations(sums, np.asarray(published, bool))
    far = 10.0 * sums.values.sum() + 1.0
    down, _ = programmes.reach(members, chosen, -1, far, exact=not insider)
    up, _ = programmes.reach(members, chosen, 1, far, exact=not insider)
    return value - down, np.inf if up >= far * (1 - TOLERANCE) else value + up
