"""Default renderers of the outputs: legible without a click, units in the legend.

A look is a callable that takes a loaded layer and sets its renderer.
"""

from itertools import cycle

import numpy as np
from qgis.core import (
    QgsCategorizedSymbolRenderer,
    QgsColorRampLegendNodeSettings,
    QgsColorRampShader,
    QgsFillSymbol,
    QgsGraduatedSymbolRenderer,
    QgsLineSymbol,
    QgsMarkerSymbol,
    QgsMultiBandColorRenderer,
    QgsPalettedRasterRenderer,
    QgsRasterShader,
    QgsRendererCategory,
    QgsRendererRange,
    QgsSingleBandPseudoColorRenderer,
    QgsSingleSymbolRenderer,
    QgsWkbTypes,
)
from qgis.PyQt.QtGui import QColor

from .text import number, tr

# From paper to dark; lightness falls evenly, so the order survives grey print.
SEQUENCE = ("#f7f1e1", "#d9d2a6", "#a3b98a", "#5f9a84", "#2e7179", "#1d4763", "#141f3d")
# Below, none, above: the two ends differ in hue and the middle is the lightest.
DIVERGING = ("#1f4e79", "#6c9bc0", "#c9d9e3", "#f6f2e8", "#e8c79c", "#c07d3c", "#7a3d10")
# Dark, light, middle grey when printed without colour.
VERDICTS = {1: "#6b1f3f", 0: "#efe9da", -1: "#7fa6bd"}
OUTLINE = "#3b3f46"
MARKERS = ("circle", "square", "triangle", "diamond", "pentagon", "cross_fill", "star")
MISSING = "#ecebe6"
# What cannot be told from noise.
NOISE = "#b9b6b0"


def verdict_words():
    """The three verdicts in words, by code."""
    return {
        1: tr("holds above the threshold under any cut"),
        0: tr("depends on the cut or on small numbers"),
        -1: tr("holds below the threshold under any cut"),
    }


def spread(colours, minimum, maximum):
    """Pairs (value, colour) at equal steps between two values."""
    step = (maximum - minimum) / (len(colours) - 1)
    return [(minimum + index * step, colour) for index, colour in enumerate(colours)]


def root_stops(peak):
    """Pairs (value, colour) at squares of equal steps up to a peak.

    Low densities then keep shades of their own beside a sharp peak. A peak of 0 counts as 1.
    """
    last = len(SEQUENCE) - 1
    return [((peak or 1.0) * (step / last) ** 2, colour) for step, colour in enumerate(SEQUENCE)]


def ramp(band, stops, unit, clear_first=False):
    """Look: one band in a continuous ramp.

    Parameters
    ----------
    band : int
        From 1.
    stops : sequence of (float, str)
        Rising values and their colours.
    unit : str
        Written behind each value in the legend.
    clear_first : bool
        Whether the first colour is see-through.
    """

    def look(layer):
        items = []
        for value, colour in stops:
            shade = QColor(colour)
            if clear_first and not items:
                shade.setAlpha(0)
            label = f"{number(value)} {unit}".strip()
            items.append(QgsColorRampShader.ColorRampItem(value, shade, label))
        shading = QgsColorRampShader(stops[0][0], stops[-1][0])
        shading.setColorRampType(QgsColorRampShader.Type.Interpolated)
        shading.setColorRampItemList(items)
        # a list of labelled values; the continuous bar would leave the unit out
        legend = QgsColorRampLegendNodeSettings()
        legend.setUseContinuousLegend(False)
        shading.setLegendSettings(legend)
        shader = QgsRasterShader()
        shader.setRasterShaderFunction(shading)
        renderer = QgsSingleBandPseudoColorRenderer(layer.dataProvider(), band, shader)
        renderer.setClassificationMin(stops[0][0])
        renderer.setClassificationMax(stops[-1][0])
        layer.setRenderer(renderer)

    return look


def ramp_with_code(band, stops, unit, code, colour, words):
    """Look: one band in a continuous ramp, and one value below it that stands for something else.

    Parameters
    ----------
    band, stops, unit
        As for ``ramp``.
    code : float
        Below the first stop.
    colour, words : str
        Of the code.
    """

    def look(layer):
        ramp(band, stops, unit)(layer)
        shading = layer.renderer().shader().rasterShaderFunction()
        items = list(shading.colorRampItemList())
        shading.setMinimumValue(code)
        shading.setColorRampItemList(
            [QgsColorRampShader.ColorRampItem(code, QColor(colour), words), *items]
        )

    return look


def raster_classes(band, classes):
    """Look: codes of one band as plain classes.

    Parameters
    ----------
    band : int
    classes : sequence of (float, str, str)
        Code, colour, words.
    """

    def look(layer):
        entries = [
            QgsPalettedRasterRenderer.Class(code, QColor(colour), words)
            for code, colour, words in classes
        ]
        layer.setRenderer(QgsPalettedRasterRenderer(layer.dataProvider(), band, entries))

    return look


