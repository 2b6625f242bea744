"""Two families of nested zones as a network of records: exact bounds without linear programmes.

Zones of two families cross like the rows and columns of a table. Every record flows from the
ground's root down one family to the atom it lives in and back up the other, so the published
counts bound the flow in the zones and the atom counts are the flow between the families
(network form of two-way tables: Cox 1995 JASA 90:1453). Ends of intervals are then whole
numbers and each comes with a cut: zones to add and zones to subtract.
"""

from collections import deque
from dataclasses import dataclass

import numpy as np
from scipy import sparse

ROOT = 0


@dataclass(frozen=True)
class Cut:
    """Why an atom can hold no more: zones that are added, zones that are subtracted.

    Attributes
    ----------
    atoms : tuple of int
        The ground that the derivation leaves.
    added, subtracted : tuple of int
        Rows of the published counts.
    """

    atoms: tuple
    added: tuple
    subtracted: tuple


def two_families(membership):
    """Divide zones into two families such that zones of one family nest or stay apart.

    Parameters
    ----------
    membership : (rows, atoms) csr_matrix of 0 and 1

    Returns
    -------
    (rows,) int array of 0 and 1, or None
        None when no such division exists.
    """
    size = np.diff(membership.indptr)
    shared = (membership @ membership.T).tocoo()
    crossing = shared.data < np.minimum(size[shared.row], size[shared.col])
    rows = membership.shape[0]
    graph = sparse.csr_matrix(
        (np.ones(crossing.sum()), (shared.row[crossing], shared.col[crossing])), (rows, rows)
    )
    family = np.full(rows, -1)
    for first in range(rows):
        if family[first] >= 0:
            continue
        family[first] = 0
        waiting = deque([first])
        while waiting:
            row = waiting.popleft()
            for other in graph.indices[graph.indptr[row] : graph.indptr[row + 1]]:
                if family[other] < 0:
                    family[other] = 1 - family[row]
                    waiting.append(other)
                elif family[other] == family[row]:
                    return None
    return family


