"""How the layers of the practice district are drawn: a quiet town under what is studied."""

from qgis.core import (
    QgsCategorizedSymbolRenderer,
    QgsFillSymbol,
    QgsGraduatedSymbolRenderer,
    QgsLineSymbol,
    QgsMarkerSymbol,
    QgsRendererCategory,
    QgsRendererRange,
    QgsSingleSymbolRenderer,
)

from .labels import labelled
from .looks import SEQUENCE
from .text import number, tr

NO_LINE = {"outline_style": "no"}


def dots(colour, size):
    """Look: points as small dots without an outline; size in millimetres."""

    def look(layer):
        symbol = QgsMarkerSymbol.createSimple({"color": colour, "size": str(size), **NO_LINE})
        layer.setRenderer(QgsSingleSymbolRenderer(symbol))

    return look


def fill(colour, outline=None, width=0.2):
    """Look: polygons in one colour; without an outline colour there is no outline."""

    def look(layer):
        edge = NO_LINE if outline is None else {"outline_color": outline}
        layer.setRenderer(
            QgsSingleSymbolRenderer(
                QgsFillSymbol.createSimple({"color": colour, "outline_width": str(width), **edge})
            )
        )

    return look


def outlines(colour, width, dashed=False, label=None):
    """Look: polygon outlines only, named by a field where one is given."""

    def look(layer):
        layer.setRenderer(
            QgsSingleSymbolRenderer(
                QgsFillSymbol.createSimple(
                    {
                        "style": "no",
                        "outline_color": colour,
                        "outline_width": str(width),
                        "outline_style": "dash" if dashed else "solid",
                    }
                )
            )
        )

    return labelled(look, label) if label else look


def land_cover(layer):
    """Look: river, marsh, works and parks."""
    colours = {
        "river": ("#a9c9dc", tr("River")),
        "marsh": ("#cddcc3", tr("Marsh")),
        "works": ("#d8d3cb", tr("Works")),
        "park": ("#b7d3a4", tr("Park")),
    }
    layer.setRenderer(
        QgsCategorizedSymbolRenderer(
            "kind",
            [
                QgsRendererCategory(
                    kind, QgsFillSymbol.createSimple({"color": colour, **NO_LINE}), words
                )
                for kind, (colour, words) in colours.items()
            ],
        )
    )


def streets(layer):
    """Look: streets by kind, the wider the more they carry."""
    lines = {
        "lane": ("#cfc8b8", 0.12, tr("Lane")),
        "street": ("#c2bbab", 0.12, tr("Street")),
        "through road": ("#b0a58d", 0.25, tr("Through road")),
        "main road": ("#a8793f", 0.5, tr("Main road")),
    }
    layer.setRenderer(
        QgsCategorizedSymbolRenderer(
            "kind",
            [
                QgsRendererCategory(
                    kind,
                    QgsLineSymbol.createSimple({"color": colour, "width": str(width)}),
                    words,
                )
                for kind, (colour, width, words) in lines.items()
            ],
        )
    )


def rate_steps(field, breaks):
    """Look: a rate per 1000 in steps over thin outlines."""

    def look(layer):
        ranges = []
        for step, (lower, upper) in enumerate(zip(breaks, breaks[1:])):
            colour = SEQUENCE[round(step * (len(SEQUENCE) - 1) / max(len(breaks) - 2, 1))]
            symbol = QgsFillSymbol.createSimple(
                {"color": colour, "outline_color": "#8f8a7d", "outline_width": "0.06"}
            )
            words = tr("{} to {} per 1000").format(number(lower), number(upper))
            ranges.append(QgsRendererRange(lower, upper, symbol, words))
        layer.setRenderer(QgsGraduatedSymbolRenderer(field, ranges))

    return look
