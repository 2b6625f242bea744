"""The layers that one run reads, in one working CRS."""

from dataclasses import replace

from qgis.core import QgsVectorLayer

from ..plugin import alignment, layers, reference_system
from ..plugin.host import field_names, is_null
from ..plugin.outputs import ROW_NUMBERS
from ..plugin.text import number, tr
from .numeric.cell_size import two_digits
from .numeric.errors import InputError
from .settings import Settings, table_name


class Inputs(Settings):
    """Reads layers; the first one settles the working CRS."""

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
        if self._working is None:
            self.settle_working_crs(self._source(name)[1], name)
        return self._working

    def settle_working_crs(self, source, name, *which, extent=None):
        """Settle the working CRS: as given, or as suits a source.

        Parameters
        ----------
        source : QgsProcessingFeatureSource
        name : str
            Parameter of the source, and which of its layers, for errors.
        which : tuple of str
        extent : QgsRectangle or None
            Where the data lie, in the CRS of the source; None: over all that is finite.
        """
        if self.algorithm.parameterDefinition("WORKING_CRS") and self.given("WORKING_CRS"):
            crs = self.algorithm.parameterAsCrs(self.parameters, "WORKING_CRS", self.context)
            with self.naming("WORKING_CRS"):
                self.take_working_crs(reference_system.chosen_crs(crs))
            return
        with self.naming(name, *which):
            self.take_working_crs(
                reference_system.working_crs(
                    source.sourceCrs(),
                    layers.finite_extent(source) if extent is None else extent,
                    self.context.transformContext(),
                )
            )

    def take_working_crs(self, working):
        """Settle the working CRS on one that is found already, and say so."""
        self._working = working
        self.inform(
            tr("Working CRS: {} ({})").format(working.crs.userFriendlyIdentifier(), working.note)
        )

    def check_cells(self, name, size, cells, most):
        """Refuse cells of a size of which there would be too many, and name a size that serves.

        Parameters
        ----------
        name : str
            Parameter of the size.
        size : float
            Units of the working CRS.
        cells, most : float
            How many there would be, and how many are taken.
        """
        if cells <= most:
            return
        workable = size * (cells / most) ** 0.5 * self.working.metres
        raise InputError(
            tr("{}: {} cells of {} m are too many for this extent; choose {} m or more.").format(
                self.label(name),
                number(cells),
                number(size * self.working.metres),
                number(two_digits(workable * 1.05)),
            )
        )

    def _read(self, read, name, **fields):
        layer, source = self._source(name)
        if source.featureCount() == 0:
            raise InputError(tr("{}: the layer has no features.").format(self.label(name)))
        working = self.choose_working_crs(name)
        self.progress(0.0)
        with self.naming(name):
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

    def table(self, name, choices=()):
        """A point layer as it is stored, nothing left out: for checks of the data themselves.

        Parameters
        ----------
        name : str
            Parameter of the layer.
        choices : sequence of str
            Parameters of fields of the layer.

        Returns
        -------
        source : QgsProcessingFeatureSource
        geometry : (n,) object array of shapely geometries, None where there is none
        values : dict of str to (n,) array
            Every field but the row number of a file.
        chosen : dict of str to (n,) array or None
            The chosen field by parameter, though it be the row number; None where none is chosen.
        """
        layer, source = self._source(name)
        if source.featureCount() == 0:
            raise InputError(tr("{}: the layer has no features.").format(self.label(name)))
        keys = [] if layer is None else layer.primaryKeyAttributes()
        numbered = ROW_NUMBERS | {layer.fields().at(key).name().lower() for key in keys}
        fields = [field.name() for field in source.fields() if field.name().lower() not in numbered]
        wanted = {choice: self.field(choice) for choice in choices}
        read = list(dict.fromkeys([*fields, *filter(None, wanted.values())]))
        with self.naming(name):
            geometry, values, _ = layers.read_table(layer, source, read)
            layers.check_kind(geometry, layers.POINT_KINDS, tr("points"))
        chosen = {choice: values.get(field) for choice, field in wanted.items()}
        return source, geometry, {field: values[field] for field in fields}, chosen

    def field(self, name):
        """Name of a chosen field, None where none is chosen."""
        if not self.given(name):
            return None
        chosen = field_names(self.algorithm, self.parameters, name, self.context)
        return chosen[0] if chosen else None

    def check_fields(self):
        """Refuse fields that their layer lacks; the host checks this in its dialogs only."""
        for definition in self.algorithm.parameterDefinitions():
            parent = definition.type() == "field" and definition.parentLayerParameterName()
            chosen = self.field(definition.name()) if parent else None
            if chosen is None:
                continue
            source = self.algorithm.parameterAsSource(self.parameters, parent, self.context)
            if source is not None and chosen not in source.fields().names():
                raise InputError(
                    tr("{}: {} has no field {}; its fields are {}.").format(
                        self.label(definition.name()),
                        self.label(parent),
                        chosen,
                        ", ".join(source.fields().names()),
                    )
                )

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
        found = self._read(layers.read_records, name, weight=weight_field, fields=fields)
        if weight_field and not (found.weight > 0).any():
            raise InputError(
                tr(
                    "{}: no record has a value above 0 in {}; choose another field, or none."
                ).format(self.label(weight), weight_field)
            )
        return found

    def polygons(self, name, fields=()):
        """Polygon features in the working CRS, as `plugin.layers.Polygons`."""
        return self._read(layers.read_polygons, name, fields=fields)

    def boundary(self, name="BOUNDARY"):
        """The study area as one valid geometry in the working CRS, None where none is given."""
        if not self.given(name):
            return None
        polygons = self.polygons(name)
        with self.naming(name):
            return layers.union_of(polygons)

    def raster(self, name):
        """The raster layer of a parameter; InputError where it cannot be read."""
        layer = self.algorithm.parameterAsRasterLayer(self.parameters, name, self.context)
        if layer is None or not layer.isValid():
            raise InputError(
                tr("{}: the raster cannot be read; choose another.").format(self.label(name))
            )
        return layer

    def layer_list(self, name):
        """The layers of a list, in the order chosen.

        Raises
        ------
        InputError
            One of them cannot be read. In a step of a model the host would leave it out without a
            word, and an audit of the rest would say nothing of it.
        """
        found = self.algorithm.parameterAsLayerList(self.parameters, name, self.context)
        asked = _count_of_values(self.parameters.get(name))
        if len(found) < asked:
            raise InputError(
                tr(
                    "{}: {} of the {} layers cannot be read; check that they are still there."
                ).format(self.label(name), asked - len(found), asked)
            )
        return found

    def layer_names(self, name):
        """Names of the layers of a list, for legends and reports; no two are alike.

        The names of NAMES are taken where they are given; otherwise those of the layers, or of
        their tables when a file of several was named by its path.
        """
        found = self.layer_list(name)
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
        chosen = self.layer_list(name)
        if len(chosen) < least or (most is not None and len(chosen) > most):
            wanted = f"{least} – {most}" if most is not None else tr("{} or more").format(least)
            raise InputError(
                tr("{}: {} layers are wanted; found {}.").format(
                    self.label(name), wanted, len(chosen)
                )
            )
        followed = self.raster("GRID") if self.given("GRID") else chosen[0]
        transform_context = self.context.transformContext()
        with self.naming("GRID" if self.given("GRID") else name):
            self._working, grid = alignment.common_grid(
                followed, transform_context, self.metres("CELL_SIZE")
            )
        with self.naming(name):
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
        band, names = self.whole("BAND"), self.layer_names(name)
        with self.naming(name):
            aligned = [
                replace(alignment.align(layer, grid, self._working.crs, band), name=words)
                for layer, words in zip(chosen, names)
            ]
        for layer in aligned:
            self.inform(tr("{}: {}").format(layer.name, layer.how))
        return grid, aligned


def _count_of_values(value):
    """How many values a list holds, lists in it counted through and nulls left out."""
    if isinstance(value, (list, tuple)):
        return sum(_count_of_values(one) for one in value)
    return 0 if is_null(value) else 1
