"""The working CRS: where distances and areas can be trusted."""

from dataclasses import dataclass

import numpy as np
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsCoordinateTransform,
    QgsCsException,
    QgsDistanceArea,
    QgsGeometry,
    QgsPointXY,
    QgsRectangle,
    QgsUnitTypes,
)

from ..algorithms.numeric.errors import InputError
from .host import METRES
from .text import tr

AREA_TOLERANCE = 0.01


@dataclass(frozen=True)
class WorkingCrs:
    """A projected CRS in which an algorithm computes and writes.

    Attributes
    ----------
    crs : QgsCoordinateReferenceSystem
    metres : float
        Metres in one unit of the CRS.
    unit : str
        Short name of the unit, for legends.
    note : str
        Why this CRS was taken.
    """

    crs: QgsCoordinateReferenceSystem
    metres: float
    unit: str
    note: str

    @property
    def per_square_kilometre(self):
        """Factor from "per square unit" to "per square kilometre"."""
        return 1e6 / self.metres**2

    @property
    def square_kilometres(self):
        """Factor from square units to square kilometres."""
        return self.metres**2 / 1e6


def _unit_factor(crs):
    return QgsUnitTypes.fromUnitToUnitFactor(crs.mapUnits(), METRES)


def _describe(crs, note):
    return WorkingCrs(
        crs, _unit_factor(crs), QgsUnitTypes.toAbbreviatedString(crs.mapUnits()), note
    )


def area_scale_range(crs, extent, transform_context):
    """Smallest and largest ratio of area in the plane to area on the ellipsoid over an extent.

    Parameters
    ----------
    crs : QgsCoordinateReferenceSystem
        A projected CRS.
    extent : QgsRectangle
        In that CRS.
    transform_context : QgsCoordinateTransformContext

    Returns
    -------
    (float, float)
        Measured on small squares at a 3 x 3 lattice of the extent.
    """
    measure = QgsDistanceArea()
    measure.setSourceCrs(crs, transform_context)
    # an ellipsoid without a code would leave the host without its geographic CRS; those of the
    # Earth differ by less than 0.1 % in area
    named = crs.ellipsoidAcronym()
    measure.setEllipsoid(named if named.startswith("EPSG:") else "EPSG:7030")
    metres = _unit_factor(crs)
    side = 1000.0 / metres
    ratios = []
    for across in (0.0, 0.5, 1.0):
        for up in (0.0, 0.5, 1.0):
            x = extent.xMinimum() + across * extent.width()
            y = extent.yMinimum() + up * extent.height()
            square = QgsGeometry.fromRect(
                QgsRectangle(x - side / 2, y - side / 2, x + side / 2, y + side / 2)
            )
            ratios.append((side * metres) ** 2 / measure.measureArea(square))
    return min(ratios), max(ratios)


def working_crs(crs, extent, transform_context):
    """Choose the CRS to work in for data in a CRS over an extent.

    The layer's own CRS serves when it is projected, in metres or feet, and its area scale stays
    within 1 % over the extent. Otherwise a Lambert azimuthal equal-area CRS is centred on the data;
    its centre is rounded to whole degrees so that it tells nothing about single records.

    Parameters
    ----------
    crs : QgsCoordinateReferenceSystem
    extent : QgsRectangle
        Extent of the data in that CRS.
    transform_context : QgsCoordinateTransformContext

    Returns
    -------
    WorkingCrs

    Raises
    ------
    InputError
        The layer has no CRS, or its extent has no place on the Earth.
    """
    if not crs.isValid():
        raise InputError(
            tr("The layer has no coordinate reference system; set its CRS, then run again.")
        )
    corners = extent.xMinimum(), extent.yMinimum(), extent.xMaximum(), extent.yMaximum()
    if not np.isfinite(corners).all():
        raise InputError(
            tr("The layer has no extent; check that its coordinates are numbers, and its geometry.")
        )
    if not crs.isGeographic() and 0.3 <= _unit_factor(crs) <= 1.0:
        try:
            smallest, largest = area_scale_range(crs, extent, transform_context)
        except (QgsCsException, ZeroDivisionError):
            smallest = largest = float("nan")
        if smallest >= 1 - AREA_TOLERANCE and largest <= 1 + AREA_TOLERANCE:
            return _describe(crs, tr("the layer's own CRS: areas are true within 1 %"))
    to_degrees = QgsCoordinateTransform(
        crs, QgsCoordinateReferenceSystem("EPSG:4326"), transform_context
    )
    try:
        centre = to_degrees.transform(QgsPointXY(extent.center()))
    except QgsCsException as error:
        raise InputError(
            tr("The extent of the layer cannot be placed on the Earth; check the CRS of the layer.")
        ) from error
    equal_area = QgsCoordinateReferenceSystem.fromProj(
        f"+proj=laea +lat_0={round(centre.y())} +lon_0={round(centre.x())} "
        "+datum=WGS84 +units=m +no_defs"
    )
    return _describe(
        equal_area,
        tr("an equal-area CRS centred near the data; the layer's own does not keep areas"),
    )


def chosen_crs(crs):
    """The user's own choice of a working CRS.

    Raises
    ------
    InputError
        It is not projected in metres or feet.
    """
    if not crs.isValid() or crs.isGeographic() or not 0.3 <= _unit_factor(crs) <= 1.0:
        raise InputError(
            tr("A working CRS must be projected, in metres or feet; found {}.").format(
                crs.userFriendlyIdentifier() or tr("an unknown CRS")
            )
        )
    return _describe(crs, tr("as chosen"))


def reproject(coordinates, source, target, transform_context):
    """Move coordinates from one CRS to another in bulk.

    Parameters
    ----------
    coordinates : (n, 2) float array
    source, target : QgsCoordinateReferenceSystem
    transform_context : QgsCoordinateTransformContext

    Returns
    -------
    (n, 2) float array
        NaN where the transformation has no answer.
    """
    coordinates = np.ascontiguousarray(coordinates, float)
    if source == target or len(coordinates) == 0:
        return coordinates
    transform = QgsCoordinateTransform(source, target, transform_context)
    moved = np.full_like(coordinates, np.nan)
    finite = np.flatnonzero(np.isfinite(coordinates).all(axis=1))
    _transform_run(coordinates, finite, transform, moved)
    return moved


def _transform_run(coordinates, chosen, transform, moved):
    """Transform chosen rows as one line string; halve the run where a place has no answer."""
    if len(chosen) == 0:
        return
    # a line string of two equal points stands for a single one
    places = coordinates[chosen if len(chosen) > 1 else np.repeat(chosen, 2)]
    header = np.array([1], np.uint8).tobytes() + np.array([2, len(places)], "<u4").tobytes()
    line = QgsGeometry()
    line.fromWkb(header + places.astype("<f8").tobytes())
    try:
        line.transform(transform)
    except QgsCsException:
        if len(chosen) > 1:
            half = len(chosen) // 2
            _transform_run(coordinates, chosen[:half], transform, moved)
            _transform_run(coordinates, chosen[half:], transform, moved)
        return
    result = np.frombuffer(bytes(line.asWkb()), "<f8", offset=9).reshape(-1, 2)
    moved[chosen] = result[: len(chosen)]
    moved[chosen[~np.isfinite(moved[chosen]).all(axis=1)]] = np.nan
