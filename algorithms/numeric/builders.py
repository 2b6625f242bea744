"""The ways to make zones of base units, under one name each."""

from dataclasses import dataclass
from typing import Optional

import numpy as np

from .balancing import balanced
from .errors import InputError
from .growth import grown
from .progress import part as part_of
from .progress import silent
from .treezones import tree_cut

GROWN = "grown"
TREE_CUT = "tree-cut"
BALANCED = "balanced"
BUILDERS = (GROWN, TREE_CUT, BALANCED)

# Work of one zoning beside that of a grown one, as measured on 1000 to 10 000 units.
EFFORTS = {GROWN: 1, TREE_CUT: 1, BALANCED: 20}

PILOT = 48  # zonings that a least total is tried on
STEPS = 10  # halvings in the search for a least total


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
            raise InputError("BUILDER is one of {}; found {!r}.", ", ".join(BUILDERS), self.builder)
        if not self.zone_count >= 1:
            raise InputError("ZONE_COUNTS must be 1 or more; found {}.", self.zone_count)


def build(graph, totals, recipe, replicates, generator, progress=silent):
    """Make zonings by a recipe.

    Parameters
    ----------
    graph : Contiguity
    totals : (units,) array
        What tree-cut and balanced zones are measured by.
    recipe : Recipe
    replicates : int
    generator : numpy.random.Generator
    progress : callable

    Returns
    -------
    (replicates, units) int32 array
        Zone of every unit; each zone is contiguous and every unit is in one.
    """
    if recipe.builder == GROWN:
        return grown(graph, recipe.zone_count, replicates, generator, progress)
    if recipe.builder == TREE_CUT:
        return tree_cut(graph, totals, recipe.least_total, replicates, generator, progress)
    zone_count, tolerance = recipe.zone_count, recipe.tolerance
    return balanced(graph, totals, zone_count, tolerance, replicates, generator, progress)


def least_total_for(graph, totals, zone_count, generator, progress=silent):
    """The least total that makes a tree-cut fall into about so many zones on average.

    Bisection on a pilot of zonings with the same random trees at every step, so that the
    number of zones falls with the least total but for the remainder's join.

    Parameters
    ----------
    graph : Contiguity
    totals : (units,) array
    zone_count : int
    generator : numpy.random.Generator
    progress : callable

    Returns
    -------
    float
    """
    totals = np.asarray(totals, float)
    parts, part = graph.components()
    # zones that hold an equal share at least cannot be more than that many
    high = min(totals.sum() / zone_count, np.bincount(part, totals, minlength=parts).max())
    low = 0.0
    seed = int(generator.integers(2**63))
    pilot = max(3, min(PILOT, 100_000 // graph.units))
    for step in range(STEPS):
        stretch = part_of(progress, step / STEPS, (step + 1) / STEPS)
        middle = (low + high) / 2
        labels = tree_cut(graph, totals, middle, pilot, np.random.default_rng(seed), stretch)
        if (labels.max(axis=1) + 1).mean() > zone_count:
            low = middle
        else:
            high = middle
    return float(high)
