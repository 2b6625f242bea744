"""Maps, project and the page from question to answer, made from the demo's results."""

from collections import Counter
from pathlib import Path

import numpy as np
from map_sheets import map_sheet
from osgeo import ogr
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsProject,
    QgsRasterLayer,
    QgsVectorLayer,
)
from steadfield.plugin import looks
from steadfield.plugin.report import Report, versions
from steadfield.plugin.text import listed, number, percent

CAUTIONS = [
    "Ostermoor is invented. On real records, thresholds and whether anything may be published are "
    "for the owner of the data, local rules and law to decide.",
    "A place that holds under any cut is not yet a cause, and one that depends on the cut is not "
    "cleared; where a service goes is for licensed practice and people who know the ground.",
]


def write(folder, done):
    """Write project, maps and index.html into the demo's folder."""
    layers = _layers(done)
    project = _project(folder, layers)
    pictures = _maps(folder, done, project, layers)
    _index(folder, done, pictures)


def _table(done, name, title, look=None):
    layer = QgsVectorLayer(done["table"] + name, title, "ogr")
    if look is not None:
        look(layer)
    return layer


def _output(path, title, look=None):
    is_vector = path.endswith((".gpkg", ".csv"))
    kind = QgsVectorLayer if is_vector else QgsRasterLayer
    layer = kind(path, title, "ogr" if is_vector else "gdal")
    if not layer.isValid():
        raise RuntimeError(f"{Path(path).name} did not open")
    if look is not None:
        look(layer)
    return layer


def _layers(done):
    """Every layer of the demo by a short name, styled."""
    return {
        "district": _table(done, "district", "District", looks.single("transparent")),
        "land cover": _table(done, "land_cover", "Land cover"),
        "streets": _table(done, "streets", "Streets"),
        "wards": _table(
            done,
            "care_wards",
            "Care wards",
            looks.steps("rate", [60, 64, 68, 72, 76, 80], unit="falls per 1000", width=0.3),
        ),
        "outlines": _table(
            done, "care_wards", "Borders of care wards", looks.single("transparent", width=0.35)
        ),
        "truth": _table(
            done,
            "true_risk_areas",
            "True areas of raised risk",
            looks.single("transparent", "#b4281f", 0.7),
        ),
        "falls": _table(done, "falls", "Falls (confidential)"),
        "density": _output(done["density"]["DENSITY"], "Falls per km²"),
        "error": _output(done["density"]["ERROR"], "Relative standard error of the density"),
        "ratio": _output(done["ratio"]["RATIO"], "Falls against residents"),
        "ratio outlines": _output(done["ratio"]["OUTLINES"], "Ratio outlines"),
        "verdict": _output(done["grid"]["VARIANCE"], "Under other cells"),
        "units": _output(done["units"]["UNITS_OUT"], "Under other zones"),
        "blend": _output(done["blend"]["PICTURE"], "Falls, unlit paths and icy paths"),
        "zones": _output(
            done["agreement"]["ZONES"],
            "Zones where layers agree",
            looks.single("transparent", "#b4281f", 0.5),
        ),
        "release": _output(done["safe"]["RELEASE"], "Release: falls by hexagon"),
        "safe surface": _output(done["safe surface"]["DENSITY"], "Release: falls per km²"),
    }


def _project(folder, layers):
    project = QgsProject.instance()
    project.clear()
    project.setTitle("Ostermoor: where should fall-prevention visits go first?")
    project.setCrs(QgsCoordinateReferenceSystem("EPSG:3035"))
    root = project.layerTreeRoot()
    shown = {"verdict", "outlines", "district"}
    groups = [
        (
            "Where, and is it real",
            ["truth", "outlines", "ratio outlines", "ratio", "density", "error"],
        ),
        ("How much depends on the cut", ["verdict", "units", "wards"]),
        ("Layers together", ["zones", "blend"]),
        ("To publish", ["release", "safe surface"]),
        ("Ground and records", ["falls", "streets", "land cover", "district"]),
    ]
    for title, names in groups:
        group = root.addGroup(title)
        for name in names:
            project.addMapLayer(layers[name], False)
            group.addLayer(layers[name]).setItemVisibilityChecked(name in shown)
    project.write(str(folder / "ostermoor.qgz"))
    return project