def raster_verdicts(band):
    """Look: the three verdicts of a band."""
    words = verdict_words()
    return raster_classes(band, [(code, colour, words[code]) for code, colour in VERDICTS.items()])


def _symbol(layer, colour, outline=OUTLINE, width=0.1, marker="circle"):
    kind = QgsWkbTypes.geometryType(layer.wkbType())
    if kind == QgsWkbTypes.GeometryType.PolygonGeometry:
        return QgsFillSymbol.createSimple(
            {"color": colour, "outline_color": outline, "outline_width": str(width)}
        )
    if kind == QgsWkbTypes.GeometryType.LineGeometry:
        return QgsLineSymbol.createSimple({"color": colour, "width": str(max(width, 0.5))})
    return QgsMarkerSymbol.createSimple(
        {
            "name": marker,
            "color": colour,
            "outline_color": outline,
            "outline_width": "0.1",
            "size": "2",
        }
    )


def single(colour, outline=OUTLINE, width=0.3):
    """Look: every feature alike; the colour ``transparent`` leaves an outline only."""

    def look(layer):
        fill = "0,0,0,0" if colour == "transparent" else colour
        layer.setRenderer(QgsSingleSymbolRenderer(_symbol(layer, fill, outline, width)))

    return look


def categories(field, classes, width=0.1):
    """Look: classes of a field; those of points differ in shape, too.

    Parameters
    ----------
    field : str
    classes : sequence of (value, str, str)
        Value, colour, words; the value None stands for null.
    """

    def look(layer):
        entries = []
        for (value, colour, words), marker in zip(classes, cycle(MARKERS)):
            key = "" if value is None else value
            symbol = _symbol(layer, colour, width=width, marker=marker)
            entries.append(QgsRendererCategory(key, symbol, words))
        layer.setRenderer(QgsCategorizedSymbolRenderer(field, entries))

    return look


def verdicts(field="verdict"):
    """Look: the three verdicts of a field."""
    words = verdict_words()
    return categories(field, [(code, colour, words[code]) for code, colour in VERDICTS.items()])


def steps(field, breaks, colours=SEQUENCE, unit="", width=0.1):
    """Look: a number of a field in steps.

    Parameters
    ----------
    field : str
        A field or an expression.
    breaks : sequence of float
        Rising limits, one more than there are steps.
    colours : sequence of str
        At least as many as steps; taken evenly.
    unit : str
    """

    def look(layer):
        many = len(breaks) - 1
        ranges = []
        for index in range(many):
            place = index * (len(colours) - 1) / max(many - 1, 1)
            words = f"{number(breaks[index])} – {number(breaks[index + 1])} {unit}".strip()
            symbol = _symbol(layer, colours[round(place)], width=width)
            ranges.append(QgsRendererRange(breaks[index], breaks[index + 1], symbol, words))
        layer.setRenderer(QgsGraduatedSymbolRenderer(field, ranges))

    return look


def groups_of(values, most=6):
    """Groups of a number's values with as many distinct ones in each, for `groups_or_missing`.

    Parameters
    ----------
    values : (n,) float array
        NaN where there is none.
    most : int
        Number of groups, where there are so many distinct values.

    Returns
    -------
    list of (float, float)
        Lowest and highest value of each group, rising.
    """
    known = np.unique(values[np.isfinite(values)])
    parts = np.array_split(known, min(most, len(known))) if len(known) else []
    return [(float(some[0]), float(some[-1])) for some in parts]


def groups_or_missing(field, groups, missing, colours=SEQUENCE, unit="", width=0.1):
    """Look: groups of a number's values, and what has no value in pale grey.

    Parameters
    ----------
    field : str
    groups : sequence of (float, float)
        Lowest and highest value of each group, rising, both belonging to it.
    missing : str
        What no value means, in words.
    colours : sequence of str
        At least as many as groups; taken evenly.
    unit : str
    """

    def look(layer):
        ranges = [
            QgsRendererRange(-2e300, -0.5e300, _symbol(layer, MISSING, "#a8a497", width), missing)
        ]
        for index, (low, high) in enumerate(groups):
            place = index * (len(colours) - 1) / max(len(groups) - 1, 1)
            words = number(low) if low == high else f"{number(low)} – {number(high)}"
            symbol = _symbol(layer, colours[round(place)], width=width)
            ranges.append(QgsRendererRange(low, high, symbol, f"{words} {unit}".strip()))
        layer.setRenderer(QgsGraduatedSymbolRenderer(f'coalesce("{field}", -1e300)', ranges))

    return look


def picture(layer):
    """Look: red, green, blue and opacity as they are, without any stretch."""
    renderer = QgsMultiBandColorRenderer(layer.dataProvider(), 1, 2, 3)
    renderer.setAlphaBand(4)
    layer.setRenderer(renderer)
