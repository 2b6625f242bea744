"""The settings of one run: parameters as values, progress, words and the seed."""

import math
import os
import re
import secrets
from contextlib import contextmanager

from qgis.core import QgsProcessingUtils, QgsProperty, QgsProviderRegistry

from ..plugin.host import field_names, is_null
from ..plugin.text import said, tr
from .numeric.errors import CancelledError, InputError


class Settings:
    """What the user set, and how the run speaks to the user.

    Attributes
    ----------
    results : dict
        What the host receives.
    warnings : list of str
        What a reader of the report must know.
    """

    def __init__(self, algorithm, parameters, context, feedback):
        self.algorithm = algorithm
        self.parameters = parameters
        self.context = context
        self.feedback = feedback
        self.results = {}
        self.warnings = []
        self._working = None
        self._written = []
        self._seed = None

    def progress(self, share):
        """Progress callable of the whole run; raises CancelledError."""
        if self.feedback.isCanceled():
            raise CancelledError
        self.feedback.setProgress(100.0 * share)

    def inform(self, words):
        """Write to the log."""
        self.feedback.pushInfo(said(words))

    def warn(self, words):
        """Warn in the log and in the report."""
        self.warnings.append(said(words))
        self.feedback.pushWarning(self.warnings[-1])

    def label(self, name):
        """Name a parameter as the user sees it, with its key."""
        return f"{self.algorithm.parameterDefinition(name).description()} ({name})"

    @contextmanager
    def naming(self, name, *which):
        """Put a parameter, and which of its layers, before the message of an error inside."""
        try:
            yield
        except InputError as error:
            raise InputError(": ".join([self.label(name), *which, said(error)])) from error

    def given(self, name):
        """Whether an optional input was set."""
        value = self.parameters.get(name)
        # dialogs hand over a null of the host for what is left empty
        return not is_null(value) and value != ""

    def wanted(self, name):
        """Whether an optional output was asked for."""
        return self.given(name)

    def real(self, name):
        """A number; None where an optional one is empty."""
        if not self.given(name):
            value = self.algorithm.parameterDefinition(name).defaultValue()
            return None if value is None else float(value)
        value = self.parameters[name]
        # the host takes text that is no number for nothing where nothing is allowed
        if isinstance(value, str) and not math.isfinite(_number(value)):
            raise InputError(
                tr("{}: a number is expected, decimals with a point; found “{}”.").format(
                    self.label(name), value
                )
            )
        return self.algorithm.parameterAsDouble(self.parameters, name, self.context)

    def whole(self, name):
        """A whole number; None where an optional one is empty."""
        value = self.real(name)
        return None if value is None else int(value)

    def flag(self, name):
        """A yes or no."""
        return self.algorithm.parameterAsBool(self.parameters, name, self.context)

    def words(self, name):
        """A text, stripped; empty where none is given."""
        return (self.algorithm.parameterAsString(self.parameters, name, self.context) or "").strip()

    def choice(self, name, choices):
        """The core's key of a choice that was added with ``add_choice``."""
        return list(choices)[self.algorithm.parameterAsEnum(self.parameters, name, self.context)]

    def length(self, name):
        """A length in units of the working CRS; call after the first layer was read."""
        return self.metres(name) / self.working.metres

    def metres(self, name):
        """A length as it was given, in metres; 0 where it was left to the tool."""
        return self.real(name) or 0.0

    def numbers(self, name):
        """Numbers from a text such as ``100, 200; 400``; empty list where none is given."""
        with self.naming(name):
            return numbers_in(self.words(name))

    def seed(self):
        """The seed of this run: given, or drawn and then logged, reported and returned."""
        if self._seed is None:
            drawn = not self.given("SEED")
            self._seed = secrets.randbelow(2**31) if drawn else self.whole("SEED")
            if drawn:
                self.inform(tr("Seed drawn: {}").format(self._seed))
            self.results["SEED_USED"] = self._seed
        return self._seed

    def _parameter_rows(self):
        rows = []
        for definition in self.algorithm.parameterDefinitions():
            if definition.isDestination():
                continue
            rows.append((definition.description(), self._shown(definition)))
        if self._working is not None:
            rows.append((tr("Working CRS used"), self._working.crs.userFriendlyIdentifier()))
        if self._seed is not None:
            rows.append((tr("Seed used"), str(self._seed)))
        return rows

    def _shown(self, definition):
        """A parameter's value for a reader, without any path."""
        name = definition.name()
        kind = definition.type()
        if kind == "distance":
            length = self.metres(name)
            return f"{length:g} m" if length else tr("chosen by the tool")
        value = self.parameters[name] if self.given(name) else definition.defaultValue()
        if is_null(value) or value == "":
            return tr("not set")
        if name == "SEED" and self.algorithm.GROUP == "release":
            return tr("given; kept off this page, because it would undo the protection")
        if kind in ("source", "vector", "raster", "layer"):
            return self._layer_name(value)
        if kind == "multilayer":
            found = self.algorithm.parameterAsLayerList(self.parameters, name, self.context)
            return ", ".join(self._layer_name(layer) for layer in found)
        if kind == "enum":
            return definition.options()[
                self.algorithm.parameterAsEnum(self.parameters, name, self.context)
            ]
        if kind == "crs":
            crs = self.algorithm.parameterAsCrs(self.parameters, name, self.context)
            return crs.userFriendlyIdentifier()
        if kind == "field":
            return ", ".join(field_names(self.algorithm, self.parameters, name, self.context))
        if kind == "boolean":
            return tr("yes") if self.flag(name) else tr("no")
        if isinstance(value, QgsProperty):
            value = self.algorithm.parameterAsString(self.parameters, name, self.context)
        return os.path.basename(str(value)) if kind in ("file", "folder") else str(value)

    def _layer_name(self, value):
        if hasattr(value, "source") and isinstance(getattr(value, "source", None), QgsProperty):
            value = value.source.staticValue()
        layer = value
        if isinstance(value, str):
            layer = QgsProcessingUtils.mapLayerFromString(value, self.context)
        if not hasattr(layer, "name"):
            return tr("a layer")
        table = table_name(layer)
        return layer.name() if table in layer.name() else f"{layer.name()}: {table}"


