"""The job on open data of a registry package: see tools/demo.sh.

Deaths of 1854 in Soho (Snow 1855, as the package libpysal carries them, in Web Mercator) and sudden
infant deaths by county of North Carolina 1974-78 (Cressie & Chan 1989; NAD27, which the package's
copy does not say).
"""

import importlib.util
import sys
from pathlib import Path

import numpy as np
from headless import Host
from osgeo import gdal, ogr

SEED = 1


def examples():
    """Folder of the package's example data, without importing the package."""
    found = importlib.util.find_spec("libpysal")
    return Path(found.origin).parent / "examples"


def copy_layers(folder):
    """Write the open data into one GeoPackage; returns its path."""
    target = folder / "open_data.gpkg"
    target.unlink(missing_ok=True)
    sources = [
        ("soho_deaths", examples() / "snow_maps" / "SohoPeople.shp", "EPSG:3857"),
        ("soho_pumps", examples() / "snow_maps" / "SohoWater.shp", "EPSG:3857"),
        ("counties", examples() / "sids2" / "sids2.shp", "EPSG:4267"),
    ]
    for name, source, crs in sources:
        mode = {"accessMode": "update"} if target.exists() else {}
        gdal.VectorTranslate(
            str(target), str(source), format="GPKG", layerName=name, dstSRS=crs, srcSRS=crs,
            geometryType="PROMOTE_TO_MULTI" if name == "counties" else None, **mode,
        )  # fmt: skip
    add_regions(target)
    return target


def add_regions(package):
    """Group the counties into west, middle and east by longitude: a zoning to compare with.

    The state is commonly told as mountains, piedmont and coastal plain; the two limits are ours.
    """
    source = ogr.Open(str(package), update=1)
    counties = source.GetLayer("counties")
    counties.CreateField(ogr.FieldDefn("region", ogr.OFTString))
    counties.StartTransaction()
    for feature in counties:
        longitude = feature.GetGeometryRef().Centroid().GetX()
        feature["region"] = (
            "west" if longitude < -81.3 else "middle" if longitude < -78.7 else "east"
        )
        counties.SetFeature(feature)
    counties.CommitTransaction()


def analyse(host, folder, package):
    """Run every step; returns the results by step."""
    table = f"{package}|layername="

    def out(name):
        return str(folder / name)

    deaths, counties = table + "soho_deaths", table + "counties"
    return {
        "density": host.run(
            "adaptivedensity", RECORDS=deaths, WEIGHT="Count", DENSITY=out("soho_density.tif"),
            ERROR=out("soho_density_error.tif"), REPORT=out("report_soho_density.html"),
        ),
        "grid": host.run(
            "gridvariance", RECORDS=deaths, COUNT="Count", SEED=SEED,
            VARIANCE=out("soho_variance.tif"), TABLE=out("soho_variance_table.csv"),
            REPORT=out("report_soho_variance.html"),
        ),
        "safe": host.run(
            "safehexagons", RECORDS=deaths, WEIGHT="Count", HEXAGON_SIZE=100.0, SEED=SEED,
            RELEASE=out("soho_release.gpkg"), REPORT=out("report_soho_release.html"),
        ),
        "units": host.run(
            "unitvariance", UNITS=counties, COUNT="SID74", TOTAL="BIR74", LABEL="NAME",
            OFFICIAL="region", SEED=SEED, UNITS_OUT=out("counties_variance.gpkg"),
            TABLE=out("counties_variance_table.csv"), REPORT=out("report_counties.html"),
        ),
        "correlation": host.run(
            "correlationspread", UNITS=counties, X_COUNT="SID74", X_TOTAL="BIR74",
            Y_COUNT="SID79", Y_TOTAL="BIR79", SEED=SEED, TABLE=out("counties_correlation.csv"),
            REPORT=out("report_counties_correlation.html"),
        ),
    }  # fmt: skip


