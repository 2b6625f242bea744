"""The graphical models that come with the plugin, offered beside its algorithms."""

from pathlib import Path

from qgis.core import Qgis, QgsMessageLog, QgsProcessingModelAlgorithm
from qgis.PyQt.QtGui import QIcon

from . import looks, model_looks, opening
from .text import tr

FOLDER = Path(__file__).resolve().parent / "models"
HELP = FOLDER.parent / "help"
ICON = FOLDER.parent.parent / "icons" / "readymodel.svg"


class ReadyModel(QgsProcessingModelAlgorithm):
    """A model file as an algorithm: its id is the file's name, whatever the model is called.

    Parameters
    ----------
    path : pathlib.Path
        A .model3 file.
    """

    def __init__(self, path):
        super().__init__()
        self._path = path
        if not self.fromFile(str(path)):
            raise OSError(tr("{}: the model cannot be read.").format(path.name))
        self._translate()

    def _translate(self):
        """Say in the user's language what is shown; keys of inputs and outputs stay."""
        shown = [*self.parameterDefinitions(), *self.outputDefinitions()]
        for definition in shown:
            definition.setDescription(translated(definition.description()))
        for definition in _asked(self):
            definition.setHelp(translated(definition.help()))
        for child in self.childAlgorithms():
            step = self.childAlgorithm(child)
            step.setDescription(translated(step.description()))
        texts = self.helpContent()
        self.setHelpContent({key: translated(words) for key, words in texts.items()})

    def name(self):
        return self._path.stem

    def displayName(self):
        return translated(super().displayName())

    def group(self):
        return tr("Ready models")

    def groupId(self):
        return "readymodels"

    def tags(self):
        return [tr("model"), tr("chain"), tr("workflow")]

    def icon(self):
        return QIcon(str(ICON))

    def svgIconPath(self):
        return str(ICON)

    def helpUrl(self):
        page = HELP / f"{self._path.stem}.html"
        return page.as_uri() if page.exists() else ""

    def createInstance(self):
        return ReadyModel(self._path)

    def processAlgorithm(self, parameters, context, feedback):
        results = super().processAlgorithm(parameters, context, feedback)
        for output, (kind, look) in _looks().get(self.name(), {}).items():
            if results.get(output):
                place = (opening.next_step(),)
                opening.style_output(results[output], kind, look, {}, place, context)
        return results


def translated(words):
    """Words of a model, which `words_of` gives to translators."""
    return tr(words) if words else words


def words_of(model):
    """What a user reads of a model, in English.

    Parameters
    ----------
    model : QgsProcessingModelAlgorithm
        As it was read from its file.

    Returns
    -------
    list of str
    """
    shown = [*model.parameterDefinitions(), *model.outputDefinitions()]
    words = [model.displayName(), *(definition.description() for definition in shown)]
    words += [definition.help() for definition in _asked(model)]
    words += [model.childAlgorithm(child).description() for child in model.childAlgorithms()]
    words += model.helpContent().values()
    return list(dict.fromkeys(filter(None, words)))


def _asked(model):
    """Parameters but for outputs, whose help is that of the step that writes them."""
    return [one for one in model.parameterDefinitions() if not one.isDestination()]


def ready_models():
    """Every model in the folder; their steps must be registered before this is called."""
    found = []
    for path in sorted(FOLDER.glob("*.model3")):
        try:
            found.append(ReadyModel(path))
        except OSError as error:
            QgsMessageLog.logMessage(str(error), "Steadfield", Qgis.MessageLevel.Warning)
    return found


def _looks():
    """Looks of outputs that steps of the host itself write: kind and look, by model and output."""
    verdicts = "vector", looks.verdicts()
    return {
        "placesthathold": {"hold:Places that hold": verdicts},
        "placesthatholdtwice": {"hold:Places that hold in both": verdicts},
        "cleanrelease": {
            "release_hexagons:Released hexagons": ("vector", model_looks.published_counts),
            "release_surface:Released surface": ("raster", model_looks.published_density),
        },
    }
