"""How far a correlation between two rates depends on the zones that they are taken over.

Merging units changes r and the slope, usually upwards where neighbours are alike (Gehlke & Biehl
1934), and what holds between zones need not hold between people (Robinson 1950); over many
zonings of one map r can take almost any value (Openshaw & Taylor 1979).

References
----------
Gehlke & Biehl (1934), J. Am. Stat. Assoc. 29:169. Robinson (1950), Am. Sociol. Rev. 15:351.
Openshaw & Taylor (1979), in: Wrigley (ed.), Statistical Applications in the Spatial Sciences, 127.
"""

from dataclasses import dataclass

import numpy as np

from .batches import plan_batches, run_batches
from .builders import EFFORTS, build
from .contiguity import Contiguity
from .errors import InputError
from .progress import silent
from .scenarios import amounts, zone_sums
from .variance import zone_values
from .zone_statistics import summarise

LEAST_ZONES = 3
MEASURES = ("r", "slope", "weighted_r", "weighted_slope")


@dataclass(frozen=True)
class Relation:
    """Two rates over the same units.

    Attributes
    ----------
    graph : Contiguity
    x_counts, x_totals, y_counts, y_totals : (units,) arrays
        The rate of each is counts over totals. Weighted measures weigh zones by ``y_totals``.
    """

    graph: Contiguity
    x_counts: np.ndarray
    x_totals: np.ndarray
    y_counts: np.ndarray
    y_totals: np.ndarray

    def measures(self, labels):
        """The four measures of a block of zonings, in the order of ``MEASURES``.

        Parameters
        ----------
        labels : (replicates, units) int array

        Returns
        -------
        (replicates, 4) array
        """
        zones = int(labels.max()) + 1
        x = zone_values(*(zone_sums(labels, zones, v) for v in (self.x_counts, self.x_totals)))
        y_totals = zone_sums(labels, zones, self.y_totals)
        y = zone_values(zone_sums(labels, zones, self.y_counts), y_totals)
        plain = correlation_and_slope(x, y, np.ones(x.shape))
        return np.stack([*plain, *correlation_and_slope(x, y, y_totals)], axis=1)

    def base_measures(self):
        """The four measures with every unit a zone of its own, (4,) array."""
        return self.measures(np.arange(self.graph.units)[None])[0]


def relation(graph, x_counts, x_totals, y_counts, y_totals):
    """Check two rates and put them together.

    Raises
    ------
    InputError
        Values missing or negative, no total at all, or a rate that is the same everywhere.
    """
    given = {"X_COUNT": x_counts, "X_TOTAL": x_totals, "Y_COUNT": y_counts, "Y_TOTAL": y_totals}
    columns = {name: amounts(name, values, graph.units) for name, values in given.items()}
    for name, values in columns.items():
        if name.endswith("TOTAL") and not values.sum() > 0:
            raise InputError("{}: it is 0 in every unit, so no zone has a rate.", name)
    made = Relation(graph, *columns.values())
    for axis in ("x", "y"):
        values = zone_values(getattr(made, f"{axis}_counts"), getattr(made, f"{axis}_totals"))
        if not np.nanmax(values) > np.nanmin(values):
            raise InputError(
                "{}_COUNT: its rate is the same in every unit, so it correlates with nothing; "
                "choose another field.",
                axis.upper(),
            )
    return made


