"""Random spanning trees of many copies of a graph at once, walked level by level.

The trees are minimum spanning trees of independent random costs. Every spanning tree can come,
but not equally often: this is not the uniform spanning tree.
"""

from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse.csgraph import (
    breadth_first_order,
    connected_components,
    minimum_spanning_tree,
)


@dataclass(frozen=True)
class Forest:
    """Rooted trees, their nodes in order of depth.

    Attributes
    ----------
    order : (n,) int array
        Nodes from the roots outwards.
    above : (n,) int array
        Position in ``order`` of the parent of each node of ``order``; its own position at a root.
    levels : list of slice
        Stretches of ``order`` of equal depth, the roots first.
    """

    order: np.ndarray
    above: np.ndarray
    levels: list

    def roots(self):
        """Number of trees."""
        return self.levels[0].stop

    def sums_upwards(self, values, passes=None):
        """Add the values of every node's subtree, from the leaves up.

        Parameters
        ----------
        values : (n,) array
            By position in ``order``.
        passes : callable, optional
            Takes the sums of one level and returns what each hands on to its parent; everything
            by default.

        Returns
        -------
        (n,) float array
        """
        sums = np.array(values, float)
        for parent, level in zip(self.levels[-2::-1], self.levels[:0:-1]):
            handed = sums[level] if passes is None else passes(sums[level])
            place = self.above[level] - parent.start
            sums[parent] += np.bincount(place, handed, minlength=parent.stop - parent.start)
        return sums

    def spread_downwards(self, marks, begins):
        """Give every node the mark of the nearest node at or above it that begins anew.

        Parameters
        ----------
        marks : (n,) array
        begins : (n,) bool array
            By position in ``order``; roots begin in any case.

        Returns
        -------
        (n,) array
        """
        spread = np.array(marks)
        for level in self.levels[1:]:
            spread[level] = np.where(begins[level], spread[level], spread[self.above[level]])
        return spread


def random_forest(nodes, pairs, generator, part=None):
    """A minimum spanning forest of random costs, each tree rooted at a random node.

    Parameters
    ----------
    nodes : int
    pairs : (m, 2) int array
        The edges; none twice.
    generator : numpy.random.Generator
    part : (nodes,) int array, optional
        The connected part of each node, by numbers from 0, where it is known.

    Returns
    -------
    Forest
        Every connected part of the graph is one tree.
    """
    costs = generator.random(len(pairs)) + 0.5  # a cost of 0 would be no edge
    graph = sparse.csr_matrix((costs, tuple(pairs.T)), shape=(nodes, nodes))
    tree = minimum_spanning_tree(graph).tocoo()
    edges = np.c_[tree.row, tree.col].astype(np.int64)
    if part is None:
        flags = np.ones(len(edges))
        graph = sparse.csr_matrix((flags, tuple(edges.T)), shape=(nodes, nodes))
        part = connected_components(graph, directed=False)[1]
    return rooted(nodes, edges, _random_roots(part, generator))


def rooted(nodes, edges, roots):
    """Order the nodes of a forest by depth below the given roots, one a tree.

    Parameters
    ----------
    nodes : int
    edges : (nodes - trees, 2) int array
    roots : (trees,) int array

    Returns
    -------
    Forest
    """
    # one more node above all roots lets a single search walk every tree
    first = np.r_[edges[:, 0], np.full(len(roots), nodes)]
    second = np.r_[edges[:, 1], roots]
    graph = sparse.csr_matrix((np.ones(len(first)), (first, second)), shape=(nodes + 1, nodes + 1))
    order, before = breadth_first_order(graph, nodes, directed=False, return_predecessors=True)
    order = order[1:].astype(np.int64)
    position = np.empty(nodes + 1, np.int64)
    position[order] = np.arange(nodes)
    position[nodes] = -1
    above = position[before[order]]
    levels = [slice(0, len(roots))]
    while levels[-1].stop < nodes:
        # parents come in order, so the next level ends where parents leave this one
        stop = int(np.searchsorted(above, levels[-1].stop))
        levels.append(slice(levels[-1].stop, stop))
    above[: len(roots)] = np.arange(len(roots))
    return Forest(order, above, levels)


def copies(graph, replicates):
    """Edges of disjoint copies of a graph, as (replicates * pairs, 2) array of node numbers.

    Node ``u`` of copy ``r`` is ``r * units + u``.
    """
    offset = np.arange(replicates, dtype=np.int64)[:, None, None] * graph.units
    return (graph.pairs[None] + offset).reshape(-1, 2)


def _random_roots(part, generator):
    """One node of every connected part, each as likely as another of its part."""
    mixed = generator.permutation(len(part))
    roots = np.full(part.max() + 1, -1)
    roots[part[mixed]] = mixed  # of several writes to one place the last stays
    return roots[roots >= 0]
