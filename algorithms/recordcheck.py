"""Check point records before anything is computed from them."""

import numpy as np
import shapely
from qgis.core import QgsCsException, QgsProcessingParameterFeatureSink, QgsRectangle, QgsUnitTypes

from ..plugin import reference_system
from ..plugin.layers import as_floats
from ..plugin.looks import categories
from ..plugin.outputs import Column, kept_columns
from ..plugin.text import said, tr
from .base import SteadfieldAlgorithm
from .numeric import field_faults, record_faults, record_stacks
from .numeric.errors import InputError
from .numeric.progress import part
from .numeric.record_faults import FAULT, FINE, RawRecords
from .recordcheck_page import COLOURS, SEVERITIES, write_page

METRES_PER_DEGREE = 111_195.0
MIDDLE = (0.005, 0.995)


class RecordCheck(SteadfieldAlgorithm):
    """Looks for faults in point records and says what to do about them."""

    ID = "recordcheck"
    NAME = tr("Check point records")
    GROUP = "records"
    QUESTION = "real"
    HELP = tr(
        "Looks through point records for what would mislead a map: no geometry, records loaded "
        "twice, many records on one spot, coordinates rounded to a lattice, places outside the "
        "boundary or far away, missing values, unusable weights, and a CRS that does not keep "
        "areas. The report says what was found and what to do; the records concerned come out as "
        "a layer. People who share a house, a block of flats or a care home are no fault."
    )
    TAGS = (
        tr("quality"),
        tr("duplicates"),
        tr("geocoding"),
        tr("stacked"),
        tr("rounded"),
        tr("validate"),
    )

    def define(self):
        self.add_points("RECORDS", tr("Records"), tr("Points to check, in any CRS."))
        self.add_field(
            "WEIGHT", tr("Weight"), "RECORDS", tr("Number of events or people at each record.")
        )
        self.add_field(
            "GROUP",
            tr("Group"),
            "RECORDS",
            tr("Such as month or source: the report shows the records concerned by group."),
            numeric=False,
        )
        self.add_field(
            "KEY",
            tr("Record number"),
            "RECORDS",
            tr("A field that should be different in every record."),
            numeric=False,
        )
        self.add_boundary(tr("Polygons of the study area; records outside are reported."))
        self.add_number(
            "LARGEST_STACK",
            tr("Most records at one address"),
            tr("Spots with more are reported. 0: judged from the data, see the report."),
            default=0,
            least=0,
            whole=True,
            advanced=True,
        )
        self.add_length(
            "LEAST_ROUNDING",
            tr("Rounding that matters"),
            tr("Coordinates rounded to a lattice of at least this step are reported."),
            default=5.0,
            least=0.001,
            advanced=True,
        )
        self.add_working_crs()
        self.add(
            QgsProcessingParameterFeatureSink(
                "FLAGGED", tr("Records concerned"), optional=True, createByDefault=True
            ),
            tr("The records with a fault, all their fields, and the faults in words."),
        )
        self.add_report()
        self.add_numbers(
            RECORDS_READ=tr("Records read"),
            RECORDS_PLACED=tr("Records with a place"),
            RECORDS_CONCERNED=tr("Records concerned by a fault"),
            FAULTS=tr("Kinds of fault found"),
            FULLEST_SPOT=tr("Records on the fullest spot"),
            ROUNDED_TO=tr("Step to which coordinates are rounded (m), 0: none"),
        )

    def work(self, job):
        source, geometry, values, chosen = job.table("RECORDS", ("KEY", "WEIGHT", "GROUP"))
        records, feature = _raw_records(job, source, geometry)
        values = {name: column[feature] for name, column in values.items()}
        chosen = {
            name: None if column is None else column[feature] for name, column in chosen.items()
        }
        boundary = job.boundary()
        checks, sizes, step = self._checks(job, source, records, values, chosen, boundary)
        faults = [check for check in checks if check.severity == FAULT]
        concerned = np.zeros(len(records.x), bool)
        for check in faults:
            concerned |= check.found
        for check in checks:
            if check.severity != FINE:
                job.inform(f"{SEVERITIES[check.severity]}: {said(check.words)}")
        _write_flagged(job, checks, records, sizes, values)
        write_page(job, checks, records, sizes, chosen["GROUP"], concerned)
        job.give("RECORDS_READ", len(records.x))
        job.give("RECORDS_PLACED", int(records.placed.sum()))
        job.give("RECORDS_CONCERNED", int(concerned.sum()))
        job.give("FAULTS", len(faults))
        job.give("FULLEST_SPOT", int(sizes.max()))
        job.give("ROUNDED_TO", step)

    def _checks(self, job, source, records, values, chosen, boundary):
        checks = record_faults.check_geometry(records)
        checks.append(record_faults.check_number(records))
        job.progress(0.2)
        checks.append(field_faults.check_duplicates(records, _content(values, len(records.x))))
        if chosen["KEY"] is not None:
            checks.append(field_faults.check_keys(chosen["KEY"]))
        job.progress(0.3)
        stacked, sizes = record_stacks.check_stacks(records, job.whole("LARGEST_STACK"))
        checks.append(stacked)
        rounded, step = record_faults.check_rounding(
            records, job.real("LEAST_ROUNDING"), part(job.progress, 0.3, 0.6)
        )
        checks.append(rounded)
        if boundary is not None:
            told = part(job.progress, 0.6, 0.8)
            checks.append(record_faults.check_boundary(records, boundary, told))
        checks.append(record_faults.check_far(records))
        if chosen["WEIGHT"] is not None:
            checks += field_faults.check_weights(as_floats(chosen["WEIGHT"]))
        if chosen["GROUP"] is not None:
            checks.append(field_faults.check_nulls(job.field("GROUP"), chosen["GROUP"]))
        checks.append(_distortion(job, source, records))
        job.progress(0.85)
        return checks, sizes, step


