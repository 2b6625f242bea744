"""How centres, ellipses and paths are drawn."""

from qgis.core import (
    QgsCategorizedSymbolRenderer,
    QgsFillSymbol,
    QgsLineSymbol,
    QgsMarkerSymbol,
    QgsRendererCategory,
    QgsSingleSymbolRenderer,
)

from .labels import labelled
from .text import tr

MEAN, MEDIAN = "mean centre", "geometric median"
DEVIATION, CONFIDENCE = "deviation", "confidence"
INK, SECOND_INK = "#1d4763", "#b4581f"


def centres(layer):
    """Look: mean centres as dots, named by group; geometric medians as crosses."""
    marks = {
        MEAN: ({"name": "circle", "color": INK, "outline_color": "#fcfbf8", "size": "2.6"}),
        MEDIAN: ({"name": "cross2", "color": SECOND_INK, "outline_color": SECOND_INK, "size": "2"}),
    }
    words = {MEAN: tr("Mean centre"), MEDIAN: tr("Geometric median")}

    def marked(layer):
        entries = [
            QgsRendererCategory(place, QgsMarkerSymbol.createSimple(mark), words[place])
            for place, mark in marks.items()
        ]
        layer.setRenderer(QgsCategorizedSymbolRenderer("place", entries))

    labelled(marked, f"if(\"place\" = '{MEAN}', \"group\", '')")(layer)


def ellipses(layer):
    """Look: outlines; the spread of the records drawn through, the confidence filled faintly."""
    kinds = {
        DEVIATION: (
            tr("Spread of the records"),
            {"style": "no", "outline_color": INK, "outline_width": "0.35"},
        ),
        CONFIDENCE: (
            tr("Where the centre is, with confidence"),
            {"color": "180,88,31,70", "outline_color": SECOND_INK, "outline_width": "0.3"},
        ),
    }
    layer.setRenderer(
        QgsCategorizedSymbolRenderer(
            "kind",
            [
                QgsRendererCategory(kind, QgsFillSymbol.createSimple(symbol), words)
                for kind, (words, symbol) in kinds.items()
            ],
        )
    )


def path(layer):
    """Look: lines that run from one centre to the next."""
    layer.setRenderer(
        QgsSingleSymbolRenderer(
            QgsLineSymbol.createSimple({"color": INK, "width": "0.6", "capstyle": "round"})
        )
    )
