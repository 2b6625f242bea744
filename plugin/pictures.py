"""Drawings and pixel arrays as PNG, by the host's own painter."""

import numpy as np
from qgis.PyQt.QtCore import QBuffer, QByteArray, QIODevice
from qgis.PyQt.QtGui import QImage, QPainter

from .text import tr

MILLIMETRES_PER_INCH = 25.4
METRES_PER_INCH = 0.0254
# The painter's scale from 0, smallest file, to 100, fastest; the slow end gains little here.
PNG_EFFORT = 60


def drawing_to_png(svg, dots_per_inch=300):
    """Render a drawing whose viewBox is in millimetres.

    Parameters
    ----------
    svg : str
    dots_per_inch : float

    Returns
    -------
    bytes

    Raises
    ------
    ImportError
        This host has no module for such drawings.
    """
    from qgis.PyQt.QtSvg import QSvgRenderer

    renderer = QSvgRenderer(QByteArray(svg.encode()))
    if not renderer.isValid():
        raise ValueError(tr("The drawing is not well formed."))
    size = renderer.viewBoxF().size() * (dots_per_inch / MILLIMETRES_PER_INCH)
    image = QImage(size.toSize(), QImage.Format.Format_ARGB32)
    image.fill(0)
    image.setDotsPerMeterX(round(dots_per_inch / METRES_PER_INCH))
    image.setDotsPerMeterY(round(dots_per_inch / METRES_PER_INCH))
    painter = QPainter(image)
    renderer.render(painter)
    painter.end()
    return _png(image)


def levels_to_png(levels):
    """A picture as PNG with its transparency.

    Parameters
    ----------
    levels : (4, rows, columns) uint8 array
        Red, green, blue, opacity.

    Returns
    -------
    bytes
    """
    pixels = np.ascontiguousarray(np.moveaxis(levels, 0, -1))
    rows, columns = pixels.shape[:2]
    image = QImage(pixels.tobytes(), columns, rows, 4 * columns, QImage.Format.Format_RGBA8888)
    return _png(image)


def _png(image):
    buffer = QBuffer()
    buffer.open(QIODevice.OpenModeFlag.WriteOnly)
    image.save(buffer, "PNG", PNG_EFFORT)
    return bytes(buffer.data())