def _maps(folder, done, project, layers):
    """Draw the map sheets; returns their paths by name."""
    sheets = {
        "district": (
            "The invented district of Ostermoor",
            ["falls", "outlines", "streets", "land cover"],
            [],
        ),
        "wards": ("Falls per 1000 residents by official care ward", ["wards"], []),
        "density": ("Where falls happen: adaptive density", ["outlines", "density"], ["streets"]),
        "ratio": (
            "Falls against residents: more than people living there explains?",
            ["ratio outlines", "outlines", "ratio"],
            [],
        ),
        "verdict": (
            "Which places stand out however cells are drawn",
            ["truth", "outlines", "verdict"],
            [],
        ),
        "units": (
            "Which base units stand out however zones are drawn",
            ["truth", "outlines", "units"],
            [],
        ),
        "blend": (
            "Falls, unlit paths and icy paths in one picture",
            ["zones", "blend"],
            ["land cover"],
        ),
        "release": ("To publish: falls by disclosure-safe hexagon", ["outlines", "release"], []),
        "safe surface": ("To publish: disclosure-safe density", ["outlines", "safe surface"], []),
    }
    extent = layers["district"].extent()
    # where the areas of raised risk lie, base units are small
    close = layers["truth"].extent().buffered(500)
    ink_legend = str(Path(done["blend"]["LEGEND"]).with_suffix(".png"))
    more = {
        "verdict": {"inset": close},
        "units": {"inset": close},
        "blend": {"beside": ink_legend},
    }
    pictures = {}
    for name, (title, over, under) in sheets.items():
        path = folder / f"map_{name.replace(' ', '_')}.png"
        drawn = [layers[one] for one in [*over, *under, "district"]]
        legend = [layers[one] for one in over if one != "blend"]
        map_sheet(project, drawn, title, str(path), extent, legend, **more.get(name, {}))
        pictures[name] = path
    return pictures


def _verdicts_by_ward(done):
    """Residents in base units that hold above, by ward, and how many lie in true risk areas."""
    units = ogr.Open(done["units"]["UNITS_OUT"])
    district = ogr.Open(done["table"].split("|layername=")[0])
    areas = [feature.GetGeometryRef().Clone() for feature in district.GetLayer("true_risk_areas")]
    wards, inside, holding = Counter(), 0, 0
    source = district.GetLayer("base_units")
    ward_of = {feature["unit"]: (feature["ward"], feature["residents"]) for feature in source}
    for feature in units.GetLayer(0):
        if feature["verdict"] != 1:
            continue
        ward, residents = ward_of[feature["unit"]]
        wards[ward] += residents
        holding += residents
        middle = feature.GetGeometryRef().PointOnSurface()
        inside += residents * any(area.Contains(middle) for area in areas)
    return wards, inside / holding if holding else np.nan