def numbers_in(text):
    """Numbers of a list as it is typed, whether decimals are written with commas there or not.

    Commas and semicolons set numbers apart. A comma between two digits may also be a decimal one,
    and a point may set thousands apart; what could be either is refused and never guessed.

    Parameters
    ----------
    text : str
        Such as ``100, 200; 400``.

    Returns
    -------
    list of float
    """
    found = []
    for word in re.sub(r"[;\s]+|,(?=[;\s])|(?<=[;\s]),", " ", text).split():
        pieces = word.strip(",").split(",")
        thousands = [piece for piece in pieces if re.fullmatch(r"[1-9]\d{0,2}\.\d{3}", piece)]
        decimal = len(pieces) == 2 and all(piece.isdigit() for piece in pieces)
        # no list of whole numbers has one such as 05 or 000
        grouped = len(pieces) > 2 and any(re.fullmatch(r"0\d+", piece) for piece in pieces)
        if decimal or grouped or (thousands and (len(pieces) > 1 or word.endswith("0"))):
            raise InputError(
                tr(
                    "“{}” can be read in more than one way; write decimals with a point, thousands "
                    "without any sign, and a semicolon between two numbers, such as 0.5; 1200."
                ).format(word)
            )
        for piece in pieces:
            value = _number(piece)
            if not math.isfinite(value):
                raise InputError(
                    tr("numbers are expected, apart by commas; found “{}”.").format(piece)
                )
            found.append(value)
    return found


def _number(text):
    """The number that a text is, NaN for what is none; Python would read 1_000."""
    try:
        return math.nan if "_" in text else float(text)
    except ValueError:
        return math.nan


def table_name(layer):
    """Name of a layer, or of its table where a file of several was named by its path."""
    parts = QgsProviderRegistry.instance().decodeUri(layer.providerType(), layer.source())
    table = parts.get("layerName") or ""
    return layer.name() if table in layer.name() else table