def peak_to_pump(package, density):
    """Metres from the density's peak to the pump that most deaths lie nearest to."""
    from qgis.core import QgsCoordinateReferenceSystem, QgsCoordinateTransformContext
    from steadfield.plugin.rasters import read_raster
    from steadfield.plugin.reference_system import reproject

    source = ogr.Open(str(package))
    raster = gdal.Open(density)
    target = QgsCoordinateReferenceSystem.fromWkt(raster.GetProjection())

    def places(name):
        layer = source.GetLayer(name)
        points = [feature.GetGeometryRef().GetPoint_2D() for feature in layer]
        mercator = QgsCoordinateReferenceSystem("EPSG:3857")
        return reproject(np.array(points), mercator, target, QgsCoordinateTransformContext())

    deaths, pumps = places("soho_deaths"), places("soho_pumps")
    counts = np.array([feature["Count"] for feature in source.GetLayer("soho_deaths")], float)
    nearest = np.argmin(np.hypot(*(deaths[:, None] - pumps[None]).transpose(2, 0, 1)), axis=1)
    pump = pumps[np.argmax(np.bincount(nearest, counts))]
    values, grid, _ = read_raster(density)
    row, column = np.unravel_index(np.nanargmax(values), values.shape)
    return float(np.hypot(grid.x_centres()[column] - pump[0], grid.y_centres()[row] - pump[1]))


def write_page(folder, package, done):
    """Maps, project and index.html."""
    from demo_pages import CAUTIONS
    from map_sheets import map_sheet
    from qgis.core import QgsProject, QgsRasterLayer, QgsVectorLayer
    from steadfield.plugin import looks
    from steadfield.plugin.report import Report, versions
    from steadfield.plugin.text import number

    pumps = QgsVectorLayer(f"{package}|layername=soho_pumps", "Pumps", "ogr")
    looks.single("#b4281f")(pumps)
    layers = {
        "density": QgsRasterLayer(done["density"]["DENSITY"], "Deaths per km²"),
        "variance": QgsRasterLayer(done["grid"]["VARIANCE"], "Under other cells"),
        "release": QgsVectorLayer(done["safe"]["RELEASE"], "Release: deaths by hexagon"),
        "counties": QgsVectorLayer(done["units"]["UNITS_OUT"], "Counties under other zones"),
    }
    project = QgsProject.instance()
    project.setTitle("Open data")
    project.addMapLayers([pumps, *layers.values()])
    source = ogr.Open(str(package))
    cases, births = np.sum(
        [(feature["SID74"], feature["BIR74"]) for feature in source.GetLayer("counties")], axis=0
    )
    distance = peak_to_pump(package, done["density"]["DENSITY"])
    page = Report(
        "Open data: from question to publication",
        "Does the job give what is known of well-known data?",
        f"The density of deaths in Soho peaks {number(distance)} m from the pump that most deaths "
        f"lie nearest to; the {number(cases)} cases among {number(births)} births of North "
        "Carolina stay the same under every zoning.",
    )
    captions = {
        "density": "Deaths of 1854 in Soho (Snow), adaptive density; pumps as dots.",
        "variance": "Places whose density stands out however cells are drawn.",
        "release": "Deaths by disclosure-safe hexagon.",
        "counties": "Counties whose rate stands out however they are grouped.",
    }
    for name, caption in captions.items():
        layer = layers[name]
        over = [pumps, layer] if name in ("density", "variance") else [layer]
        project.setCrs(layer.crs())
        path = folder / f"map_{name}.png"
        map_sheet(project, over, caption, str(path), layer.extent())
        page.picture("", path.read_bytes(), caption)
    project.write(str(folder / "open_data.qgz"))
    reports = sorted(path.name for path in folder.glob("report_*.html"))
    page.links("Every step in full", [(name[7:-5].replace("_", " "), name) for name in reports])
    page.table("Software", ["part", "version"], versions())
    page.text("Cautions", *CAUTIONS[1:], kind="caution")
    (folder / "index.html").write_text(page.html(), encoding="utf-8")


def main(folder):
    folder = Path(folder).resolve()
    folder.mkdir(parents=True, exist_ok=True)
    host = Host()
    package = copy_layers(folder)
    done = analyse(host, folder, package)
    write_page(folder, package, done)
    print(f"\nOpen {folder.name}/index.html")
    host.leave()


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else "demo-output-open-data")
