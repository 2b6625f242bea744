"""Which base units share a border, from their polygons.

Clean coverages are matched segment by segment: two units are neighbours when the same piece of
line bounds both. What that leaves unmatched (the outer border, and wherever the digitising is
dirty: vertices on one side only, slivers, gaps) goes to a geometric search within a tolerance.
A corner that touches is no shared border.
"""

from dataclasses import dataclass, field

import numpy as np
import shapely
from scipy import sparse
from scipy.sparse.csgraph import connected_components

from .borders import exact_borders, near_borders, overlapping_pairs
from .errors import InputError
from .progress import part, silent
from .words import Words


@dataclass(frozen=True)
class Findings:
    """What was noticed on the way; every number is a count of units or of pairs of units.

    Attributes
    ----------
    repaired : int
        Units whose outline crossed itself and was repaired.
    duplicates : int
        Units whose outline equals that of an earlier unit.
    slivers : int
        Pairs matched within the tolerance that overlap along their border.
    gaps : int
        Pairs matched within the tolerance that leave a gap along their border.
    overlaps : int
        Pairs that overlap by more than a sliver.
    islands : int
        Groups of units that touched nothing else and were joined to their nearest neighbour.
    """

    repaired: int = 0
    duplicates: int = 0
    slivers: int = 0
    gaps: int = 0
    overlaps: int = 0
    islands: int = 0

    def sentences(self):
        """The findings that are not zero, a plain sentence each."""
        wording = (
            Words(
                "{} units had outlines that cross themselves; they were repaired.", self.repaired
            ),
            Words("{} units repeat the outline of another unit; they were kept.", self.duplicates),
            Words("{} shared borders overlap by slivers; they were matched.", self.slivers),
            Words("{} shared borders leave narrow gaps; they were matched.", self.gaps),
            Words("{} pairs of units overlap; each pair counts as neighbours.", self.overlaps),
            Words(
                "{} islands touch nothing else; each was joined to its nearest neighbour.",
                self.islands,
            ),
        )
        return [words for words in wording if words.values[0]]


@dataclass(frozen=True)
class Contiguity:
    """Neighbourhood of base units as an undirected graph.

    Attributes
    ----------
    units : int
    pairs : (m, 2) int64 array
        Units that are neighbours, the smaller index first, sorted, none twice.
    border : (m,) float array
        Length of the shared border, units of the CRS; 0 for a joined island or an overlap.
    findings : Findings
    """

    units: int
    pairs: np.ndarray
    border: np.ndarray
    findings: Findings = field(default_factory=Findings)

    def within(self, groups):
        """The same graph without the pairs that lie in different groups.

        Parameters
        ----------
        groups : (units,) array
            Any values that compare with ``==``.

        Returns
        -------
        Contiguity
        """
        groups = np.asarray(groups)
        keep = groups[self.pairs[:, 0]] == groups[self.pairs[:, 1]]
        return Contiguity(self.units, self.pairs[keep], self.border[keep], self.findings)

    def matrix(self):
        """Symmetric (units, units) CSR matrix of ones."""
        first, second = self.pairs.T
        ones = np.ones(2 * len(self.pairs))
        places = (np.r_[first, second], np.r_[second, first])
        return sparse.csr_matrix((ones, places), shape=(self.units, self.units))

    def components(self):
        """Number of connected parts, and the part of each unit as a (units,) array."""
        return connected_components(self.matrix(), directed=False)


