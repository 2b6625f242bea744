"""How the extreme zonings open."""

import numpy as np
from qgis.core import QgsFillSymbol, QgsRuleBasedRenderer

from .looks import OUTLINE, SEQUENCE
from .text import number, tr

STEPS = 5


def extreme_zones(values, unit):
    """Look: two zonings over each other in one layer, one shown and the other a tick away.

    Parameters
    ----------
    values : (zones,) array
        Of the zones of both, in the unit shown; NaN for none.
    unit : str
    """
    known = values[~np.isnan(values)]
    breaks = np.unique(np.quantile(known, np.linspace(0, 1, STEPS + 1))) if len(known) else [0, 1]
    if len(breaks) < 2:
        breaks = [breaks[0] - 0.5, breaks[0] + 0.5]

    def look(layer):
        root = QgsRuleBasedRenderer.Rule(None)
        titles = {
            "largest": tr("Zoning with the largest value of the statistic"),
            "smallest": tr("Zoning with the smallest value of the statistic"),
        }
        for which, title in titles.items():
            rule = QgsRuleBasedRenderer.Rule(None, 0, 0, f"\"extreme\" = '{which}'", title)
            for step in range(len(breaks) - 1):
                rule.appendChild(_step(breaks, step, unit))
            rule.setActive(which == "largest")
            root.appendChild(rule)
        layer.setRenderer(QgsRuleBasedRenderer(root))

    return look


def _step(breaks, step, unit):
    low, high = float(breaks[step]), float(breaks[step + 1])
    colour = SEQUENCE[round(step * (len(SEQUENCE) - 2) / max(len(breaks) - 2, 1))]
    symbol = QgsFillSymbol.createSimple(
        {"color": colour, "outline_color": OUTLINE, "outline_width": "0.3"}
    )
    # the quotient of large counts may differ from the break in its last digit
    slack = 1e-9 * max(abs(low), abs(high))
    last = step == len(breaks) - 2
    words = f'"value" >= {low - slack!r} AND "value" {"<=" if last else "<"} '
    words += repr(high + slack if last else high - slack)
    return QgsRuleBasedRenderer.Rule(
        symbol, 0, 0, words, f"{number(low)} – {number(high)} {unit}".strip()
    )
