"""Make the pictures of the help pages from the demo's folder: ``tools/help_pictures.py FOLDER``.

Maps come from the demo's own sheets, plots from the report pages of the tools that make no map.
"""

import base64
import re
import sys
import tempfile
from pathlib import Path

from headless import ROOT, Host

PICTURES = ROOT / "plugin" / "help" / "pictures"
WIDTH = 900
SHEETS = {
    "adaptivedensity": "map_density.png",
    "densityratio": "map_ratio.png",
    "gridvariance": "map_verdict.png",
    "unitvariance": "map_units.png",
    "inkblend": "map_blend.png",
    "safehexagons": "map_release.png",
    "safesurface": "map_safe_surface.png",
    "practicedistrict": "map_district.png",
}


def keep(name, png):
    """Store a picture, narrowed to the width of a help page, with few colours."""
    from PIL import Image

    picture = Image.open(png).convert("RGB")
    if picture.width > WIDTH:
        picture = picture.resize((WIDTH, round(picture.height * WIDTH / picture.width)))
    picture.quantize(160).save(PICTURES / f"{name}.png", optimize=True)


def first_picture(report):
    """The first picture of a report page, as a stream."""
    import io

    code = re.search(r'src="data:image/png;base64,([^"]+)"', report.read_text(encoding="utf-8"))
    return io.BytesIO(base64.b64decode(code.group(1)))


def run_the_others(host, folder, scratch):
    """Run the tools that the demo leaves out; returns the report of each."""
    table = f"{folder / 'ostermoor.gpkg'}|layername="
    falls, boundary, units = table + "falls", table + "district", table + "base_units"

    def report(name):
        return str(scratch / f"{name}.html")

    def out(name):
        return str(scratch / name)

    host.run("bandwidthadvice", RECORDS=falls, BOUNDARY=boundary, REPORT=report("bandwidthadvice"))
    host.run("cellsize", RECORDS=falls, TABLE=out("cellsize.csv"), REPORT=report("cellsize"))
    host.run(
        "correlationspread", UNITS=units, X_COUNT="falls", X_TOTAL="residents",
        Y_COUNT="true_rate", SEED=1, TABLE=out("correlation.csv"),
        REPORT=report("correlationspread"),
    )  # fmt: skip
    host.run(
        "centrespread", RECORDS=falls, GROUP="month", ORDER="month", CENTRES=out("centres.gpkg"),
        ELLIPSES=out("ellipses.gpkg"), SEED=1, REPORT=report("centrespread"),
    )  # fmt: skip
    host.run(
        "densityoutlines", DENSITY=str(folder / "density_falls.tif"), OUTLINES=out("o.gpkg"),
        REPORT=report("densityoutlines"),
    )  # fmt: skip
    host.run(
        "rawink", LAYERS=[table + name for name in ("falls", "unlit_paths", "icy_paths")],
        PICTURE=out("raw.tif"), LEGEND=out("raw.svg"), REPORT=report("rawink"),
    )  # fmt: skip
    from_demo = {
        "recordcheck": "report_records.html",
        "agreement": "report_agreement.html",
        "releaseaudit": "report_audit.html",
    }
    found = {name: folder / page for name, page in from_demo.items()}
    found.update({page.stem: page for page in scratch.glob("*.html")})
    return found


def main(folder):
    folder = Path(folder).resolve()
    PICTURES.mkdir(parents=True, exist_ok=True)
    host = Host()
    for name, sheet in SHEETS.items():
        keep(name, folder / sheet)
    with tempfile.TemporaryDirectory() as scratch:
        for name, page in run_the_others(host, folder, Path(scratch)).items():
            keep(name, first_picture(page))
    host.leave()


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else ROOT / "demo-output")
