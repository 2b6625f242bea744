"""Zonings of base units against published numbers."""

from itertools import combinations

import networkx
import numpy as np
import pytest
from steadfield.algorithms.numeric.contiguity import from_pairs
from steadfield.algorithms.numeric.treezones import balanced


def board(side):
    index = np.arange(side * side).reshape(side, side)
    across = np.c_[index[:, :-1].ravel(), index[:, 1:].ravel()]
    down = np.c_[index[:-1].ravel(), index[1:].ravel()]
    return from_pairs(side * side, np.r_[across, down])


def equal_partitions(side):
    """All partitions of a board into as many connected parts of as many cells as its side."""
    network = networkx.Graph(board(side).pairs.tolist())
    network.add_nodes_from(range(side * side))
    parts = [
        frozenset(cells)
        for cells in combinations(range(side * side), side)
        if networkx.is_connected(network.subgraph(cells))
    ]
    by_least = {}
    for part in parts:
        by_least.setdefault(min(part), []).append(part)

    def complete(left):
        if not left:
            return [()]
        return [
            (part, *rest)
            for part in by_least.get(min(left), [])
            if part <= left
            for rest in complete(left - part)
        ]

    return {frozenset(made) for made in complete(frozenset(range(side * side)))}


# OEIS A172477: ways to cut an n x n board into n connected parts of n cells
@pytest.mark.parametrize(
    ("side", "number", "zonings"), [(1, 1, 3), (2, 2, 40), (3, 10, 600), (4, 117, 12_000)]
)
def test_balanced_zonings_reach_every_equal_partition_of_a_board(side, number, zonings):
    every = equal_partitions(side)
    assert len(every) == number
    generator = np.random.default_rng(172477)
    labels = balanced(board(side), np.ones(side * side), side, 0.0, zonings, generator)
    reached = {
        frozenset(frozenset(np.flatnonzero(row == zone).tolist()) for zone in range(side))
        for row in np.unique(labels, axis=0)
    }
    assert reached == every
