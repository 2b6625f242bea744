"""One run of an algorithm: reads its parameters, reports progress, writes its outputs."""

import math
import os
import re
import secrets
from dataclasses import replace

from qgis.core import QgsProcessingUtils, QgsProperty, QgsProviderRegistry, QgsVectorLayer

from ..plugin import alignment, layers, outputs, rasters, reference_system
from ..plugin.host import field_names
from ..plugin.looks import style_output
from ..plugin.pictures import drawing_to_png
from ..plugin.report import versions
from ..plugin.text import number, tr
from .numeric.errors import CancelledError, InputError


class Job:
    """One run; what it wrote is taken back when the run fails or is cancelled.

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

    # progress and words

    def progress(self, share):
        """Progress callable of the whole run; raises CancelledError."""
        if self.feedback.isCanceled():
            raise CancelledError
        self.feedback.setProgress(100.0 * share)

    def inform(self, words):
        """Write to the log."""
        self.feedback.pushInfo(words)

    def warn(self, words):
        """Warn in the log and in the report."""
        self.warnings.append(words)
        self.feedback.pushWarning(words)

    def label(self, name):
        """Name a parameter as the user sees it, with its key."""
        return f"{self.algorithm.parameterDefinition(name).description()} ({name})"

    # settings

    def given(self, name):
        """Whether an optional input was set."""
        value = self.parameters.get(name)
        return value is not None and value != ""

    def wanted(self, name):
        """Whether an optional output was asked for."""
        return self.parameters.get(name) not in (None, "")

    def real(self, name):
        """A number; None where an optional one is empty."""
        if not self.given(name):
            value = self.algorithm.parameterDefinition(name).defaultValue()
            return None if value is None else float(value)
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
        return self.real(name) / self.working.metres

    def numbers(self, name):
        """Numbers from a text such as ``100, 200; 400``; empty list where none is given."""
        text = self.words(name)
        found = []
        for piece in re.split(r"[;,\s]+", text.strip()) if text else []:
            try:
                value = float(piece)
            except ValueError:
                value = math.nan
            if not math.isfinite(value):
                raise InputError(
                    tr("{}: numbers are expected, apart by commas; found “{}”.").format(
                        self.label(name), piece
                    )
                )
            found.append(value)
        return found

    def seed(self):
        """The seed of this run: given, or drawn and then logged, reported and returned."""
        if self._seed is None:
            drawn = not self.given("SEED")
            self._seed = secrets.randbelow(2**31) if drawn else self.whole("SEED")
            if drawn:
                self.inform(tr("Seed drawn: {}").format(self._seed))
            self.results["SEED_USED"] = self._seed
        return self._seed

    # reading

    @property
    def working(self):
        """The working CRS, once the first layer was read."""
        if self._working is None:
            raise RuntimeError("the working CRS is known only after a layer was read")
        return self._working

    def _source(self, name):
        """The source, and the layer behind it when only its own filter narrows it."""
        source = self.algorithm.parameterAsSource(self.parameters, name, self.context)
        if source is None:
            raise InputError(tr("{}: the layer cannot be read.").format(self.label(name)))
        value = self.parameters[name]
        whole_layer = isinstance(value, (str, QgsVectorLayer))
        layer = None
        if whole_layer:
            layer = self.algorithm.parameterAsVectorLayer(self.parameters, name, self.context)
        return layer, source

    def choose_working_crs(self, name):
        """Settle the working CRS on the layer of a parameter, unless it is settled or given."""
        if self._working is not None:
            return self._working
        _, source = self._source(name)
        transform_context = self.context.transformContext()
        given = self.algorithm.parameterDefinition("WORKING_CRS") and self.given("WORKING_CRS")
        try:
            if given:
                crs = self.algorithm.parameterAsCrs(self.parameters, "WORKING_CRS", self.context)
                self._working = reference_system.chosen_crs(crs)
            else:
                self._working = reference_system.working_crs(
                    source.sourceCrs(), source.sourceExtent(), transform_context
                )
        except InputError as error:
            raise InputError(f"{self.label(name)}: {error}") from error
        self.inform(
            tr("Working CRS: {} ({})").format(
                self._working.crs.userFriendlyIdentifier(), self._working.note
            )
        )
        return self._working

    def take_working_crs(self, working):
        """Settle the working CRS from outside, for algorithms that start from rasters."""
        self._working = working

    def _read(self, read, name, **fields):
        layer, source = self._source(name)
        if source.featureCount() == 0:
            raise InputError(tr("{}: the layer has no features.").format(self.label(name)))
        working = self.choose_working_crs(name)
        self.progress(0.0)
        found = read(layer, source, working.crs, self.context.transformContext(), **fields)
        for reason, count in found.skipped.items():
            self.warn(
                tr("{}: {} features {} were left out.").format(
                    self.label(name), number(count), reason
                )
            )
        if len(found) == 0:
            raise InputError(
                tr("{}: no usable feature is left; check geometry, weights and filter.").format(
                    self.label(name)
                )
            )
        return found

    def table(self, name):
        """A layer as it is stored, nothing left out: for checks of the data themselves.

        Returns
        -------
        source : QgsProcessingFeatureSource
        geometry : (n,) object array of shapely geometries, None where there is none
        values : dict of str to (n,) array
            Every field but the row number of a file.
        """
        layer, source = self._source(name)
        if source.featureCount() == 0:
            raise InputError(tr("{}: the layer has no features.").format(self.label(name)))
        numbered = {"fid", "ogc_fid"}
        if layer is not None:
            numbered |= {layer.fields().at(i).name() for i in layer.primaryKeyAttributes()}
        fields = [field.name() for field in source.fields() if field.name() not in numbered]
        geometry, values, _ = layers.read_table(layer, source, fields)
        return source, geometry, values

    def field(self, name):
        """Name of a chosen field, None where none is chosen."""
        if not self.given(name):
            return None
        chosen = field_names(self.algorithm, self.parameters, name, self.context)
        return chosen[0] if chosen else None

    def records(self, name, weight=None, fields=()):
        """Point records in the working CRS.

        Parameters
        ----------
        name : str
            Parameter of the layer.
        weight : str or None
            Parameter of the weight field.
        fields : sequence of str
            Names of further fields of the layer.

        Returns
        -------
        plugin.layers.Records
        """
        weight_field = self.field(weight) if weight else None
        return self._read(layers.read_records, name, weight=weight_field, fields=fields)

    def polygons(self, name, fields=()):
        """Polygon features in the working CRS, as `plugin.layers.Polygons`."""
        return self._read(layers.read_polygons, name, fields=fields)

    def boundary(self, name="BOUNDARY"):
        """The study area as one valid geometry in the working CRS, None where none is given."""
        if not self.given(name):
            return None
        try:
            return layers.union_of(self.polygons(name))
        except InputError as error:
            raise InputError(f"{self.label(name)}: {error}") from error

    def layer_names(self, name):
        """Names of the layers of a list, for legends and reports; no two are alike.

        The names of NAMES are taken where they are given; otherwise those of the layers, or of
        their tables when a file of several was named by its path.
        """
        found = self.algorithm.parameterAsLayerList(self.parameters, name, self.context)
        given = self.words("NAMES")
        names = [piece.strip() for piece in given.split(";")] if given else []
        if given and (len(names) != len(found) or not all(names)):
            raise InputError(
                tr("{}: a name for each of the {} layers is wanted; found {}.").format(
                    self.label("NAMES"), len(found), len([one for one in names if one])
                )
            )
        names = names or [table_name(layer) for layer in found]
        return [
            one if names.count(one) == 1 else f"{one} ({names[: place + 1].count(one)})"
            for place, one in enumerate(names)
        ]

    def rasters(self, name, least=2, most=None):
        """Raster layers on one grid; settles the working CRS.

        Parameters
        ----------
        name : str
            Parameter added with ``add_rasters``.
        least, most : int
            Number of layers that make sense.

        Returns
        -------
        grid : numeric.grid.Grid
        list of plugin.alignment.Aligned
            In the order chosen.
        """
        chosen = self.algorithm.parameterAsLayerList(self.parameters, name, self.context)
        if len(chosen) < least or (most is not None and len(chosen) > most):
            wanted = f"{least} – {most}" if most is not None else tr("{} or more").format(least)
            raise InputError(
                tr("{}: {} layers are wanted; found {}.").format(
                    self.label(name), wanted, len(chosen)
                )
            )
        followed = chosen[0]
        if self.given("GRID"):
            followed = self.algorithm.parameterAsRasterLayer(self.parameters, "GRID", self.context)
        transform_context = self.context.transformContext()
        self._working, grid = alignment.common_grid(
            followed, transform_context, self.real("CELL_SIZE")
        )
        alignment.check_overlap(chosen, grid, self._working.crs, transform_context)
        self.inform(
            tr("Grid: {} x {} pixels of {} m, as {}; {} ({})").format(
                number(grid.rows),
                number(grid.columns),
                number(grid.cell * self._working.metres),
                followed.name(),
                self._working.crs.userFriendlyIdentifier(),
                self._working.note,
            )
        )
        band = self.whole("BAND")
        aligned = [
            replace(alignment.align(layer, grid, self._working.crs, band), name=words)
            for layer, words in zip(chosen, self.layer_names(name))
        ]
        for layer in aligned:
            self.inform(tr("{}: {}").format(layer.name, layer.how))
        return grid, aligned

    # writing

    def discard(self):
        """Take back what was written."""
        for target in self._written:
            for left_over in (target, os.path.splitext(target)[0] + ".qml"):
                if os.path.isfile(left_over):
                    os.remove(left_over)
            self.context.temporaryLayerStore().removeMapLayer(target)
        self._written = []
        self.results = {}

    def write_raster(self, name, grid, bands, look=None, **how):
        """Write a raster output and set how it opens; skipped where it is not wanted.

        Parameters
        ----------
        name : str
        grid : numeric.grid.Grid
        bands : sequence of plugin.rasters.Band
        look : callable or None
            Takes the loaded layer and sets its renderer, see plugin.looks.
        how : dict
            ``no_data`` and ``kind`` of `plugin.rasters.write_raster`.
        """
        if not self.wanted(name):
            return
        path = self.algorithm.parameterAsOutputLayer(self.parameters, name, self.context)
        rasters.write_raster(path, grid, self.working.crs, bands, self._check, **how)
        self._keep(name, path, "raster", look)

    def write_picture(self, name, grid, windows, levels_of, look, progress):
        """Write a picture with transparency window by window, see `rasters.write_picture`."""
        path = self.algorithm.parameterAsOutputLayer(self.parameters, name, self.context)
        rasters.write_picture(path, grid, self.working.crs, windows, levels_of, progress)
        self._keep(name, path, "raster", look)

    def write_layer(self, name, columns, geometry, kind, look=None):
        """Write a vector output and set how it opens; skipped where it is not wanted.

        Parameters
        ----------
        name : str
        columns : sequence of plugin.outputs.Column
        geometry : (n,) array of shapely geometries or None
        kind : str
            ``point``, ``line``, ``polygon`` or ``none`` (a table).
        look : callable or None
        """
        if not self.wanted(name):
            return
        self._check(0.0)
        fields = outputs.fields_of(columns)
        if kind == "polygon":
            geometry = outputs.as_multipolygons(geometry)
        sink, target = self.algorithm.parameterAsSink(
            self.parameters, name, self.context, fields, outputs.GEOMETRIES[kind], self.working.crs
        )
        if sink is None:
            raise InputError(tr("{}: the layer cannot be written.").format(self.label(name)))
        self._written.append(target)
        taken = outputs.fill_sink(sink, fields, columns, geometry, self._check)
        del sink
        if not taken:
            raise InputError(tr("{}: the layer cannot be written.").format(self.label(name)))
        aliases = {column.name: column.alias for column in columns if column.alias}
        self._keep(name, target, "vector", look, aliases)

    def _check(self, share):
        if self.feedback.isCanceled():
            raise CancelledError

    def _keep(self, name, target, kind, look, aliases=None):
        if target not in self._written:
            self._written.append(target)
        self.results[name] = target
        style_output(target, kind, look, aliases or {}, self.context)

    def write_report(self, report, method, cautions, name="REPORT"):
        """Finish a report with method, parameters, versions and cautions, and write it.

        Parameters
        ----------
        report : plugin.report.Report
        method : sequence of str
            Paragraphs that say what was done, with published sources.
        cautions : sequence of str
        """
        if not self.wanted(name):
            return
        if self.warnings:
            report.text(tr("What was left out or needs attention"), *self.warnings, kind="caution")
        report.text(tr("Method"), *method)
        report.table(tr("Parameters"), [tr("parameter"), tr("value")], self._parameter_rows())
        report.table(tr("Software"), [tr("part"), tr("version")], versions())
        report.text(tr("Cautions"), *cautions, kind="caution")
        self.write_file(name, report.html())

    def write_file(self, name, text):
        """Write a text output that appears only when it is whole."""
        path = self.algorithm.parameterAsFileOutput(self.parameters, name, self.context)
        waiting = rasters.partial_path(path)
        try:
            with open(waiting, "w", encoding="utf-8") as file:
                file.write(text)
            os.replace(waiting, path)
        except OSError as error:
            raise InputError(
                tr("{}: the file cannot be written: {}").format(self.label(name), error.strerror)
            ) from error
        self._written.append(path)
        self.results[name] = path

    def write_drawing(self, name, svg):
        """Write a drawing and, beside it under the same name, its rendering as PNG."""
        path = self.algorithm.parameterAsFileOutput(self.parameters, name, self.context)
        if not path.lower().endswith(".svg"):
            raise InputError(
                tr("{}: choose a name that ends in .svg; found {}.").format(
                    self.label(name), os.path.basename(path)
                )
            )
        self.write_file(name, svg)
        try:
            png = drawing_to_png(svg)
        except ImportError:
            self.warn(tr("The PNG of the legend is left out: this host cannot render drawings."))
            return
        beside = os.path.splitext(path)[0] + ".png"
        self._written.append(beside)
        with open(beside, "wb") as file:
            file.write(png)

    def give(self, name, value):
        """Return a number output."""
        self.results[name] = value

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
        value = self.parameters.get(name, definition.defaultValue())
        if value is None or value == "":
            return tr("not set")
        kind = definition.type()
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
        if kind == "distance":
            length = self.real(name)
            return f"{length:g} m" if length else tr("0 m: chosen by the tool")
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


def table_name(layer):
    """Name of a layer, or of its table where a file of several was named by its path."""
    parts = QgsProviderRegistry.instance().decodeUri(layer.providerType(), layer.source())
    table = parts.get("layerName") or ""
    return layer.name() if table in layer.name() else table
