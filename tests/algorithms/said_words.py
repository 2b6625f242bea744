"""Runs every algorithm on small data and writes down all that it says, for test_translation.py.

``python said_words.py FOLDER english`` or ``python said_words.py FOLDER marked``. The second runs
under a locale with decimal commas and with a translator that puts marks around every message of the
plugin before any of it is imported; what is put into a message stays outside of the marks, so that
whatever stands outside was never offered for translation.
"""

import hashlib
import html.parser
import json
import locale
import os
import re
import sys
from pathlib import Path

from qgis.core import (
    QgsApplication,
    QgsLayerTreeLayer,
    QgsMapLayerLegend,
    QgsProcessingContext,
    QgsProcessingException,
    QgsProcessingFeedback,
    QgsProviderRegistry,
    QgsRasterLayer,
    QgsSettings,
    QgsVectorLayer,
)
from qgis.PyQt.QtCore import QCoreApplication, QLocale, Qt, QTranslator

HERE = Path(__file__).resolve().parent
OPEN, CLOSE = "⟦", "⟧"
PLACE = re.compile(r"\{\{|\}\}|\{[^{}]*\}")
BAD_KINDS = ("none", "w-neg")


def marked(message):
    """A message in marks, what is put into it outside of them."""
    parts, last = [], 0
    for place in PLACE.finditer(message):
        if place.group() not in ("{{", "}}"):
            parts.append((message[last : place.start()], place.group()))
            last = place.end()
    parts.append((message[last:], ""))
    return "".join((f"{OPEN}{text}{CLOSE}" if text else "") + value for text, value in parts)


class Marker(QTranslator):
    """Translates into marks."""

    def translate(self, context, message, remark=None, number=-1):
        return marked(message) if context == "Steadfield" else None

    def isEmpty(self):
        return False


class Listener(QgsProcessingFeedback):
    """Keeps everything it is told."""

    def __init__(self):
        super().__init__(False)
        self.said = []

    def pushWarning(self, words):
        self.said.append(("warning", words))

    def pushInfo(self, words):
        self.said.append(("log", words))

    def setProgressText(self, words):
        self.said.append(("log", words))

    def reportError(self, words, fatalError=False):
        self.said.append(("error", words))


class Page(html.parser.HTMLParser):
    """The texts of a page or a drawing, those behind pictures too."""

    def __init__(self):
        super().__init__()
        self.texts, self.styles = [], 0

    def handle_starttag(self, tag, attributes):
        self.styles += tag == "style"
        self.texts += [value for name, value in attributes if name in ("alt", "title")]

    def handle_endtag(self, tag):
        self.styles -= tag == "style"

    def handle_data(self, text):
        if text.strip() and not self.styles:
            self.texts.append(text.strip())


def texts_of_page(text):
    page = Page()
    page.feed(text)
    return page.texts


def definitions(algorithm):
    """What an algorithm shows before it runs, as pairs (where, words)."""
    said = [("name", algorithm.displayName()), ("group", algorithm.group())]
    said += [("tag", tag) for tag in algorithm.tags()]
    said += [("help", text) for text in texts_of_page(algorithm.shortHelpString())]
    for one in algorithm.parameterDefinitions():
        said += [(one.name(), one.description()), (f"{one.name()} help", one.help())]
        if one.type() == "enum":
            said += [(f"{one.name()} option", option) for option in one.options()]
        if one.type() == "fileDestination":
            said.append((f"{one.name()} files", one.fileFilter().split(";;")[0]))
    return said + [(one.name(), one.description()) for one in algorithm.outputDefinitions()]


