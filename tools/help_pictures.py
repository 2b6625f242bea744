"""Make the pictures of the help pages from the demo's folder: ``tools/help_pictures.py FOLDER``.

Maps come from the demo's own sheets, plots from the report pages of the tools that make no map. The
demo's figures are kept beside the texts of the worked case, so that they belong to the pictures.
"""

import base64
import re
import shutil
import sys
import tempfile
from pathlib import Path

import numpy as np
from headless import ROOT, Host
from help_parts import TEXTS

PICTURES = ROOT / "plugin" / "help" / "pictures"
WIDTH = 900
WHITE = 255
SHEETS = {
    "adaptivedensity": "map_density.png",
    "densityratio": "map_ratio.png",
    "gridvariance": "map_verdict.png",
    "unitvariance": "map_units.png",
    "inkblend": "map_blend.png",
    "safehexagons": "map_release.png",
    "safesurface": "map_safe_surface.png",
    "practicedistrict": "map_district.png",
    "wards": "map_wards.png",
}


def keep(name, png):
    """Store a picture, narrowed to the width of a help page, with few colours."""
    from PIL import Image

    picture = Image.open(png).convert("RGB")
    if 2 * picture.width <= WIDTH:
        # pixels of a coarse raster stay squares
        factor = WIDTH // picture.width
        picture = picture.resize((factor * picture.width, factor * picture.height), Image.NEAREST)
    if picture.width > WIDTH:
        picture = picture.resize((WIDTH, round(picture.height * WIDTH / picture.width)))
    # a palette that keeps the rare colours of a legend, spread so that ramps stay smooth
    palette = picture.quantize(255, method=Image.Quantize.MAXCOVERAGE)
    palette.putpalette([*palette.getpalette()[: 3 * WHITE], 255, 255, 255])
    few = picture.quantize(palette=palette, dither=Image.Dither.FLOYDSTEINBERG)
    paper = Image.fromarray((np.asarray(picture) == 255).all(axis=2))
    few.paste(WHITE, mask=paper)
    few.save(PICTURES / f"{name}.png", optimize=True)


def first_picture(report):
    """The first picture of a report page, as a stream."""
    import io

    code = re.search(r'src="data:image/png;base64,([^"]+)"', report.read_text(encoding="utf-8"))
    return io.BytesIO(base64.b64decode(code.group(1)))


def centres_sheet(folder, scratch):
    """Map of the centres and ellipses of the wards; returns its path."""
    from map_sheets import map_sheet
    from qgis.core import QgsCoordinateReferenceSystem, QgsProject, QgsVectorLayer
    from steadfield.plugin import looks

    paths = {
        "Centres": scratch / "centres.gpkg",
        "Ellipses": scratch / "ellipses.gpkg",
        "Care wards": f"{folder / 'ostermoor.gpkg'}|layername=care_wards",
    }
    layers = [QgsVectorLayer(str(path), name, "ogr") for name, path in paths.items()]
    looks.single("transparent", "#b9b2a0", width=0.3)(layers[2])
    layers[2].setLabelsEnabled(False)
    project = QgsProject.instance()
    project.setCrs(QgsCoordinateReferenceSystem("EPSG:3035"))
    project.addMapLayers(layers)
    target = scratch / "centres.png"
    title = "Where the falls of each ward lie and how far they spread"
    map_sheet(project, layers, title, str(target), layers[2].extent())
    return target


def run_the_others(host, folder, scratch):
    """Run the tools that the demo leaves out; returns the report of each."""
    import processing

    table = f"{folder / 'ostermoor.gpkg'}|layername="
    falls, boundary, units = table + "falls", table + "district", table + "base_units"

    def report(name):
        return str(scratch / f"{name}.html")

    def out(name):
        return str(scratch / name)

    host.run(
        "cellsize",
        RECORDS=falls,
        BOUNDARY=boundary,
        SEED=1,
        TABLE=out("cellsize.csv"),
        REPORT=report("cellsize"),
    )
    counted = processing.run(
        "native:countpointsinpolygon",
        {
            "POLYGONS": units, "POINTS": table + "unlit_paths", "FIELD": "unlit",
            "OUTPUT": out("counted.gpkg"),
        },
    )["OUTPUT"]  # fmt: skip
    host.run(
        "correlationspread", UNITS=counted, X_COUNT="unlit", Y_COUNT="falls",
        Y_TOTAL="residents", SEED=1, TABLE=out("correlation.csv"),
        REPORT=report("correlationspread"),
    )  # fmt: skip
    in_wards = processing.run(
        "native:joinattributesbylocation",
        {
            "INPUT": falls, "JOIN": table + "care_wards", "JOIN_FIELDS": ["ward"],
            "PREDICATE": [0], "METHOD": 1, "OUTPUT": out("in_wards.gpkg"),
        },
    )["OUTPUT"]  # fmt: skip
    host.run(
        "centrespread", RECORDS=in_wards, GROUP="ward", CONTRIBUTOR="household",
        CENTRES=out("centres.gpkg"), ELLIPSES=out("ellipses.gpkg"), SEED=1,
    )  # fmt: skip
    keep("centrespread", centres_sheet(folder, scratch))
    host.run(
        "densityoutlines", DENSITY=str(folder / "density_falls.tif"), OUTLINES=out("o.gpkg"),
        REPORT=report("densityoutlines"),
    )  # fmt: skip
    host.run(
        "rawink", LAYERS=[table + name for name in ("falls", "unlit_paths", "icy_paths")],
        NAMES="falls; unlit paths; icy paths", CELL_SIZE=60,
        PICTURE=out("raw.tif"), LEGEND=out("raw.svg"), REPORT=report("rawink"),
    )  # fmt: skip
    from_demo = {
        "recordcheck": "report_records.html",
        "agreement": "report_agreement.html",
        "releaseaudit": "report_second_audit.html",
        "bandwidthadvice": "report_bandwidth.html",
    }
    found = {name: folder / page for name, page in from_demo.items()}
    found.update({page.stem: page for page in scratch.glob("*.html")})
    return found


def main(folder):
    folder = Path(folder).resolve()
    PICTURES.mkdir(parents=True, exist_ok=True)
    shutil.copyfile(folder / "figures.json", TEXTS / "worked_case.json")
    host = Host()
    for name, sheet in SHEETS.items():
        keep(name, folder / sheet)
    with tempfile.TemporaryDirectory() as scratch:
        for name, page in run_the_others(host, folder, Path(scratch)).items():
            keep(name, first_picture(page))
    host.leave()


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else ROOT / "demo-output")
