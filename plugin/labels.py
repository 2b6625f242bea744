"""Labels on the map."""

from qgis.core import (
    QgsPalLayerSettings,
    QgsTextBufferSettings,
    QgsTextFormat,
    QgsVectorLayerSimpleLabeling,
)
from qgis.PyQt.QtGui import QColor

from .looks import OUTLINE

PAPER = "#fcfbf8"


def labelled(look, expression):
    """Look: another look, and a label with a halo on every feature.

    Parameters
    ----------
    look : callable
    expression : str
        A field or an expression of the host.
    """

    def look_with_labels(layer):
        look(layer)
        text = QgsTextFormat()
        text.setSize(9)
        text.setColor(QColor(OUTLINE))
        halo = QgsTextBufferSettings()
        halo.setEnabled(True)
        halo.setSize(0.9)
        halo.setColor(QColor(PAPER))
        text.setBuffer(halo)
        settings = QgsPalLayerSettings()
        settings.fieldName = expression
        settings.isExpression = not expression.isidentifier()
        settings.setFormat(text)
        layer.setLabeling(QgsVectorLayerSimpleLabeling(settings))
        layer.setLabelsEnabled(True)

    return look_with_labels
