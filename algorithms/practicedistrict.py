"""The practice district as a GeoPackage."""

import os
from dataclasses import replace

import numpy as np
import shapely
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsProcessingContext,
    QgsProcessingOutputFile,
    QgsProcessingOutputNumber,
    QgsProcessingParameterBoolean,
    QgsProcessingParameterFolderDestination,
)

from ..plugin import practice_looks as looks
from ..plugin.geopackage import Table, write_geopackage
from ..plugin.opening import open_with
from ..plugin.outputs import Column
from ..plugin.reference_system import chosen_crs
from ..plugin.text import number, tr
from .base import SteadfieldAlgorithm
from .numeric.errors import InputError
from .numeric.practice import CRS, make_district
from .numeric.practice_people import AGE_BANDS, SEVERITIES
from .numeric.practice_streets import ADDRESS_KINDS, STREET_KINDS
from .numeric.progress import part

FILE_NAME = "ostermoor.gpkg"
SIZES = {
    1.0: tr("Full: about 90 000 residents, 6 000 falls, 900 base units"),
    1 / 3: tr("Third: about 30 000 residents, 2 000 falls, 300 base units"),
    0.1: tr("Tenth: about 9 000 residents, 600 falls, 90 base units"),
}


class PracticeDistrict(SteadfieldAlgorithm):
    """Makes the invented district of Ostermoor from a seed."""

    ID = "practicedistrict"
    NAME = tr("Make a practice district")
    GROUP = "records"
    QUESTION = "real"
    HELP = tr(
        "Makes Ostermoor, an invented river town with a marsh and a works area, to practise on "
        "before confidential records are touched. One GeoPackage holds a year of ambulance "
        "call-outs to older residents who fell, all residents aged 65 and over, base units and "
        "care wards with both counts, reports of unlit and of icy paths, resting places, streets "
        "and land cover. The true risk is known and kept beside the data: it is the same "
        "everywhere but for two areas, one of which straddles the border of two wards. The ward in "
        "the marsh has the highest rate by chance alone; its falls were drawn until it had. "
        "Nothing in it is real."
    )
    TAGS = (tr("example"), tr("demo"), tr("simulate"), tr("test data"), tr("Ostermoor"))

    def define(self):
        self.add_number(
            "SEED",
            tr("Seed of the random numbers"),
            tr("Another seed makes another town; the same seed makes the same one, to the bit."),
            default=1,
            least=0,
            most=2**31 - 1,
            whole=True,
        )
        self.add_choice(
            "SIZE",
            tr("Size"),
            SIZES,
            tr("A smaller district has less ground and fewer people at the same density."),
        )
        self.add(
            QgsProcessingParameterBoolean("OPEN", tr("Open the layers when done"), True),
            tr("Adds the layers to the project, in the order in which they should be drawn."),
            advanced=True,
        )
        self.add(
            QgsProcessingParameterFolderDestination("FOLDER", tr("Folder")),
            tr("Where {} is written; an older one there is replaced.").format(FILE_NAME),
        )
        self.addOutput(QgsProcessingOutputFile("PACKAGE", tr("GeoPackage")))
        self.addOutput(QgsProcessingOutputNumber("SEED_USED", tr("Seed used")))
        self.add_numbers(
            FALLS=tr("Falls"), RESIDENTS=tr("Residents aged 65 and over"), UNITS=tr("Base units")
        )

    def work(self, job):
        note = tr("that of the practice district")
        job.take_working_crs(replace(chosen_crs(QgsCoordinateReferenceSystem(CRS)), note=note))
        seed = job.whole("SEED")
        size = job.choice("SIZE", SIZES)
        district = make_district(seed, size, part(job.progress, 0.0, 0.6))
        folder = self.parameterAsString(job.parameters, "FOLDER", job.context)
        path = os.path.join(folder, FILE_NAME)
        tables = tables_of(district)
        began_without = not os.path.isdir(folder)
        try:
            os.makedirs(folder, exist_ok=True)
            with job.naming("FOLDER"):
                write_geopackage(
                    path,
                    job.working.crs,
                    tables,
                    job.context.transformContext(),
                    part(job.progress, 0.6, 1.0),
                )
        except OSError as error:
            raise InputError(
                tr("{}: nothing can be written there: {}").format(
                    job.label("FOLDER"), error.strerror
                )
            ) from error
        finally:
            if began_without and os.path.isdir(folder) and not os.listdir(folder):
                os.rmdir(folder)
        if job.flag("OPEN") and job.context.project() is not None:
            _open_when_done(path, tables, job.context)
        job.inform(
            tr("{}: {} falls among {} residents in {} base units and {} wards, seed {}.").format(
                FILE_NAME,
                number(len(district.falls.x)),
                number(len(district.residents.x)),
                number(len(district.units.polygons)),
                len(district.wards.names),
                seed,
            )
        )
        job.results.update(FOLDER=folder, PACKAGE=path, SEED_USED=seed)
        job.give("FALLS", len(district.falls.x))
        job.give("RESIDENTS", len(district.residents.x))
        job.give("UNITS", len(district.units.polygons))


def tables_of(district):
    """The layers of the GeoPackage, the lowest on the map first.

    Parameters
    ----------
    district : numeric.practice.District

    Returns
    -------
    list of plugin.geopackage.Table
    """
    return [*_ground_tables(district), *_zone_tables(district), *_point_tables(district)]