def watch_plots():
    """Gather the texts of plots in place of their pictures; returns the list they go to."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure
    from matplotlib.text import Text
    from steadfield.plugin.report import Report

    drawn = []

    def plot(self, title, draw, caption, size=(8.0, 4.2)):
        figure = Figure(figsize=size, layout="constrained")
        FigureCanvasAgg(figure)
        draw(figure)
        # the axes write their numbers when they are asked; a whole drawing takes ten times as long
        numbers = [
            text
            for axes in figure.axes
            for axis in (axes.xaxis, axes.yaxis)
            for text in axis.get_ticklabels()
        ]
        texts = [text.get_text() for text in [*figure.findobj(Text), *numbers]]
        drawn.extend(text for text in texts if text.strip())
        self.picture(title, b"", caption)

    Report.plot = plot
    return drawn


def layers_of(path):
    """The layers in a file, opened as a user would."""
    if path.endswith(".tif"):
        return [QgsRasterLayer(path, "output")]
    found = QgsProviderRegistry.instance().querySublayers(path)
    return [QgsVectorLayer(one.uri(), one.name(), "ogr") for one in found]


def shown_by(layer):
    """Aliases, legend and bands of a layer, as pairs (where, words)."""
    if isinstance(layer, QgsRasterLayer):
        # the host puts "Band 1: " in front
        names = [layer.bandName(band + 1) for band in range(layer.bandCount())]
        said = [("band", name.split(": ", 1)[1]) for name in names if ": " in name]
        legend = QgsMapLayerLegend.defaultRasterLegend(layer)
    else:
        said = [("alias", field.alias()) for field in layer.fields() if field.alias()]
        legend = QgsMapLayerLegend.defaultVectorLegend(layer)
    tree = QgsLayerTreeLayer(layer)
    for node in legend.createLayerTreeModelLegendNodes(tree):
        said.append(("legend", str(node.data(Qt.ItemDataRole.DisplayRole) or "")))
    return said


def values_in(layer):
    """Attributes of every feature, or a digest of the pixels."""
    if isinstance(layer, QgsRasterLayer):
        from osgeo import gdal

        pixels = gdal.Open(layer.source()).ReadAsArray()
        return hashlib.sha256(pixels.tobytes()).hexdigest()
    return [
        [*map(str, feature.attributes()), feature.geometry().asWkt(6)]
        for feature in layer.getFeatures()
    ]


def run(algorithm, parameters, targets, drawn):
    """Run once; returns what was said as pairs (where, words), and what was written."""
    import processing

    listener = Listener()
    said, results = [], {}
    drawn.clear()
    given = {**parameters, **{name: str(path) for name, path in targets.items()}}
    try:
        results = processing.run(
            f"steadfield:{algorithm}", given, feedback=listener, context=QgsProcessingContext()
        )
    except QgsProcessingException as error:
        said.append(("error", str(error)))
    said += [*listener.said, *(("plot", text) for text in drawn)]
    written = {
        name: repr(value) for name, value in results.items() if isinstance(value, (int, float))
    }
    for path in targets.values():
        for file in sorted(path.rglob("*")) if path.is_dir() else [path]:
            if file.suffix in (".html", ".svg") and file.exists():
                text = file.read_text("utf-8")
                said += [(file.name, words) for words in texts_of_page(text)]
                written[file.name] = re.sub(r'src="data:[^"]*"', "", text)
            elif file.suffix in (".tif", ".gpkg") and file.exists():
                for layer in layers_of(str(file)):
                    place = f"{file.name} {layer.name()}"
                    said += [(f"{place} {where}", words) for where, words in shown_by(layer)]
                    written[place] = values_in(layer)
    return said, written


def tell_all(folder, bad_kinds):
    """Everything that is said and written, by algorithm and kind of data."""
    from bad_input import RECIPES
    from bad_input_feeds import Feeds

    feeds, drawn = Feeds(folder), watch_plots()
    notes = {}
    for algorithm, recipe in RECIPES.items():
        for kind in ("good", *bad_kinds) if recipe.main else ("good",):
            out = folder / "out" / algorithm / kind
            out.mkdir(parents=True)
            parameters = {
                name: feeds(value[5:], "good")
                if isinstance(value, str) and value.startswith("good:")
                else value
                for name, value in {**recipe.settings, **recipe.weights}.items()
            }
            if recipe.main:
                parameters[recipe.main] = feeds(recipe.feed, kind)
            targets = {
                name: out / f"{name.lower()}{ending}"
                for name, ending in recipe.outputs.items()
                if kind == "good" or name == "REPORT"
            }
            said, written = run(algorithm, parameters, targets, drawn)
            notes[f"{algorithm} {kind}"] = {"said": said, "written": written}
    feeds.made.clear()
    return notes


def main():
    folder, is_marked = Path(sys.argv[1]), sys.argv[2] == "marked"
    notes = {}
    sys.path.insert(0, str(HERE.parent))
    from conftest import import_checkout

    application = QgsApplication([], True)
    application.initQgis()
    if is_marked:
        settings = QgsSettings()
        settings.setValue("locale/overrideFlag", True)
        settings.setValue("locale/userLocale", "de_DE")
        settings.setValue("locale/globalLocale", "de_DE")
        QgsApplication.setLocale(QLocale("de_DE"))
        QLocale.setDefault(QLocale("de_DE"))
        try:
            locale.setlocale(locale.LC_ALL, "de_DE.UTF-8")
        except locale.Error:
            notes["no system locale"] = True
        marker = Marker()
        QCoreApplication.installTranslator(marker)
    notes["decimal point"] = [locale.localeconv()["decimal_point"], QLocale().toString(1.5, "f", 1)]
    import_checkout()
    sys.path.append(str(Path(QgsApplication.pkgDataPath()) / "python" / "plugins"))
    from processing.core.Processing import Processing

    Processing.initialize()
    from steadfield.plugin.provider import Provider

    provider = Provider()
    QgsApplication.processingRegistry().addProvider(provider)
    notes["provider"] = [("name", provider.longName())]
    notes["definitions"] = {one.name(): definitions(one) for one in provider.algorithms()}
    notes["runs"] = tell_all(folder, BAD_KINDS if is_marked else ())
    (folder / "notes.json").write_text(json.dumps(notes, ensure_ascii=False), encoding="utf-8")
    # the host's own end may wait for threads that nobody needs any more
    os._exit(0)


if __name__ == "__main__":
    main()
