"""All published zonings of the same ground laid over each other."""

from dataclasses import dataclass

import numpy as np
import shapely
from scipy import sparse

from .errors import InputError
from .progress import silent

TOLERANCE_SHARE = 0.002
CHUNK = 2000


@dataclass(frozen=True)
class Overlay:
    """The pieces that several zonings cut the ground into.

    An atom is all ground that lies in exactly the same zones; it may have several parts.

    Attributes
    ----------
    atoms : (atoms,) object array
        Polygons and multipolygons that do not overlap.
    membership : (zones, atoms) csr_matrix of 0 and 1
        Which zone holds which atom; the zones of all layers in order, layer after layer.
    layer : (zones,) int array
        The layer that each row of the membership comes from.
    tolerance : float
        Width below which a piece counts as a mismatch of drawing, units of the working CRS.
    slivers : int
        Pieces that were absorbed into a neighbour.
    sliver_area : float
        Their total area, units of the working CRS squared.
    """

    atoms: np.ndarray
    membership: sparse.csr_matrix
    layer: np.ndarray
    tolerance: float
    slivers: int
    sliver_area: float


def overlay(layers, tolerance=0.0, progress=silent):
    """Cut the ground along every border of every layer.

    Parameters
    ----------
    layers : sequence of (zones,) object arrays
        Polygons of each published zoning. Invalid ones are repaired; zones of one layer may
        overlap and need not cover the ground of another.
    tolerance : float
        Pieces narrower than this are absorbed into the neighbour with the longest shared
        border; 0 takes 0.2 % of the typical zone width of the finest layer.
    progress : callable

    Returns
    -------
    Overlay

    Raises
    ------
    InputError
        A layer without polygons, a negative tolerance, or a zone without an area.
    """
    if not (np.isfinite(tolerance) and tolerance >= 0):
        raise InputError("The sliver tolerance must be 0 or more; found {}.", tolerance)
    zones = [_areas_only(polygons, number) for number, polygons in enumerate(layers)]
    if not zones:
        raise InputError("The audit needs at least one published layer; found none.")
    tolerance = tolerance or TOLERANCE_SHARE * min(
        np.sqrt(np.median(shapely.area(polygons))) for polygons in zones
    )
    layer = np.repeat(np.arange(len(zones)), [len(polygons) for polygons in zones])
    zones = np.concatenate(zones)
    faces = _faces(zones, tolerance)
    progress(0.3)
    inside = _membership(zones, faces, progress)
    covered = np.diff(inside.tocsc().indptr) > 0
    faces, inside = faces[covered], inside[:, np.flatnonzero(covered)]
    host, slivers = _absorb(faces, inside, tolerance)
    progress(0.8)
    atoms, membership = _merge(faces, inside, host)
    progress(1.0)
    area = float(shapely.area(faces[slivers]).sum())
    return Overlay(atoms, membership, layer, float(tolerance), len(slivers), area)


def atom_of_records(atoms, x, y):
    """The atom that each record lies in.

    Parameters
    ----------
    atoms : (atoms,) object array of polygons
    x, y : (n,) arrays
        Places of the records, units of the working CRS.

    Returns
    -------
    (n,) int array
        -1 outside every atom; a record on a border belongs to the first atom that touches it.
    """
    points = shapely.points(np.asarray(x, float), np.asarray(y, float))
    record, atom = shapely.STRtree(atoms).query(points, predicate="intersects")
    place = np.full(len(points), len(atoms))
    np.minimum.at(place, record, atom)
    return np.where(place == len(atoms), -1, place)


def _areas_only(polygons, number):
    """Valid polygons of one layer; lines and points that a repair leaves are dropped."""
    polygons = np.asarray(polygons, object)
    if not len(polygons):
        raise InputError("Published layer {} holds no polygons; take it off the list.", number + 1)
    repaired = polygons.copy()
    broken = ~shapely.is_valid(polygons)
    repaired[broken] = shapely.make_valid(polygons[broken])
    mixed = np.flatnonzero(shapely.get_type_id(repaired) == 7)
    for zone in mixed:
        parts = shapely.get_parts(repaired[zone])
        repaired[zone] = shapely.union_all(parts[shapely.area(parts) > 0])
    flat = np.flatnonzero(~(shapely.area(repaired) > 0))
    if len(flat):
        raise InputError(
            "Published layer {} holds {} zones without an area (the first is number {}); "
            "repair or remove them.",
            number + 1,
            len(flat),
            flat[0] + 1,
        )
    return repaired