def _ground_tables(district):
    cover = [district.marsh, district.industry, *district.parks, district.river]
    kinds = ["marsh", "works", *["park"] * len(district.parks), "river"]
    streets = district.streets
    return [
        Table(
            "district",
            tr("District"),
            (Column("name", "text", ["Ostermoor"], tr("Name")),),
            [district.boundary],
            "polygon",
            looks.fill("#f4f0e6", "#6b665b", 0.5),
        ),
        Table(
            "land_cover",
            tr("Land cover"),
            (Column("kind", "text", kinds, tr("Kind")),),
            cover,
            "polygon",
            looks.land_cover,
        ),
        Table(
            "streets",
            tr("Streets"),
            (
                Column("kind", "text", np.array(STREET_KINDS)[streets.kind], tr("Kind")),
                Column("length", "float", shapely.length(streets.lines), tr("Length (m)")),
            ),
            streets.lines,
            "line",
            looks.streets,
        ),
    ]


def _zone_tables(district):
    units, wards, risk = district.units, district.wards, district.risk
    names = np.array(wards.names)
    codes = [f"U{index + 1:03d}" for index in range(len(units.polygons))]
    per_thousand = tr("Falls per 1000 residents and year")
    return [
        Table(
            "base_units",
            tr("Base units"),
            (
                Column("unit", "text", codes, tr("Base unit")),
                Column("ward", "text", names[units.ward], tr("Care ward")),
                Column("residents", "int", units.residents, tr("Residents aged 65 and over")),
                Column("falls", "int", units.falls, tr("Falls in the year")),
                Column("rate", "float", _rate(units), per_thousand),
                Column(
                    "true_rate",
                    "float",
                    1000 * units.true_risk,
                    tr("True risk (falls per 1000 residents and year)"),
                ),
            ),
            units.polygons,
            "polygon",
            looks.rate_steps("rate", (0, 25, 50, 75, 100, 150, 1000)),
        ),
        Table(
            "care_wards",
            tr("Care wards"),
            (
                Column("ward", "text", names, tr("Care ward")),
                Column("residents", "int", wards.residents, tr("Residents aged 65 and over")),
                Column("falls", "int", wards.falls, tr("Falls in the year")),
                Column("rate", "float", _rate(wards), per_thousand),
            ),
            wards.polygons,
            "polygon",
            looks.outlines("#3b3f46", 0.5, label="ward"),
        ),
        Table(
            "true_risk_areas",
            tr("Where the risk is truly raised"),
            (
                Column("area", "text", ["inside one ward", "straddles a border"], tr("Area")),
                Column("factor", "float", risk.factor, tr("Risk against the base (times)")),
                Column("base", "float", [1000 * risk.base] * 2, per_thousand),
                Column("radius", "float", risk.radius, tr("Radius (m)")),
            ),
            risk.areas(),
            "polygon",
            looks.outlines("#8c2d19", 0.6, dashed=True),
        ),
    ]


def _point_tables(district):
    residents, falls = district.residents, district.falls
    bands = np.array(AGE_BANDS)
    household = tr("Household (confidential)")
    return [
        Table(
            "residents",
            tr("Residents aged 65 and over"),
            (
                _numbered("resident", residents, tr("Resident (confidential)")),
                Column("household", "int", residents.household, household),
                Column("age_band", "text", bands[residents.age_band], tr("Age (years)")),
                Column(
                    "address",
                    "text",
                    np.array(ADDRESS_KINDS)[residents.address_kind],
                    tr("Address"),
                ),
            ),
            shapely.points(residents.x, residents.y),
            "point",
            looks.dots("#5d6273", 0.35),
        ),
        _report_table("resting_places", tr("Resting places"), district.resting_places, "#4c7a34"),
        _report_table("unlit_paths", tr("Reports of unlit paths"), district.unlit_paths, "#5b3f7d"),
        _report_table("icy_paths", tr("Reports of icy paths"), district.icy_paths, "#2e6f9e"),
        Table(
            "falls",
            tr("Falls"),
            (
                _numbered("fall", falls, tr("Call-out (confidential)")),
                Column("household", "int", falls.household, household),
                Column("age_band", "text", bands[falls.age_band], tr("Age (years)")),
                Column("month", "int", falls.month, tr("Month (1 to 12)")),
                Column("severity", "text", np.array(SEVERITIES)[falls.severity], tr("Severity")),
                Column(
                    "place", "text", np.where(falls.outdoors, "outdoors", "at home"), tr("Place")
                ),
            ),
            shapely.points(falls.x, falls.y),
            "point",
            looks.dots("#8c2d19", 0.9),
        ),
    ]


def _report_table(name, title, points, colour):
    columns = [_numbered("report", points, tr("Number"))]
    if points.month is not None:
        columns.append(Column("month", "int", points.month, tr("Month (1 to 12)")))
    return Table(
        name,
        title,
        tuple(columns),
        shapely.points(points.x, points.y),
        "point",
        looks.dots(colour, 1.1),
    )


def _numbered(name, points, alias):
    return Column(name, "int", np.arange(len(points.x)) + 1, alias)


def _rate(zones):
    """Falls per 1000 residents, NaN where nobody lives."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(zones.residents > 0, 1000 * zones.falls / zones.residents, np.nan)


def _open_when_done(path, tables, context):
    for place, table in enumerate(tables):
        target = f"{path}|layername={table.name}"
        details = QgsProcessingContext.LayerDetails(table.title, context.project(), table.name)
        context.addLayerToLoadOnCompletion(target, details)
        open_with(target, _as_stored, lambda layer, place=place: place, context)


def _as_stored(layer):
    layer.loadDefaultStyle()
