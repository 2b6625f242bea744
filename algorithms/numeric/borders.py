"""Shared borders of polygons: exact by matching segments, and within a tolerance by geometry."""

from dataclasses import dataclass

import numpy as np
import shapely

from .progress import silent

ROUNDING = 1e-9  # of the extent: places closer than this are the same vertex
STEEPEST = 0.5  # sine of the angle above which two segments do not run along each other
CORNER = 4.0  # tolerances that a border must exceed to be more than a corner that touches
BLOCK = 200_000  # segments searched between two reports of progress


@dataclass(frozen=True)
class Segments:
    """Pieces of line and the unit that each bounds.

    Attributes
    ----------
    unit : (n,) int64 array
    start, end : (n, 2) float arrays
        End points, units of the CRS.
    rounding : float
        Distance below which two places are the same, from the extent of all polygons.
    """

    unit: np.ndarray
    start: np.ndarray
    end: np.ndarray
    rounding: float

    def chosen(self, index):
        """The segments at an index or mask."""
        return Segments(self.unit[index], self.start[index], self.end[index], self.rounding)

    def lengths(self):
        return np.hypot(*(self.end - self.start).T)


@dataclass(frozen=True)
class NearBorders:
    """Pairs of units whose borders run along each other within a tolerance.

    Attributes
    ----------
    pairs : (m, 2) int64 array
    lengths : (m,) float array
    slivers, gaps : int
        Pairs that needed the tolerance: their polygons overlap, or leave a gap.
    """

    pairs: np.ndarray
    lengths: np.ndarray
    slivers: int
    gaps: int


def segments(polygons):
    """Every piece of every ring, as :class:`Segments`; pieces of no length are left out."""
    parts, unit = shapely.get_parts(polygons, return_index=True)
    rings, part = shapely.get_rings(parts, return_index=True)
    places, ring = shapely.get_coordinates(rings, return_index=True)
    extent = float(np.ptp(places, axis=0).max())
    follows = ring[1:] == ring[:-1]
    start, end = places[:-1][follows], places[1:][follows]
    found = Segments(unit[part[ring[:-1][follows]]], start, end, ROUNDING * extent)
    return found.chosen(found.lengths() > found.rounding)


def exact_borders(polygons):
    """Pairs of units that have a piece of line in common, vertex for vertex.

    Parameters
    ----------
    polygons : (units,) array of valid shapely polygons

    Returns
    -------
    pairs : (m, 2) int64 array
        A pair for every common segment, so a pair of units may come many times.
    lengths : (m,) float array
    leftover : Segments
        Those that bound one unit only.
    """
    pieces = segments(polygons)
    places = np.r_[pieces.start, pieces.end]
    steps = np.rint((places - places.min(0)) / pieces.rounding).astype(np.int64)
    vertex = np.unique(steps[:, 0] * 2**31 + steps[:, 1], return_inverse=True)[1]
    first, second = vertex[: len(pieces.unit)], vertex[len(pieces.unit) :]
    key = np.minimum(first, second) * (int(vertex.max()) + 1) + np.maximum(first, second)
    order = np.argsort(key, kind="stable")
    key, unit, length = key[order], pieces.unit[order], pieces.lengths()[order]
    pairs, lengths = [], []
    lag = 1
    while True:  # a segment of three units (a duplicate among them) meets at lags 1 and 2
        same = np.flatnonzero(key[lag:] == key[:-lag])
        if not len(same):
            break
        pairs.append(np.c_[unit[same], unit[same + lag]])
        lengths.append(length[same])
        lag += 1
    alone = np.ones(len(key), bool)
    alone[1:] &= key[1:] != key[:-1]
    alone[:-1] &= key[1:] != key[:-1]
    if not pairs:
        return np.empty((0, 2), np.int64), np.empty(0), pieces.chosen(order[alone])
    return np.concatenate(pairs), np.concatenate(lengths), pieces.chosen(order[alone])


