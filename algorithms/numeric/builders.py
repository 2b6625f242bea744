"""The ways to make zones of base units, under one name each."""

from dataclasses import dataclass
from typing import Optional

import numpy as np

from .errors import InputError
from .growth import grown
from .treezones import balanced, tree_cut

GROWN = "grown"
TREE_CUT = "tree-cut"
BALANCED = "balanced"
BUILDERS = (GROWN, TREE_CUT, BALANCED)

PILOT = 48  # zonings that a least total is tried on


@dataclass(frozen=True)
class Recipe:
    """How zonings of one scale are made.

    Attributes
    ----------
    builder : {"grown", "tree-cut", "balanced"}
    zone_count : int
        Number of zones; of a tree-cut the number that comes about on average.
    least_total : float, optional
        Tree-cut only: what every zone holds at least.
    tolerance : float
        Balanced only: how far a zone may be from an equal total, as a part of it.
    """

    builder: str
    zone_count: int
    least_total: Optional[float] = None
    tolerance: float = 0.1

    def __post_init__(self):
        if self.builder not in BUILDERS:
            raise InputError(f"BUILDER is one of {', '.join(BUILDERS)}; found {self.builder!r}.")
        if not self.zone_count >= 1:
            raise InputError(f"ZONE_COUNTS must be 1 or more; found {self.zone_count}.")


def build(graph, totals, recipe, replicates, generator):
    """Make zonings by a recipe.

    Parameters
    ----------
    graph : Contiguity
    totals : (units,) array
        What tree-cut and balanced zones are measured by.
    recipe : Recipe
    replicates : int
    generator : numpy.random.Generator

    Returns
    -------
    (replicates, units) int32 array
        Zone of every unit; each zone is contiguous and every unit is in one.
    """
    if recipe.builder == GROWN:
        return grown(graph, recipe.zone_count, replicates, generator)
    if recipe.builder == TREE_CUT:
        return tree_cut(graph, totals, recipe.least_total, replicates, generator)
    return balanced(graph, totals, recipe.zone_count, recipe.tolerance, replicates, generator)


def least_total_for(graph, totals, zone_count, generator):
    """The least total that makes a tree-cut fall into about so many zones on average.

    Bisection on a pilot of zonings with the same random trees at every step, so that the
    number of zones falls with the least total but for the remainder's join.

    Parameters
    ----------
    graph : Contiguity
    totals : (units,) array
    zone_count : int
    generator : numpy.random.Generator

    Returns
    -------
    float
    """
    totals = np.asarray(totals, float)
    parts, part = graph.components()
    low, high = 0.0, float(np.bincount(part, totals, minlength=parts).max())
    seed = int(generator.integers(2**63))
    pilot = max(4, min(PILOT, 500_000 // graph.units))
    for _ in range(18):
        middle = (low + high) / 2
        labels = tree_cut(graph, totals, middle, pilot, np.random.default_rng(seed))
        if (labels.max(axis=1) + 1).mean() > zone_count:
            low = middle
        else:
            high = middle
    return high
