"""Parts of help pages: the page itself, and tables of parameters and outputs from definitions."""

import html
import json
import re
from pathlib import Path

TEXTS = Path(__file__).resolve().parent / "help_texts"

CAUTION = (
    "Thresholds, and whether anything may be published, are for the data's owner, local rules and "
    "law to decide, and a map is no substitute for licensed practice. The tool shows what its "
    "stated rules give on the data it was handed."
)

KINDS = {
    "source": "vector layer",
    "vector": "vector layer",
    "raster": "raster layer",
    "multilayer": "list of layers",
    "field": "field",
    "distance": "length in metres",
    "number": "number",
    "enum": "choice",
    "boolean": "yes or no",
    "string": "text",
    "crs": "CRS",
    "rasterDestination": "raster file",
    "sink": "layer or table",
    "fileDestination": "file",
    "folderDestination": "folder",
}


def page(title, body):
    """One HTML page."""
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f"<title>{html.escape(title)}</title>\n"
        '<link rel="stylesheet" href="style.css">\n</head>\n<body>\n'
        f"{body}\n</body>\n</html>\n"
    )


def sections(name):
    """The sections of a text in tools/help_texts, by their id."""
    text = (TEXTS / f"{name}.html").read_text(encoding="utf-8")
    return dict(re.findall(r'<section id="(\w+)">\n?(.*?)\n?</section>', text, re.DOTALL))


def stored(name):
    """What a tool has kept beside the texts, from JSON."""
    return json.loads((TEXTS / f"{name}.json").read_text(encoding="utf-8"))


def linked(text, algorithms):
    """Put a link with the tool's own name in place of each ``{tool:id}``."""

    def link(found):
        name = found.group(1)
        return f'<a href="{name}.html">{html.escape(algorithms[name].displayName())}</a>'

    return re.sub(r"\{tool:(\w+)\}", link, text)


def table(head, rows):
    """A table from cells that are HTML already."""
    lines = ["".join(f"<th>{cell}</th>" for cell in head)]
    lines += ["".join(f"<td>{cell}</td>" for cell in row) for row in rows]
    return "<table>\n" + "\n".join(f"<tr>{line}</tr>" for line in lines) + "\n</table>"


def code(words):
    """Words as they are typed."""
    return f"<code>{html.escape(words)}</code>"


def parameter_table(algorithm):
    """Key, meaning and value of every parameter: what it takes, whether it is needed, default."""
    rows = []
    for definition in algorithm.parameterDefinitions():
        words = f"<b>{html.escape(definition.description())}</b>"
        if definition.help():
            words += f"<br>{html.escape(definition.help())}"
        taken = f'<span class="value">{value(definition)}</span>'
        rows.append([code(definition.name()), words, taken])
    return table(["key", "meaning", "value"], rows)


def value(definition):
    """What a parameter takes, whether it is needed, and what it is by default, as HTML."""
    flags = definition.flags()
    optional = bool(flags & definition.Flag.FlagOptional)
    advanced = bool(flags & definition.Flag.FlagAdvanced)
    default = definition.defaultValue()
    parts = [kind_words(definition)]
    if definition.type() == "enum":
        parts.append(choice_words(definition))
    elif isinstance(default, bool):
        parts.append(f"default {'yes' if default else 'no'}")
    elif default not in (None, ""):
        parts.append(f"default {html.escape(short(default))}")
    else:
        parts.append("optional" if optional else "<b>required</b>")
    if advanced:
        parts.append("advanced")
    return "<br>".join(parts)


def short(default):
    """A default as it would be typed."""
    return f"{default:g}" if isinstance(default, float) else str(default)


def kind_words(definition):
    """What kind of value a parameter takes."""
    words = KINDS[definition.type()]
    if definition.type() == "field":
        numeric = definition.dataType() == definition.DataType.Numeric
        parent = code(definition.parentLayerParameterName())
        return f"{'numeric ' if numeric else ''}field of {parent}"
    if definition.type() == "source":
        shapes = {1: "point layer", 2: "line layer", 3: "polygon layer"}
        # the numbers of the host's own source types: point 0, line 1, polygon 2
        kinds = {int(one) for one in definition.dataTypes()}
        return shapes.get(min(kinds) + 1, words) if len(kinds) == 1 else words
    if definition.type() == "number":
        whole = definition.dataType() == definition.Type.Integer
        return ("whole number" if whole else "number") + bounds(definition)
    return words


def bounds(definition):
    """The range of a number where it is narrower than any number."""
    least, most = definition.minimum(), definition.maximum()
    low = f" from {least:g}" if abs(least) < 1e300 and least > -(2**31) else ""
    high = f" to {most:g}" if most < 2**31 - 1 else ""
    return low + high


def choice_words(definition):
    """The choices with the numbers that stand for them on the command line."""
    default = definition.defaultValue()
    words = []
    for place, option in enumerate(definition.options()):
        mark = " (default)" if place == default else ""
        words.append(f"{place}: {html.escape(option)}{mark}")
    return "<br>".join(words)


def output_table(algorithm, found):
    """Key and meaning of every output; what its bands or fields hold.

    Parameters
    ----------
    algorithm : QgsProcessingAlgorithm
    found : dict
        Bands or fields by output, see help_examples.
    """
    rows = []
    for output in algorithm.outputDefinitions():
        definition = algorithm.parameterDefinition(output.name())
        words = f"<b>{html.escape(output.description())}</b>"
        if definition is not None and definition.help():
            words += f"<br>{html.escape(definition.help())}"
        inner = found.get(output.name())
        if inner:
            head = "band" if output.type() == "outputRaster" else "field"
            words += "\n" + inner_table(inner, head)
        rows.append([code(output.name()), words])
    return table(["key", "what it is"], rows)


def inner_table(inner, head):
    """Bands with units, or fields with meanings; ``head`` says which."""
    rows = [[code(name), html.escape(words) or "–"] for name, words in inner.items()]
    return table([head, "unit" if head == "band" else "meaning"], rows)
