"""A graphical model written down: inputs, steps and outputs, each at its place in the diagram."""

from qgis.core import (
    QgsProcessingModelAlgorithm,
    QgsProcessingModelChildAlgorithm,
    QgsProcessingModelChildDependency,
    QgsProcessingModelChildParameterSource,
    QgsProcessingModelComment,
    QgsProcessingModelOutput,
    QgsProcessingModelParameter,
    QgsProcessingParameterDefinition,
)
from qgis.PyQt.QtCore import QPointF, QSizeF

GROUP = "Ready models"
COLUMN, ROW = 270, 110
BOX = QSizeF(230, 34)
NOTE = QSizeF(230, 56)


def given(name):
    """What the user gives to an input of the model."""
    return QgsProcessingModelChildParameterSource.fromModelParameter(name)


def result(step, output):
    """What an earlier step has returned."""
    return QgsProcessingModelChildParameterSource.fromChildOutput(step, output)


def worked_out(expression):
    """What an expression over inputs and earlier results gives."""
    return QgsProcessingModelChildParameterSource.fromExpression(expression)


class Diagram:
    """A model under construction; places are (column, row), counted from the upper left.

    Parameters
    ----------
    title : str
    words : str
        What the model does, for its help.
    """

    def __init__(self, title, words):
        self.model = QgsProcessingModelAlgorithm(title, GROUP)
        self._help = {"ALG_DESC": words}
        self._order = []

    def input(self, definition, place, words, advanced=False):
        """Add an input with its help; asked for in the order of adding."""
        definition.setHelp(words)
        if advanced:
            flag = QgsProcessingParameterDefinition.Flag.FlagAdvanced
            definition.setFlags(definition.flags() | flag)
        box = QgsProcessingModelParameter(definition.name())
        _put(box, place)
        self._help[definition.name()] = words
        self._order.append(definition.name())
        self.model.addModelParameter(definition, box)

    def step(self, name, algorithm, title, place, inputs, outputs=(), note="", **more):
        """Add an algorithm.

        Parameters
        ----------
        name : str
            By which later steps refer to it.
        algorithm : str
            Its id.
        title : str
        place : (float, float)
        inputs : dict
            Parameter: `given`, `result`, `worked_out`, a list of these, or a plain value. What
            is not named here is written down as it stands by default.
        outputs : sequence of (str, str, (float, float), str)
            What the model hands out: the algorithm's output, a title, a place, and help.
        note : str
            Comment to the right of the step.
        more : dict
            ``after``: sequence of (step, branch) that must have been taken before;
            ``branches``: sequence of (name, expression) of a condition;
            ``note_place``: where the comment stands if not to the right.
        """
        child = QgsProcessingModelChildAlgorithm(algorithm)
        child.setChildId(name)
        child.setDescription(title)
        if "branches" in more:
            conditions = [{"name": key, "expression": words} for key, words in more["branches"]]
            child.setConfiguration({"conditions": conditions})
        for parameter, value in {**_defaults(child.algorithm()), **inputs}.items():
            child.addParameterSources(parameter, _sources(value))
        child.setDependencies(
            [QgsProcessingModelChildDependency(*other) for other in more.get("after", ())]
        )
        _put(child, place)
        if note:
            comment = QgsProcessingModelComment(note)
            _put(comment, more.get("note_place", (place[0] + 1, place[1])), NOTE)
            child.setComment(comment)
        child.setModelOutputs(dict(self._output(name, *one) for one in outputs))
        self.model.addChildAlgorithm(child)

    def _output(self, step, name, title, place, words):
        output = QgsProcessingModelOutput(title, title)
        output.setChildId(step)
        output.setChildOutputName(name)
        _put(output, place)
        self._help[f"{step}:{title}"] = words
        return title, output

    def finished(self):
        """The model."""
        self.model.setHelpContent(self._help)
        self.model.setParameterOrder(self._order)
        self.model.updateDestinationParameters()
        return self.model


def _defaults(algorithm):
    """Defaults of the parameters that an algorithm cannot do without."""
    optional = QgsProcessingParameterDefinition.Flag.FlagOptional
    return {
        definition.name(): definition.defaultValue()
        for definition in algorithm.parameterDefinitions()
        if not definition.isDestination()
        and not definition.flags() & optional
        and definition.defaultValue() is not None
    }


def _sources(value):
    values = value if isinstance(value, list) else [value]
    kind = QgsProcessingModelChildParameterSource
    return [one if isinstance(one, kind) else kind.fromStaticValue(one) for one in values]


def _put(component, place, size=BOX):
    column, row = place
    component.setPosition(QPointF(140 + COLUMN * column, 40 + ROW * row))
    component.setSize(size)