def from_pairs(units, pairs, border=None):
    """A contiguity from known pairs of neighbours.

    Parameters
    ----------
    units : int
    pairs : (m, 2) integer array
        In any order; a pair may come twice.
    border : (m,) array, optional
        Shared lengths, added up where a pair comes twice; zeros by default.

    Returns
    -------
    Contiguity
    """
    pairs = np.sort(np.asarray(pairs, np.int64).reshape(-1, 2), axis=1)
    if len(pairs) and (pairs.min() < 0 or pairs.max() >= units):
        raise InputError("A pair of neighbours names a unit outside 0 to {}.", units - 1)
    border = np.zeros(len(pairs)) if border is None else np.asarray(border, float)
    apart = pairs[:, 0] != pairs[:, 1]
    codes, place = np.unique(pairs[apart, 0] * units + pairs[apart, 1], return_inverse=True)
    lengths = np.bincount(place, border[apart], minlength=len(codes))
    return Contiguity(int(units), np.c_[codes // units, codes % units], lengths)


def contiguity(polygons, tolerance=None, join_islands=True, progress=silent):
    """Find the pairs of units that share a border longer than zero.

    Parameters
    ----------
    polygons : (units,) array of shapely polygons or multipolygons
    tolerance : float, optional
        Borders that run this close to each other are the same border, units of the CRS; by
        default a thousandth of the median unit's width (root of its area). 0 matches exact
        borders only.
    join_islands : bool
        Join every group of units that touches nothing else to its nearest neighbour.
    progress : callable

    Returns
    -------
    Contiguity

    Raises
    ------
    InputError
        Fewer than two units, a unit without an area, or no shared border anywhere.
    """
    polygons, repaired = repaired_polygons(polygons)
    if tolerance is None:
        tolerance = 1e-3 * float(np.median(np.sqrt(shapely.area(polygons))))
    pairs, lengths, leftover = exact_borders(polygons)
    progress(0.3)
    near = near_borders(polygons, leftover, tolerance, part(progress, 0.3, 0.7))
    overlaps = overlapping_pairs(polygons, leftover, tolerance)
    progress(0.8)
    found = from_pairs(
        len(polygons),
        np.r_[pairs, near.pairs, overlaps],
        np.r_[lengths, near.lengths, np.zeros(len(overlaps))],
    )
    if not len(found.pairs):
        raise InputError(
            "UNITS: none of the {} units shares a border with another, so there is nothing "
            "to group into zones. Zones need polygons that meet along their borders; for "
            "scattered places use the zoning variance from points.",
            len(polygons),
        )
    joins = np.empty((0, 2), np.int64)
    if join_islands:
        joins = island_joins(polygons, found, part(progress, 0.8, 1.0))
    return Contiguity(
        found.units,
        *_with_joins(found, joins),
        Findings(
            repaired=repaired,
            duplicates=_duplicates(polygons),
            slivers=near.slivers,
            gaps=near.gaps,
            overlaps=len(overlaps),
            islands=len(joins),
        ),
    )


def repaired_polygons(polygons):
    """Valid polygons, and how many had to be repaired.

    Raises
    ------
    InputError
        Fewer than two units, or units that have no area.
    """
    polygons = np.array(polygons, dtype=object)
    if len(polygons) < 2:
        raise InputError(
            "UNITS: zones are made by grouping units, so at least two are needed; found {}.",
            len(polygons),
        )
    broken = ~(shapely.is_valid(polygons) & (shapely.get_dimensions(polygons) == 2))
    for index in np.flatnonzero(broken):
        polygons[index] = _areal_part(shapely.make_valid(polygons[index]))
    empty = np.flatnonzero(~(shapely.area(polygons) > 0))
    if len(empty):
        raise InputError(
            "UNITS: {} units have no area (the first is number {}); remove them or give "
            "them an outline.",
            len(empty),
            empty[0] + 1,
        )
    return polygons, int(broken.sum())


def island_joins(polygons, found, progress=silent):
    """Pairs that connect every separate group of units to its nearest unit outside.

    The largest group stays; each smaller one is joined to what lies nearest, and again until
    all are connected (the rounds of Borůvka's spanning tree).

    Returns
    -------
    (joins, 2) int64 array
    """
    joins = []
    count, group = found.components()
    start = count
    while count > 1:
        islands = np.flatnonzero(np.arange(count) != np.argmax(np.bincount(group)))
        nearest = _nearest_outside(polygons, group, islands)
        for pair in nearest:
            first, second = group[pair[0]], group[pair[1]]
            if first != second:
                joins.append(pair)
                group[group == second] = first
        group = np.unique(group, return_inverse=True)[1]
        count = group.max() + 1
        progress(1 - (count - 1) / start)
    return np.sort(np.array(joins, np.int64).reshape(-1, 2), axis=1)


def _nearest_outside(polygons, group, islands):
    """For each group of units: (unit inside, nearest unit outside)."""
    sizes = np.bincount(group)
    single = np.flatnonzero(np.isin(group, islands) & (sizes[group] == 1))
    near = shapely.STRtree(polygons).query_nearest(
        polygons[single], exclusive=True, all_matches=False
    )
    nearest = [(single[own], other) for own, other in near.T]
    for island in islands[sizes[islands] > 1]:
        inside, outside = np.flatnonzero(group == island), np.flatnonzero(group != island)
        (own, other), distance = shapely.STRtree(polygons[outside]).query_nearest(
            polygons[inside], all_matches=False, return_distance=True
        )
        closest = np.argmin(distance)
        nearest.append((inside[own[closest]], outside[other[closest]]))
    return nearest


def _with_joins(found, joins):
    """Pairs and borders with the joined pairs at their sorted place."""
    pairs = np.r_[found.pairs, joins]
    border = np.r_[found.border, np.zeros(len(joins))]
    order = np.lexsort((pairs[:, 1], pairs[:, 0]))
    return pairs[order], border[order]


def _areal_part(geometry):
    """The polygons of a repaired geometry; its stray lines and points are dropped."""
    parts = shapely.get_parts(geometry)
    return shapely.union_all(parts[shapely.get_dimensions(parts) == 2])


def _duplicates(polygons):
    """Number of units whose outline equals that of an earlier one."""
    outlines = shapely.to_wkb(shapely.normalize(polygons))
    return len(outlines) - len(set(outlines.tolist()))
