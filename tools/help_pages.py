"""Write the help pages that ship with the plugin: ``python tools/help_pages.py``.

A page is made from an algorithm's own names, help and parameters, from its text in
tools/help_texts, and from the bands and fields that its example has written (help_examples.py).
Beside them stand an index that helps to choose, the worked case and the command line.
Pictures of the practice district come from plugin/help/pictures, the looks of all pages from
plugin/help/style.css, which is written by hand.
"""

import html
import re
from pathlib import Path

from help_parts import (
    CAUTION,
    code,
    linked,
    output_table,
    page,
    parameter_table,
    sections,
    stored,
    table,
)
from model_drawing import drawing, sources_of
from worked_case import filled

ROOT = Path(__file__).resolve().parent.parent
HELP = ROOT / "plugin" / "help"
BACK = '<p><a href="index.html">All tools</a> · <a href="workedcase.html">Worked case</a></p>'


def algorithm_page(algorithm, question, outputs):
    """The page of one algorithm, links to other tools not yet set."""
    text = sections(algorithm.name())
    reading = text["reading"]
    if "{tables}" in reading:
        reading, outputs = reading.replace("{tables}", _practice_tables(outputs)), {}
    parts = [
        f'<p class="question">{html.escape(question)}</p>',
        f"<p>{html.escape(algorithm.HELP)}</p>",
        f'<figure><img src="pictures/{algorithm.name()}.png" alt="A result on the practice '
        f'district"><figcaption>{text["caption"]}</figcaption></figure>',
        "<h2>When to use it</h2>",
        text["use"],
        "<h2>When to use another, or what it does not do</h2>",
        text["not"],
        *_example(algorithm, text),
        "<h2>Parameters</h2>",
        parameter_table(algorithm),
        "<h2>Outputs</h2>",
        output_table(algorithm, outputs),
        "<h2>How to read them</h2>",
        reading,
        "<h2>Method</h2>",
        text["method"],
        '<p class="note">Full references stand in the report of each run.</p>',
        "<h2>Limits and cautions</h2>",
        text["cautions"],
    ]
    return _framed(algorithm.displayName(), parts)


def model_page(model):
    """The page of one ready model, links to other tools not yet set."""
    text = sections(model.name())
    words = model.helpContent().get("ALG_DESC", "")
    parts = [
        '<p class="question">Ready model: a chain of tools in one step</p>',
        f"<p>{html.escape(words)}</p>",
        "<h2>When to use it</h2>",
        text["use"],
        "<h2>When to use another</h2>",
        text["not"],
        "<h2>Steps</h2>",
        step_table(model),
        f"<figure>\n{drawing(model)}\n<figcaption>Inputs, steps and outputs as the model designer "
        "shows them. In the toolbox a right click on the model opens a copy there, to be changed "
        "and saved under a name of your own.</figcaption></figure>",
        *_example(model, text),
        "<h2>Parameters</h2>",
        parameter_table(model),
        "<h2>How to read the results</h2>",
        text["reading"],
    ]
    return _framed(model.displayName(), parts)


def step_table(model):
    """The steps in their order: what each is and what flows into it."""
    steps = model.childAlgorithms()
    rows = []
    for name in _in_order(model):
        step = steps[name]
        algorithm = step.algorithm()
        tool = html.escape(algorithm.displayName())
        if step.algorithmId().startswith("steadfield:"):
            tool = f"{{tool:{algorithm.name()}}}"
        takes = [
            html.escape(model.parameterDefinition(one).description())
            if kind == "input"
            else f"<i>{html.escape(steps[one].description())}</i>"
            for kind, one in sources_of(model, step)
        ]
        rows.append([str(len(rows) + 1), html.escape(step.description()), tool, ", ".join(takes)])
    return table(["", "step", "tool", "takes (results of earlier steps in italics)"], rows)


def _in_order(model):
    """Names of the steps, each after those it takes something from."""
    steps = model.childAlgorithms()
    placed = []
    while len(placed) < len(steps):
        for name in steps:
            before = {one for kind, one in sources_of(model, steps[name]) if kind == "step"}
            if name not in placed and before <= set(placed):
                placed.append(name)
    return placed


def _example(algorithm, text):
    return [
        "<h2>On the command line</h2>",
        f"<pre><code>{html.escape(text['example'], quote=False)}</code></pre>",
        f'<p class="note">The file comes from {{tool:practicedistrict}}. Every parameter: '
        f"{code('qgis_process help ' + algorithm.id())}; chains of steps: "
        '<a href="commands.html">Tools on the command line</a>.</p>',
    ]


def _practice_tables(tables):
    rows = [
        [
            code(name),
            ", ".join(f"{code(key)} ({html.escape(words)})" for key, words in fields.items()),
        ]
        for name, fields in tables.items()
    ]
    return table(["table", "fields"], rows)


def _framed(title, parts):
    head = [BACK, f"<h1>{html.escape(title)}</h1>"]
    return page(title, "\n".join([*head, *parts, f'<p class="caution">{CAUTION}</p>']))


def commands_page():
    """The page on the command line."""
    text = sections("commands")
    chain = f'<pre id="chain"><code>{html.escape(text["chain"], quote=False)}</code></pre>'
    return _framed("Tools on the command line", [text["before"], chain, text["after"]])


def pages(algorithms, questions):
    """All pages as pairs (file name, text).

    Parameters
    ----------
    algorithms : sequence of QgsProcessingAlgorithm
        Of the provider: algorithms, and ready models.
    questions : dict of str to str
        The words of each algorithm's QUESTION.
    """
    by_name = {one.name(): one for one in algorithms}
    outputs = stored("outputs")
    made = {
        f"{name}.html": algorithm_page(one, questions[one.QUESTION], outputs[name])
        if hasattr(one, "QUESTION")
        else model_page(one)
        for name, one in by_name.items()
    }
    title = "Choosing between the tools"
    text = (Path(__file__).parent / "help_texts" / "index.html").read_text(encoding="utf-8")
    made["index.html"] = _framed(title, [text]).replace(BACK + "\n", "")
    made["commands.html"] = commands_page()
    made["workedcase.html"] = _framed("From question to publication", [filled("workedcase.html")])
    return {name: linked(text, by_name) for name, text in made.items()}


def readme():
    """README.md with the short version of the worked case put in anew."""
    path = ROOT / "README.md"
    short = filled("readme.md")
    pattern = r"(<!-- worked case -->\n).*?(<!-- end of worked case -->)"
    return re.sub(
        pattern, lambda found: found.group(1) + short + "\n" + found.group(2),
        path.read_text(encoding="utf-8"), flags=re.DOTALL,
    )  # fmt: skip


def main():
    from headless import Host

    host = Host()
    from steadfield.algorithms.base import QUESTIONS

    HELP.mkdir(exist_ok=True)
    for name, text in pages(host.provider.algorithms(), QUESTIONS).items():
        (HELP / name).write_text(text, encoding="utf-8")
    (ROOT / "README.md").write_text(readme(), encoding="utf-8")
    host.leave()


if __name__ == "__main__":
    main()