def _index(folder, done, pictures):
    wards, in_truth = _verdicts_by_ward(done)
    first = [f"{ward} ({number(people)} residents)" for ward, people in wards.most_common(4)]
    grid, units, safe, audit = done["grid"], done["units"], done["safe"], done["audit"]
    between = units.get("EVENTS_BETWEEN_ZONINGS")
    open_share = percent(1 - grid["SHARE_ABOVE"] - grid["SHARE_BELOW"])
    answer = (
        f"Visits should go first to the places that stand above the district's "
        f"{number(units['THRESHOLD_USED'])} falls per 1000 residents however lines are drawn: in "
        f"{listed(first) or 'no ward'}. For {open_share} of the residents the map depends on the "
        "cut or on small numbers."
    )
    page = Report(
        "Ostermoor: from question to publication",
        "Where should fall-prevention visits go first, would the answer hold under other "
        "boundaries, and what may be published?",
        answer,
        confidential=True,
    )

    def show(title, name, caption):
        page.picture(title, pictures[name].read_bytes(), caption)

    show(
        "1. What the official wards say",
        "wards",
        "The usual map. The ward in the marsh looks worst; it is small, and chance put it there.",
    )
    show(
        "2. Where falls happen, and is it more than people living there",
        "density",
        f"Adaptive density, at most {number(done['density']['PEAK'])} falls per km². It mostly "
        "shows where people live.",
    )
    show("", "ratio", "Falls over residents on a log scale; outlines where chance is unlikely.")
    show(
        "3. How much of that depends on the cut",
        "verdict",
        f"Hexagons of several sizes, shifted and turned at random: "
        f"{percent(grid['SHARE_ABOVE'])} of residents live where the rate stands above the "
        "threshold under any of them and beyond small numbers. The red rings are the true areas of "
        "raised risk, which no real data would show.",
    )
    show(
        "",
        "units",
        f"The same from base units grouped into zones at random: {units['UNITS_ABOVE']} units hold "
        f"above, and {percent(in_truth)} of their residents live in the true areas.",
    )
    if between is not None:
        page.text(
            "",
            f"With visits for a tenth of the residents, choosing by the value averaged over all "
            f"zonings reaches {number(units['EVENTS_REACHED'])} falls of the held-out half; "
            f"between an unlucky and a lucky single zoning (5 % and 95 %) lie {number(between)}.",
        )
    show(
        "4. Falls together with unlit and icy paths",
        "blend",
        "The darker a place, the more is there; the hue says of what. Outlined: zones where "
        "the layers agree.",
    )
    show(
        "5. What may be published",
        "release",
        f"Counts of falls by hexagon with a least count of {done['least count']}: "
        f"{safe_words(safe)}.",
    )
    show(
        "",
        "safe surface",
        "A density surface behind every pixel of which enough contributors stand.",
    )
    clean = audit.get("DISCLOSED_REGIONS", 0) == 0
    page.text(
        "",
        "The audit of the hexagons against the official ward counts found no place where "
        "subtraction discloses a small count."
        if clean
        else f"The audit of the hexagons against the official ward counts found "
        f"{audit['DISCLOSED_REGIONS']} places where subtraction discloses a small count: do not "
        "publish both; see its report.",
    )
    page.links("Every step in full", _reports(folder))
    page.links("Layers", [("Project with every layer styled", "ostermoor.qgz")])
    page.table("Software", ["part", "version"], versions())
    page.text("Cautions", *CAUTIONS, kind="caution")
    (folder / "index.html").write_text(page.html(), encoding="utf-8")


def safe_words(results):
    """The number outputs of a release in words."""
    known = {
        "CELLS_RELEASED": "cells released",
        "CELLS_WITHHELD": "cells withheld",
        "CELLS_MERGED": "cells merged",
        "RECORDS_RELEASED": "records in released cells",
        "RECORDS_WITHHELD": "records in withheld cells",
    }
    return listed(
        [f"{number(results[key])} {words}" for key, words in known.items() if key in results]
    )


def _reports(folder):
    titles = {
        "report_records.html": "Check of the records",
        "report_bandwidth.html": "Bandwidth advice",
        "report_density.html": "Density of falls",
        "report_ratio.html": "Falls against residents",
        "report_zoning_variance.html": "Zoning variance from points",
        "report_units.html": "Zoning variance from base units",
        "report_blend.html": "Layers in one picture",
        "report_agreement.html": "Zones where layers agree",
        "report_release.html": "Safe hexagons",
        "report_release_surface.html": "Safe surface",
        "report_audit.html": "Release audit",
        "report_second_audit.html": "Release audit of two releases of the same records",
    }
    return [(title, name) for name, title in titles.items() if (folder / name).exists()]