def _faces(zones, tolerance):
    """Pieces between all borders; borders closer than a thousandth of the tolerance meet."""
    lines = shapely.union_all(shapely.boundary(zones), grid_size=tolerance / 1000)
    return shapely.get_parts(shapely.polygonize([lines]))


def _membership(zones, faces, progress):
    """Which zone holds which face, by a point inside each face."""
    places = shapely.point_on_surface(faces)
    tree = shapely.STRtree(places)
    shapely.prepare(zones)
    found = []
    for start in range(0, len(zones), CHUNK):
        zone, face = tree.query(zones[start : start + CHUNK], predicate="intersects")
        found.append((zone + start, face))
        progress(0.3 + 0.3 * min(1.0, (start + CHUNK) / len(zones)))
    zone, face = (np.concatenate(part) for part in zip(*found))
    ones = np.ones(len(zone), np.int64)
    return sparse.csr_matrix((ones, (zone, face)), shape=(len(zones), len(faces)))


def _absorb(faces, inside, tolerance):
    """The face that each face is counted with, and the faces that were absorbed.

    A face is a sliver when no disc of the tolerance's diameter fits into it. A zone that is
    nothing but slivers keeps its largest.
    """
    host = np.arange(len(faces))
    area, length = shapely.area(faces), shapely.length(faces)
    thin = np.flatnonzero(area < 0.5 * tolerance * length)
    thin = thin[shapely.is_empty(shapely.buffer(faces[thin], -0.5 * tolerance))]
    if not len(thin):
        return host, thin
    is_sliver = np.zeros(len(faces), bool)
    is_sliver[thin] = True
    for zone in np.flatnonzero(inside @ (~is_sliver).astype(int) == 0):
        pieces = inside.indices[inside.indptr[zone] : inside.indptr[zone + 1]]
        if len(pieces) and is_sliver[pieces].all():
            is_sliver[pieces[np.argmax(area[pieces])]] = False
    thin = np.flatnonzero(is_sliver)
    sliver, other = shapely.STRtree(faces).query(faces[thin], predicate="intersects")
    sliver = thin[sliver]
    sliver, other = sliver[sliver != other], other[sliver != other]
    shared = shapely.length(shapely.intersection(faces[sliver], faces[other]))
    touching = shared > 0
    sliver, other, shared = sliver[touching], other[touching], shared[touching]
    settled = ~is_sliver
    while True:
        usable = settled[other] & ~settled[sliver]
        if not usable.any():
            break
        order = np.lexsort((-shared[usable], sliver[usable]))
        first = np.unique(sliver[usable][order], return_index=True)
        host[first[0]] = host[other[usable][order][first[1]]]
        settled[first[0]] = True
    return host, np.flatnonzero(is_sliver & settled)


def _merge(faces, inside, host):
    """Join faces that lie in the same zones, each sliver with its host."""
    columns = inside.tocsc()
    columns.sort_indices()
    keys, atom_of_face = {}, np.empty(len(faces), np.int64)
    for face in np.flatnonzero(host == np.arange(len(faces))):
        key = columns.indices[columns.indptr[face] : columns.indptr[face + 1]].tobytes()
        atom_of_face[face] = keys.setdefault(key, len(keys))
    atom_of_face = atom_of_face[host]
    order = np.argsort(atom_of_face, kind="stable")
    starts = np.searchsorted(atom_of_face[order], np.arange(len(keys) + 1))
    atoms = np.empty(len(keys), object)
    for atom in range(len(keys)):
        pieces = order[starts[atom] : starts[atom + 1]]
        atoms[atom] = faces[pieces[0]] if len(pieces) == 1 else shapely.union_all(faces[pieces])
    own = np.flatnonzero(host == np.arange(len(faces)))
    first = own[np.unique(atom_of_face[own], return_index=True)[1]]
    return atoms, inside[:, first].tocsr()