def correlation_and_slope(x, y, weights):
    """Pearson's r and the least-squares slope of y on x, along the last axis.

    Parameters
    ----------
    x, y : (..., zones) arrays
        A zone without one of the two drops out.
    weights : (..., zones) array
        Not negative.

    Returns
    -------
    r, slope : (...) arrays
        NaN with fewer than three zones or where x (for r also y) does not vary.
    """
    used = ~(np.isnan(x) | np.isnan(y)) & (weights > 0)
    weights = np.where(used, weights, 0.0)
    x, y = np.where(used, x, 0.0), np.where(used, y, 0.0)
    whole = np.maximum(weights.sum(axis=-1, keepdims=True), np.finfo(float).tiny)
    dx = x - (weights * x).sum(axis=-1, keepdims=True) / whole
    dy = y - (weights * y).sum(axis=-1, keepdims=True) / whole
    xx, yy, xy = ((weights * product).sum(axis=-1) for product in (dx * dx, dy * dy, dx * dy))
    size = whole[..., 0] * 1e-24  # of the squares: what rounding leaves of equal values
    x_varies = xx > size * np.square(x).max(axis=-1)
    y_varies = yy > size * np.square(y).max(axis=-1)
    enough = used.sum(axis=-1) >= LEAST_ZONES
    missing = np.full(xx.shape, np.nan)
    slope = np.divide(xy, xx, out=missing.copy(), where=enough & x_varies)
    r = np.divide(xy, np.sqrt(xx * yy), out=missing, where=enough & x_varies & y_varies)
    return np.clip(r, -1, 1), slope


@dataclass(frozen=True)
class CorrelationSpread:
    """The measures of every zoning, by scale, beside those of the base units.

    Attributes
    ----------
    recipes : tuple of Recipe
    scenarios : tuple of (replicates, 4) arrays
        One a recipe, in the order of ``MEASURES``.
    base : (4,) array
    """

    recipes: tuple
    scenarios: tuple
    base: np.ndarray

    def summary(self):
        """Rows (zone count, measure, least, q05, q50, q95, greatest, share above 0)."""
        rows = []
        for recipe, found in zip(self.recipes, self.scenarios):
            for column, name in enumerate(MEASURES):
                values = found[:, column]
                known = values[~np.isnan(values)]
                above = float(np.mean(known > 0)) if len(known) else np.nan
                rows.append((recipe.zone_count, name, *map(float, summarise(values)), above))
        return rows


@dataclass(frozen=True)
class CorrelationWork:
    """What a batch needs, wherever it runs."""

    relation: Relation
    recipes: tuple


def correlation_batch(work, batch, progress=silent):
    """The scale of a batch and the measures of its zonings; runs in a worker."""
    made = work.relation
    recipe = work.recipes[batch.scale]
    labels = build(made.graph, made.y_totals, recipe, batch.replicates, batch.generator(), progress)
    return batch.scale, made.measures(labels)


def simulate_correlation(relation, recipes, replicates, seed, executor=None, progress=silent):
    """The measures of a relation under many random zonings.

    Parameters
    ----------
    relation : Relation
    recipes : sequence of Recipe
        The scales; zones of a tree-cut or balanced zoning are measured by ``y_totals``.
    replicates : int
        Zonings of each scale.
    seed : int or numpy.random.SeedSequence
    executor : concurrent.futures.Executor, optional
    progress : callable

    Returns
    -------
    CorrelationSpread
    """
    least = min(recipe.zone_count for recipe in recipes)
    if least < LEAST_ZONES:
        raise InputError(
            "ZONE_COUNTS: a correlation needs {} zones or more; found {}.", LEAST_ZONES, least
        )
    if not replicates >= 2:
        raise InputError("REPLICATES: two zonings a scale are the least; found {}.", replicates)
    root = seed if isinstance(seed, np.random.SeedSequence) else np.random.SeedSequence(seed)
    efforts = [EFFORTS[recipe.builder] for recipe in recipes]
    batches = plan_batches(relation.graph.units, [replicates] * len(recipes), root, efforts)
    work = CorrelationWork(relation, tuple(recipes))
    found = [np.empty((replicates, len(MEASURES))) for _ in recipes]
    filled = [0] * len(recipes)
    for scale, rows in run_batches(correlation_batch, work, batches, executor, progress):
        found[scale][filled[scale] : filled[scale] + len(rows)] = rows
        filled[scale] += len(rows)
    return CorrelationSpread(tuple(recipes), tuple(found), relation.base_measures())
