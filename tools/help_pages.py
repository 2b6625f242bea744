"""Write the help pages that ship with the plugin: ``python tools/help_pages.py``.

One page per algorithm, made from its own names, help texts and parameters, and an index that helps
to choose between them. Pictures of the practice district come from plugin/help/pictures.
"""

import html
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
HELP = ROOT / "plugin" / "help"

STYLE = """body { font: 16px/1.5 "Source Sans 3", "Noto Sans", Helvetica, Arial, sans-serif;
  color: #23262b; background: #fcfbf8; margin: 0 auto; max-width: 54rem; padding: 1rem 2rem 3rem; }
h1 { font-size: 1.6rem; margin-bottom: 0.2rem; } h2 { font-size: 1.15rem; margin-top: 2rem; }
img { max-width: 100%; border: 1px solid #d9d4c7; } .question { color: #5b6068; }
table { border-collapse: collapse; } td, th { text-align: left; vertical-align: top;
  padding: 0.3rem 1rem 0.3rem 0; border-bottom: 1px solid #e6e1d5; } code { color: #1d4763; }
.caution { background: #f4eede; padding: 0.5rem 1rem; }"""

CAUTION = (
    "Thresholds, and whether anything may be published, are for the data's owner, local rules and "
    "law to decide, and a map is no substitute for licensed practice. The tool shows what its "
    "stated rules give on the data it was handed."
)

CHOOSING = [
    ("Are the records fit to be mapped at all?", "recordcheck", "Run it first, on every layer."),
    ("Where are records dense?", "adaptivedensity", "Detail where there are many, calm elsewhere."),
    ("How smooth should the surface be?", "bandwidthadvice", "Chains into the surface."),
    ("Is it more than where people live?", "densityratio", "Records against a background."),
    ("Which outline holds half of all records?", "densityoutlines", "From any density raster."),
    ("Where is the middle, and did it move?", "centrespread", "By group, in an order."),
    ("Does the map depend on size and place of cells?", "gridvariance", "From points."),
    ("Does the map depend on how zones are drawn?", "unitvariance", "From small base units."),
    ("Would a correlation survive other zones?", "correlationspread", "From base units."),
    ("How large should cells be?", "cellsize", "A sweep with advice."),
    ("How do several densities look together?", "inkblend", "2 to 6 layers, one picture."),
    ("What do the raw layers look like together?", "rawink", "Before any smoothing."),
    ("Where do the layers agree?", "agreement", "Zones that a policy can name."),
    ("What may be published as counts?", "safehexagons", "Five protection methods."),
    ("What may be published as a surface?", "safesurface", "Attacked before release."),
    ("Can releases be subtracted from each other?", "releaseaudit", "Run it before publishing."),
    ("Where can I practise?", "practicedistrict", "The invented district of Ostermoor."),
]


def page(title, body):
    """One HTML page."""
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f"<title>{html.escape(title)}</title>\n"
        '<link rel="stylesheet" href="style.css">\n</head>\n<body>\n'
        f"{body}\n</body>\n</html>\n"
    )


def algorithm_page(algorithm, question):
    """The page of one algorithm."""
    lines = [
        '<p><a href="index.html">All tools</a></p>',
        f"<h1>{html.escape(algorithm.displayName())}</h1>",
        f'<p class="question">{html.escape(question)}</p>',
        f"<p>{html.escape(algorithm.HELP)}</p>",
    ]
    if (HELP / "pictures" / f"{algorithm.name()}.png").exists():
        lines.append(f'<p><img src="pictures/{algorithm.name()}.png" alt="A result"></p>')
    lines.append("<h2>Parameters</h2>\n<table><tr><th>key</th><th>meaning</th></tr>")
    for definition in algorithm.parameterDefinitions():
        words = f"<b>{html.escape(definition.description())}</b>"
        if definition.help():
            words += f"<br>{html.escape(definition.help())}"
        lines.append(f"<tr><td><code>{definition.name()}</code></td><td>{words}</td></tr>")
    lines.append("</table>\n<h2>Outputs</h2>\n<table><tr><th>key</th><th>what it is</th></tr>")
    for output in algorithm.outputDefinitions():
        words = html.escape(output.description())
        lines.append(f"<tr><td><code>{output.name()}</code></td><td>{words}</td></tr>")
    lines.append("</table>")
    lines.append(f"<p>On the command line: <code>qgis_process help {algorithm.id()}</code></p>")
    lines.append(f'<p class="caution">{CAUTION}</p>')
    return page(algorithm.displayName(), "\n".join(lines))


def index_page(algorithms):
    """The page on choosing between the tools."""
    by_id = {algorithm.name(): algorithm for algorithm in algorithms}
    lines = [
        "<h1>Choosing between the tools</h1>",
        "<p>A map of confidential records has to survive three questions: would it say the same "
        "under another cut, is what looks like a concentration real, and can anyone be picked "
        "out? Start from the question you have.</p>",
        "<table><tr><th>question</th><th>tool</th><th></th></tr>",
    ]
    for question, name, remark in CHOOSING:
        if name in by_id:
            title = html.escape(by_id[name].displayName())
            lines.append(
                f'<tr><td>{html.escape(question)}</td><td><a href="{name}.html">{title}</a></td>'
                f"<td>{html.escape(remark)}</td></tr>"
            )
    lines.append(f'</table>\n<p class="caution">{CAUTION}</p>')
    return page("Choosing between the tools", "\n".join(lines))


def pages(algorithms, questions):
    """All pages as pairs (file name, text).

    Parameters
    ----------
    algorithms : sequence of SteadfieldAlgorithm
    questions : dict of str to str
        The words of each algorithm's QUESTION.
    """
    chosen = [algorithm for algorithm in algorithms if hasattr(algorithm, "QUESTION")]
    made = {f"{one.name()}.html": algorithm_page(one, questions[one.QUESTION]) for one in chosen}
    made["index.html"] = index_page(chosen)
    made["style.css"] = STYLE + "\n"
    return made


def main():
    from headless import Host

    host = Host()
    from steadfield.algorithms.base import QUESTIONS

    HELP.mkdir(exist_ok=True)
    for name, text in pages(host.provider.algorithms(), QUESTIONS).items():
        (HELP / name).write_text(text, encoding="utf-8")
    host.leave()


if __name__ == "__main__":
    main()
