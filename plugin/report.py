"""One HTML page from titled parts: text, table, plot."""

import base64
import html
import io
import platform

import numpy as np
import scipy
import shapely
from qgis.core import Qgis

from .text import said, tr

PAGE = """<!DOCTYPE html>
<html lang="{language}">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{title}</title>
<style>
body {{ font: 16px/1.5 "Source Sans 3", "Noto Sans", Helvetica, Arial, sans-serif; color: #23262b;
  background: #fcfbf8; margin: 0 auto; max-width: 62rem; padding: 1.5rem 2rem 4rem; }}
h1 {{ font-size: 1.7rem; line-height: 1.2; margin: 0.5rem 0 0.2rem; }}
h2 {{ font-size: 1.15rem; margin: 2.2rem 0 0.5rem; border-bottom: 1px solid #d9d4c7;
  padding-bottom: 0.2rem; }}
p {{ margin: 0.5rem 0; max-width: 46rem; }}
.question {{ color: #5b6068; margin: 0; }}
.answer {{ font-size: 1.2rem; border-left: 5px solid #8a5a1c; padding: 0.3rem 0 0.3rem 1rem;
  margin: 1rem 0; }}
.caution {{ background: #f4eede; padding: 0.5rem 1rem; border-radius: 4px; }}
.confidential {{ background: #7d1f1f; color: #fff; padding: 0.5rem 1rem; border-radius: 4px; }}
figure {{ margin: 1rem 0; }}
figure img {{ max-width: 100%; height: auto; }}
figcaption, .note {{ color: #5b6068; font-size: 0.9rem; max-width: 46rem; }}
.scroll {{ overflow-x: auto; }}
table {{ border-collapse: collapse; font-size: 0.92rem; }}
th, td {{ padding: 0.25rem 0.9rem 0.25rem 0; text-align: left; vertical-align: top; }}
th {{ border-bottom: 2px solid #b9b2a0; }}
td {{ border-bottom: 1px solid #e6e1d5; }}
td.figure, th.figure {{ text-align: right; font-variant-numeric: tabular-nums; }}
@media print {{ body {{ max-width: none; background: #fff; }} h2 {{ break-after: avoid; }} }}
</style>
</head>
<body>
{body}
</body>
</html>
"""


PLOT_STYLE = {
    "font.size": 10,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "grid.color": "#e6e1d5",
    "axes.axisbelow": True,
    "axes.edgecolor": "#5b6068",
}


def _looks_like_figure(cell):
    return bool(cell) and cell[0] in "−–+0123456789" and len(cell) < 20


def _new_figure(size):
    """The plotting library and an empty figure of a size in inches; ImportError where it is old."""
    import matplotlib
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    if not hasattr(matplotlib, "__version_info__"):
        raise ImportError("matplotlib is older than 3.5, where layouts and labelled ticks begin")
    figure = Figure(figsize=size, layout="constrained")
    FigureCanvasAgg(figure)
    return matplotlib, figure


class Report:
    """A page that is complete on its own; it names no path, user or host.

    Parameters
    ----------
    title : str
    question : str
        What the reader asked.
    answer : str
        The answer in a sentence.
    confidential : bool
        Mark the page as not for release.
    """

    def __init__(self, title, question, answer, confidential=False):
        self.title = title
        self._parts = [f"<h1>{html.escape(said(title))}</h1>"]
        if confidential:
            words = tr("This page carries confidential figures and is not for release.")
            self._parts.append(f'<p class="confidential">{html.escape(words)}</p>')
        self._parts.append(f'<p class="question">{html.escape(said(question))}</p>')
        self._parts.append(f'<p class="answer">{html.escape(said(answer))}</p>')

    def _head(self, title):
        if title:
            self._parts.append(f"<h2>{html.escape(said(title))}</h2>")

    def text(self, title, *paragraphs, kind=""):
        """Add paragraphs; kind ``caution`` sets them apart."""
        self._head(title)
        mark = f' class="{kind}"' if kind else ""
        self._parts.extend(f"<p{mark}>{html.escape(said(words))}</p>" for words in paragraphs)

    def table(self, title, columns, rows, note=""):
        """Add a table; cells are text, columns of figures are set right."""
        self._head(title)
        rows = [[said(cell) for cell in row] for row in rows]
        figures = [
            bool(rows) and all(_looks_like_figure(row[i]) for row in rows)
            for i in range(len(columns))
        ]

        def line(cells, tag):
            return "".join(
                f'<{tag} class="figure">{html.escape(cell)}</{tag}>'
                if figure
                else f"<{tag}>{html.escape(cell)}</{tag}>"
                for cell, figure in zip(cells, figures)
            )

        body = "\n".join(f"<tr>{line(row, 'td')}</tr>" for row in rows)
        head = line([said(column) for column in columns], "th")
        self._parts.append(
            f'<div class="scroll"><table><thead><tr>{head}</tr></thead>'
            f"<tbody>{body}</tbody></table></div>"
        )
        if note:
            self._parts.append(f'<p class="note">{html.escape(said(note))}</p>')

    def plot(self, title, draw, caption, size=(8.0, 4.2)):
        """Add a plot; without matplotlib 3.5 or newer only its caption is shown.

        Parameters
        ----------
        draw : callable
            Takes an empty matplotlib figure and draws on it.
        caption : str
            Says what is seen and in which unit.
        size : (float, float)
            Inches.
        """
        try:
            matplotlib, figure = _new_figure(size)
        except ImportError:
            missing = tr("The plot is left out: it needs the package matplotlib, 3.5 or newer.")
            self.text(title, caption, missing)
            return
        style = dict(PLOT_STYLE)
        # names of groups and layers may hold dollar signs, which are not meant as formulas
        if "text.parse_math" in matplotlib.rcParams:
            style["text.parse_math"] = False
        with matplotlib.rc_context(style):
            draw(figure)
            drawn = io.BytesIO()
            figure.savefig(drawn, format="png", dpi=144, metadata={"Software": None})
        self.picture(title, drawn.getvalue(), caption)

    def picture(self, title, png, caption):
        """Add a picture from PNG bytes."""
        self._head(title)
        code = base64.b64encode(png).decode()
        words = html.escape(said(caption))
        self._parts.append(
            f'<figure><img alt="{words}" src="data:image/png;base64,{code}">'
            f"<figcaption>{words}</figcaption></figure>"
        )

    def links(self, title, pairs):
        """Add links to files beside the page, as pairs (words, file name)."""
        self._head(title)
        items = "".join(
            f'<li><a href="{html.escape(name, quote=True)}">{html.escape(words)}</a></li>'
            for words, name in pairs
        )
        self._parts.append(f"<ul>{items}</ul>")

    def html(self):
        """The whole page as text."""
        return PAGE.format(
            language=tr("en"), title=html.escape(self.title), body="\n".join(self._parts)
        )


def versions():
    """Rows (software, version) of what made a result."""
    rows = [
        ("Steadfield", plugin_version()),
        (tr("Host application"), Qgis.QGIS_VERSION.split("-")[0]),
        ("Python", platform.python_version()),
        ("numpy", np.__version__),
        ("scipy", scipy.__version__),
        ("shapely", shapely.__version__),
    ]
    return rows


def plugin_version():
    """The version that metadata.txt declares."""
    from configparser import ConfigParser
    from pathlib import Path

    metadata = ConfigParser()
    metadata.read(Path(__file__).resolve().parent.parent / "metadata.txt", encoding="utf-8")
    return metadata.get("general", "version", fallback="?")