def _raw_records(job, source, geometry):
    """Every point of every feature, and the feature it belongs to; featureless ones keep a row."""
    missing, empty = shapely.is_missing(geometry), shapely.is_empty(geometry)
    places, feature = shapely.get_coordinates(geometry, return_index=True)
    bare = np.flatnonzero(missing | empty)
    stored = np.vstack([places, np.full((len(bare), 2), np.nan)])
    feature = np.concatenate([feature, bare])
    order = np.argsort(feature, kind="stable")
    stored, feature = stored[order], feature[order]
    state = np.where(
        np.isfinite(stored).all(axis=1), record_faults.PLACED, record_faults.NOT_FINITE
    )
    state[missing[feature]] = record_faults.MISSING
    state[empty[feature] & ~missing[feature]] = record_faults.EMPTY
    _settle_crs(job, source, stored[state == record_faults.PLACED])
    moved = reference_system.reproject(
        stored, source.sourceCrs(), job.working.crs, job.context.transformContext()
    )
    lost = (state == record_faults.PLACED) & ~np.isfinite(moved).all(axis=1)
    state[lost] = record_faults.UNPLACEABLE
    moved[state != record_faults.PLACED] = np.nan
    crs = source.sourceCrs()
    per_unit = QgsUnitTypes.fromUnitToUnitFactor(crs.mapUnits(), reference_system.METRES)
    records = RawRecords(
        moved[:, 0],
        moved[:, 1],
        stored[:, 0],
        stored[:, 1],
        state,
        job.working.metres,
        METRES_PER_DEGREE if crs.isGeographic() else per_unit,
    )
    return records, feature


def _settle_crs(job, source, places):
    """Choose the working CRS from the middle of the places, so that one mistyped place cannot."""
    if len(places) == 0 and not job.given("WORKING_CRS"):
        raise InputError(
            tr("{}: no record has a usable place; check the geometry of the layer.").format(
                job.label("RECORDS")
            )
        )
    extent = _middle_extent(places) if len(places) else None
    job.settle_working_crs(source, "RECORDS", extent=extent)


def _middle_extent(places):
    (left, right), (bottom, top) = (np.quantile(axis, MIDDLE) for axis in places.T)
    return QgsRectangle(left, bottom, right, top)


def _distortion(job, source, records):
    crs, placed = source.sourceCrs(), records.placed
    smallest = largest = np.nan
    if not crs.isGeographic() and placed.any():
        stored = np.column_stack([records.stored_x, records.stored_y])[placed]
        try:
            smallest, largest = reference_system.area_scale_range(
                crs, _middle_extent(stored), job.context.transformContext()
            )
        except (QgsCsException, ZeroDivisionError):
            smallest = largest = np.nan
    return record_faults.check_distortion(smallest, largest, len(records.x))


def _content(values, count):
    """A number for each distinct set of field values, (count,) int array; None without fields."""
    if not values:
        return None
    label = np.zeros(count, np.int64)
    for column in values.values():
        words = np.array([str(value) for value in column.tolist()])
        _, code = np.unique(words, return_inverse=True)
        _, label = np.unique(label * (code.max() + 1) + code.ravel(), return_inverse=True)
        label = label.ravel()
    return label


def _write_flagged(job, checks, records, sizes, values):
    serious = sorted(
        (check for check in checks if check.severity != FINE and check.count),
        key=lambda check: check.severity != FAULT,
    )
    words = record_faults.faults_in_words(serious, len(records.x))
    rows = np.flatnonzero([word is not None for word in words])
    main = [word.split("; ")[0] for word in words[rows]]
    columns = [
        Column("fault", "text", main, tr("Main fault")),
        Column("faults", "text", words[rows], tr("All faults")),
        Column("on_spot", "int", sizes[rows], tr("Records on the same spot")),
    ]
    flagged = {name: column[rows] for name, column in values.items()}
    columns += kept_columns(flagged, columns, "_stored")
    places = shapely.points(records.x[rows], records.y[rows])
    places[~records.placed[rows]] = None
    keys = list(dict.fromkeys(main))
    label = {str(check.key): said(check.key) for check in serious}
    classes = [(key, COLOURS[i % len(COLOURS)], label[key]) for i, key in enumerate(keys)]
    job.write_layer("FLAGGED", columns, places, "point", categories("fault", classes))
