"""One run of an algorithm: reads its parameters, reports progress, writes its outputs."""

import os

from qgis.core import QgsProcessingException

from ..plugin import opening, outputs, rasters
from ..plugin.files import whole_file
from ..plugin.host import TABLE
from ..plugin.pictures import drawing_to_png
from ..plugin.report import versions
from ..plugin.text import tr
from .inputs import Inputs
from .numeric.errors import CancelledError, InputError


class Job(Inputs):
    """One run; what it wrote is taken back when the run fails or is cancelled."""

    def __init__(self, *run):
        super().__init__(*run)
        self._step = opening.next_step()

    def discard(self):
        """Take back what was written; name what cannot be removed, for it may be confidential."""
        for target in self._written:
            for left_over in (target, os.path.splitext(target)[0] + ".qml"):
                if not os.path.isfile(left_over):
                    continue
                try:
                    os.remove(left_over)
                except OSError:
                    # such as a file that another program holds open; the reason of the failure
                    # itself must still reach the user
                    self.warn(
                        tr("{} could not be removed after the failure; delete it by hand.").format(
                            os.path.basename(left_over)
                        )
                    )
            self.context.temporaryLayerStore().removeMapLayer(target)
        self._written = []
        self.results = {}

    def check_tables(self):
        """Refuse, before the work, a table that would be written as a shapefile.

        The host would write its attributes, report a file that is not there and load nothing.
        """
        for definition in self.algorithm.destinationParameterDefinitions():
            if definition.type() != "sink" or definition.dataType() != TABLE:
                continue
            path = outputs.asked_path(self.parameters.get(definition.name()), self.context)
            if path.lower().endswith(".shp"):
                raise InputError(
                    tr(
                        "{}: a table has no geometry and cannot be a shapefile; choose a name that "
                        "ends in .csv, .xlsx or .gpkg; found {}."
                    ).format(self.label(definition.name()), os.path.basename(path))
                )

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
        with self.naming(name):
            rasters.write_raster(path, grid, self.working.crs, bands, self._check, **how)
        self._keep(name, path, "raster", look)

    def write_picture(self, name, grid, windows, levels_of, look, progress):
        """Write a picture with transparency window by window, see `rasters.write_picture`."""
        path = self.algorithm.parameterAsOutputLayer(self.parameters, name, self.context)
        with self.naming(name):
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
        target = self._fill(name, fields, columns, geometry, outputs.GEOMETRIES[kind])
        aliases = {column.name: column.alias for column in columns if column.alias}
        self._keep(name, target, "vector", look, aliases)

    def _fill(self, name, fields, columns, geometry, shape):
        """Write features to the sink of a parameter; returns its path or id."""
        aside = outputs.FileAside.asked_for(self.parameters.get(name), self.context)
        if aside is None:
            return self._fill_sink(name, self.parameters, fields, columns, geometry, shape)
        try:
            with aside:
                asked = {**self.parameters, name: aside.request()}
                self._fill_sink(name, asked, fields, columns, geometry, shape)
                definition = self.algorithm.parameterDefinition(name)
                aside.finish(definition, self.context)
        except OSError as error:
            raise InputError(
                tr("{}: the file cannot be written: {}").format(self.label(name), error.strerror)
            ) from error
        self._written.append(aside.path)
        return aside.path

    def _fill_sink(self, name, parameters, fields, columns, geometry, shape):
        try:
            sink, target = self.algorithm.parameterAsSink(
                parameters, name, self.context, fields, shape, self.working.crs
            )
        except QgsProcessingException as error:
            raise InputError(f"{self.label(name)}: {error}") from error
        if sink is None:
            raise InputError(tr("{}: the layer cannot be written.").format(self.label(name)))
        self._written.append(target)
        taken = outputs.fill_sink(sink, fields, columns, geometry, self._check)
        del sink
        if not taken:
            raise InputError(tr("{}: the layer cannot be written.").format(self.label(name)))
        return target

    def _check(self, share):
        if self.feedback.isCanceled():
            raise CancelledError

    def _keep(self, name, target, kind, look, aliases=None):
        if target not in self._written:
            self._written.append(target)
        self.results[name] = target
        outputs_in_order = [one.name() for one in self.algorithm.destinationParameterDefinitions()]
        place = (self._step, -outputs_in_order.index(name))
        opening.style_output(target, kind, look, aliases or {}, place, self.context)

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
        self._write_whole(name, path, text.encode("utf-8"))
        self.results[name] = path

    def _write_whole(self, name, path, content):
        try:
            with whole_file(path) as waiting, open(waiting, "wb") as file:
                file.write(content)
        except OSError as error:
            raise InputError(
                tr("{}: the file cannot be written: {}").format(self.label(name), error.strerror)
            ) from error
        self._written.append(path)

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
        self._write_whole(name, os.path.splitext(path)[0] + ".png", png)

    def give(self, name, value):
        """Return a number output."""
        self.results[name] = value