def near_borders(polygons, leftover, tolerance, progress=silent):
    """Pairs of units whose unmatched borders run along each other.

    Two segments share the stretch along which they are nearly parallel and no farther apart
    than the tolerance. A pair of units counts when its stretches coincide for any length
    (vertices on one side only), or when those within the tolerance are longer than a corner.

    Parameters
    ----------
    polygons : (units,) array of valid shapely polygons
    leftover : Segments
    tolerance : float
        Units of the CRS; 0 for coinciding borders only.
    progress : callable

    Returns
    -------
    NearBorders
    """
    fine = 2 * leftover.rounding
    coarse = max(tolerance, fine)
    tree = shapely.STRtree(shapely.linestrings(np.stack([leftover.start, leftover.end], axis=1)))
    codes, coinciding, along = [], [], []
    units = len(polygons)
    for begin in range(0, len(leftover.unit), BLOCK):
        block = leftover.chosen(slice(begin, begin + BLOCK))
        low = np.minimum(block.start, block.end) - coarse
        high = np.maximum(block.start, block.end) + coarse
        one, other = tree.query(shapely.box(*low.T, *high.T))
        ordered = block.unit[one] < leftover.unit[other]
        one, other = one[ordered], other[ordered]
        lengths = _common_stretch(block.chosen(one), leftover.chosen(other), (fine, coarse))
        touching = lengths[1] > 0
        codes.append((block.unit[one] * units + leftover.unit[other])[touching])
        coinciding.append(lengths[0][touching])
        along.append(lengths[1][touching])
        progress(min(1.0, (begin + BLOCK) / len(leftover.unit)))
    if not codes:
        return NearBorders(np.empty((0, 2), np.int64), np.empty(0), 0, 0)
    codes, place = np.unique(np.concatenate(codes), return_inverse=True)
    coinciding = np.bincount(place, np.concatenate(coinciding), minlength=len(codes))
    along = np.bincount(place, np.concatenate(along), minlength=len(codes))
    dirty = along - coinciding > CORNER * coarse
    found = (coinciding > CORNER * fine) | dirty
    pairs = np.c_[codes // units, codes % units]
    shared = np.where(dirty, along, coinciding)
    overlap = _overlap(polygons, pairs[found & dirty]) > fine * along[found & dirty]
    return NearBorders(pairs[found], shared[found], int(overlap.sum()), int((~overlap).sum()))


def overlapping_pairs(polygons, leftover, tolerance):
    """Pairs of units that overlap by more than a sliver around the smaller one.

    Parameters
    ----------
    polygons : (units,) array of valid shapely polygons
    leftover : Segments
        Only units with an unmatched border are searched.
    tolerance : float

    Returns
    -------
    (m, 2) int64 array
    """
    open_units = np.unique(leftover.unit)
    one, other = shapely.STRtree(polygons).query(polygons[open_units], predicate="intersects")
    pairs = np.sort(np.c_[open_units[one], other], axis=1)
    pairs = np.unique(pairs[pairs[:, 0] != pairs[:, 1]], axis=0)
    if not len(pairs):
        return np.empty((0, 2), np.int64)
    width = np.sqrt(shapely.area(polygons)[pairs].min(axis=1))
    sliver = CORNER * max(tolerance, 2 * leftover.rounding) * width
    return pairs[_overlap(polygons, pairs) > sliver]


def _common_stretch(one, other, tolerances):
    """Length along which segments run beside each other, for each of several tolerances.

    Parameters
    ----------
    one, other : Segments of the same size
    tolerances : sequence of float

    Returns
    -------
    list of (n,) float arrays
    """
    length = one.lengths()
    direction = (one.end - one.start) / length[:, None]

    def in_frame(places):
        offset = places - one.start
        along = (offset * direction).sum(1)
        return along, offset[:, 0] * direction[:, 1] - offset[:, 1] * direction[:, 0]

    along_start, aside_start = in_frame(other.start)
    along_end, aside_end = in_frame(other.end)
    run = along_end - along_start
    rise = aside_end - aside_start
    beside = np.abs(rise) <= STEEPEST * other.lengths()
    run = np.where(beside, run, 1.0)
    # the other segment at parameter t of [0, 1] lies at along_start + t run, aside_start + t rise
    ends = np.sort(np.stack([-along_start / run, (length - along_start) / run]), axis=0)
    stretches = []
    for tolerance in tolerances:
        flat = np.abs(rise) < 1e-12 * length
        slope = np.where(flat, 1.0, rise)
        reach = np.array([[-tolerance], [tolerance]])
        sides = np.sort((reach - aside_start) / slope, axis=0)
        close = np.abs(aside_start) <= tolerance
        low = np.where(flat, np.where(close, 0, 1), sides[0])
        high = np.where(flat, np.where(close, 1, 0), sides[1])
        share = np.minimum(np.minimum(ends[1], high), 1) - np.maximum(np.maximum(ends[0], low), 0)
        stretches.append(np.where(beside, np.clip(share, 0, None) * np.abs(run), 0.0))
    return stretches


def _overlap(polygons, pairs):
    """Area that the two polygons of each pair have in common."""
    return shapely.area(shapely.intersection(polygons[pairs[:, 0]], polygons[pairs[:, 1]]))
