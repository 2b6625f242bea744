"""An official zoning brought to base units, from a field of theirs or from polygons."""

import numpy as np
import shapely

from .errors import InputError

NO_ZONE = -1
STRADDLES = 0.99  # a unit with less of its area in its main zone lies across a line


def zones_from_codes(codes):
    """Zone numbers from the codes of a field.

    Parameters
    ----------
    codes : (units,) array
        Text or numbers; None and NaN for no zone.

    Returns
    -------
    labels : (units,) int64 array
        From 0 in the order of the sorted codes as text; -1 without one.
    names : list of str
        Of the zones, by number.
    """
    known = np.array([code is not None and code == code for code in codes], bool)
    labels = np.full(len(codes), NO_ZONE, np.int64)
    text = np.array([str(code) for code in np.asarray(codes, object)[known]], dtype=object)
    names, inverse = np.unique(text.astype(str), return_inverse=True)
    labels[known] = inverse.reshape(-1)
    return labels, names.tolist()


def zones_from_polygons(units, zones):
    """Zone of every unit by the largest part of its area.

    Parameters
    ----------
    units : (units,) array of valid shapely polygons
    zones : (zones,) array of shapely polygons
        Repaired where needed.

    Returns
    -------
    labels : (units,) int64 array
        Numbers of the zones that hold a unit, closed up from 0 in their order; -1 for a unit that
        no zone meets.
    share : (units,) float array
        Share of the unit's area that lies in its zone.

    Raises
    ------
    InputError
        No zone meets any unit.
    """
    zones = np.where(shapely.is_valid(zones), zones, shapely.make_valid(zones))
    unit, zone = shapely.STRtree(zones).query(units, predicate="intersects")
    area = shapely.area(shapely.intersection(units[unit], zones[zone]))
    meets = area > 0
    unit, zone, area = unit[meets], zone[meets], area[meets]
    if not len(unit):
        raise InputError(
            "OFFICIAL_ZONES: none of its polygons meets a unit; check that both layers show the "
            "same ground."
        )
    order = np.lexsort((zone, -area, unit))
    unit, zone, area = unit[order], zone[order], area[order]
    first = np.unique(unit, return_index=True)[1]
    labels = np.full(len(units), NO_ZONE, np.int64)
    share = np.zeros(len(units))
    labels[unit[first]] = np.unique(zone[first], return_inverse=True)[1].reshape(-1)
    share[unit[first]] = area[first] / shapely.area(units)[unit[first]]
    return labels, np.minimum(share, 1.0)


def pieces_of(graph, labels):
    """Number of connected pieces of each zone.

    Parameters
    ----------
    graph : Contiguity
    labels : (units,) int array

    Returns
    -------
    (zones,) int array
    """
    count, piece = graph.within(labels).components()
    zone_of_piece = np.empty(count, np.int64)
    zone_of_piece[piece] = labels
    return np.bincount(zone_of_piece[zone_of_piece >= 0], minlength=int(labels.max()) + 1)


def share_as_extreme(simulated, official):
    """Share of zonings that stand as far out in some statistic as the official one does in any.

    With many statistics every third zoning stands outside the middle 95 % of one or another. So
    what is compared is the statistic in which each zoning lies farthest from the mean of all, the
    official one among them, in standard deviations: a p-value for all statistics together.

    Parameters
    ----------
    simulated : (zonings, statistics) array
        NaN where a statistic has no value.
    official : (statistics,) array

    Returns
    -------
    float
        The official zoning counts as one of the zonings; NaN where it has no statistic.

    References
    ----------
    Westfall & Young (1993), Resampling-Based Multiple Testing (the largest of several statistics).
    """
    everyone = np.vstack([official, simulated])
    everyone = everyone[:, ~np.isnan(everyone[0])]
    if not everyone.shape[1]:
        return float("nan")
    spread = np.nanstd(everyone, axis=0)
    apart = np.abs(everyone - np.nanmean(everyone, axis=0))
    # rounding leaves equal values a few bits apart; that is not a spread
    known = spread > 1e-12 * np.nanmax(np.abs(everyone), axis=0)
    outward = np.divide(apart, spread, out=np.zeros_like(apart), where=known)
    farthest = np.nan_to_num(outward).max(axis=1)
    return float(np.mean(farthest >= farthest[0] - 1e-12))