class Network:
    """Records in two families of nested zones; keeps one table that agrees with the counts.

    Arcs 0 .. atoms - 1 are the atoms; arc atoms + r is row r. Node 0 is the root, node r + 1 the
    zone of row r.

    Parameters
    ----------
    counts : PublishedCounts
        Statements that do not contradict each other.
    family : (rows,) array of 0 and 1, see `two_families`
    table : (atoms,) array of whole numbers
        A table that agrees with the statements.
    """

    def __init__(self, counts, family, table):
        self.atoms = counts.atoms
        ends = [_chains(counts.membership, family == side) for side in (0, 1)]
        (deep_from, up_from), (deep_to, up_to) = ends
        down = np.asarray(family) == 0
        node = np.arange(counts.rows) + 1
        self.tail = np.concatenate([deep_from, np.where(down, up_from, node)]).tolist()
        self.head = np.concatenate([deep_to, np.where(down, node, up_to)]).tolist()
        self.low = np.concatenate([np.zeros(self.atoms), counts.lower]).tolist()
        self.high = np.concatenate([np.full(self.atoms, np.inf), counts.upper]).tolist()
        self.flow = np.concatenate([table, counts.membership @ table]).tolist()
        self.arcs = [[] for _ in range(counts.rows + 1)]
        for arc, (start, end) in enumerate(zip(self.tail, self.head)):
            if start != end:
                self.arcs[start].append(arc)
                self.arcs[end].append(arc)
            elif arc < self.atoms:
                self.arcs[start].append(arc)

    def raise_to(self, arc, enough):
        """Move records until an arc holds ``enough``, or as many as it can.

        Returns
        -------
        frozenset of int or None, bool
            The nodes on one side of the limiting cut and whether that is the goal's side; None
            when the arc reached ``enough``, or is limited by its own bound.
        """
        if self.tail[arc] == self.head[arc]:
            self.flow[arc] = max(self.flow[arc], min(enough, self.high[arc]))
            return None, False
        while self.flow[arc] < min(enough, self.high[arc]):
            path, cut = self._path(self.head[arc], self.tail[arc], arc, ())
            if path is None:
                return cut
            self._push(path, arc, True, min(enough, self.high[arc]))
        return None, False

    def lower_to_least(self, arc, closed):
        """Move records out of an arc without using the closed arcs, as many as possible.

        Returns
        -------
        float
            What the arc still holds.
        """
        if self.tail[arc] == self.head[arc]:
            self.flow[arc] = self.low[arc]
        while self.flow[arc] > self.low[arc]:
            path, _ = self._path(self.tail[arc], self.head[arc], arc, closed)
            if path is None:
                break
            self._push(path, arc, False, self.low[arc])
        return self.flow[arc]

    def cut_of(self, side, at_goal):
        """The derivation that a limiting cut stands for; see `raise_to`."""
        atoms, added, subtracted = set(), set(), set()
        for node in side:
            for arc in self.arcs[node]:
                starts_in, ends_in = self.tail[arc] in side, self.head[arc] in side
                if starts_in == ends_in:
                    continue
                enters = ends_in != at_goal
                if arc < self.atoms:
                    atoms.add(arc)
                elif enters:
                    subtracted.add(arc - self.atoms)
                else:
                    added.add(arc - self.atoms)
        return Cut(tuple(sorted(atoms)), tuple(sorted(added)), tuple(sorted(subtracted)))

    def _path(self, start, goal, without, closed):
        """Shortest way along which records can be moved, searched from both ends.

        Returns the arcs with their direction, or None and the exhausted side of the cut.
        """
        seen = ({start: None}, {goal: None})
        waiting = ([start], [goal])
        while True:
            side = 0 if len(waiting[0]) <= len(waiting[1]) else 1
            fresh = []
            for node in waiting[side]:
                for arc in self.arcs[node]:
                    if arc == without:
                        continue
                    leaves = self.tail[arc] == node
                    along = leaves == (side == 0)
                    if along:
                        if arc in closed or self.flow[arc] >= self.high[arc]:
                            continue
                    elif self.flow[arc] <= self.low[arc]:
                        continue
                    other = self.head[arc] if leaves else self.tail[arc]
                    if other in seen[side]:
                        continue
                    seen[side][other] = (arc, along, node)
                    if other in seen[1 - side]:
                        return self._joined(seen, other), None
                    fresh.append(other)
            if not fresh:
                return None, (frozenset(seen[side]), side == 1)
            waiting = (fresh, waiting[1]) if side == 0 else (waiting[0], fresh)

    @staticmethod
    def _joined(seen, meeting):
        path = []
        for side in seen:
            node = meeting
            while side[node] is not None:
                arc, along, node = side[node]
                path.append((arc, along))
        return path

    def _push(self, path, arc, up, limit):
        amount = abs(limit - self.flow[arc])
        for step, along in path:
            room = self.high[step] - self.flow[step] if along else self.flow[step] - self.low[step]
            amount = min(amount, room)
        for step, along in path:
            self.flow[step] += amount if along else -amount
        self.flow[arc] += amount if up else -amount


def _chains(membership, chosen):
    """Deepest node of each atom and parent node of each row, within one family."""
    rows, atoms = membership.shape
    size = np.diff(membership.indptr)
    entries = membership.tocoo()
    kept = chosen[entries.row]
    row, atom = entries.row[kept], entries.col[kept]
    order = np.lexsort((row, size[row], atom))
    row, atom = row[order], atom[order]
    deepest, parent = np.full(atoms, ROOT), np.full(rows, ROOT)
    first = np.ones(len(row), bool)
    first[1:] = atom[1:] != atom[:-1]
    deepest[atom[first]] = row[first] + 1
    inner = np.flatnonzero(~first)
    parent[row[inner - 1]] = row[inner] + 1
    return deepest, parent
