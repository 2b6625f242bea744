"""The chain advice, surface, outlines on the lymphoma cases of the West Nile district of Uganda.

Points of Williams et al. (1978), British Journal of Cancer 37:109-122, as libpysal packages them:
whole kilometres of UTM zone 36 north, which puts them around Arua (31 degrees east, 3 north).
"""

import importlib.util
import re
from pathlib import Path

import numpy as np
import pytest
import shapely
from osgeo import gdal, ogr
from qgis.core import QgsVectorLayer

gdal.UseExceptions()


@pytest.fixture(scope="module")
def folder():
    """The folder of the data, found without importing the package."""
    package = importlib.util.find_spec("libpysal")
    if package is None:
        pytest.skip("the package libpysal, which carries the data, is not installed")
    return Path(package.origin).parent / "examples" / "burkitt"


@pytest.fixture(scope="module")
def cases(folder):
    """Places of the cases in metres, an (n, 2) array."""
    source = ogr.Open(str(folder / "burkitt.shp"))
    return 1000.0 * np.array([feature.geometry().GetPoint_2D() for feature in source.GetLayer()])


@pytest.fixture
def layer(point_layer, cases):
    return point_layer(*cases.T, "EPSG:32636")


def read(path):
    """Densities, and x and y of the pixel centres."""
    source = gdal.Open(path)
    values = source.GetRasterBand(1).ReadAsArray().astype(float)
    left, cell, _, top, _, down = source.GetGeoTransform()
    x = left + (np.arange(values.shape[1]) + 0.5) * cell
    y = top + (np.arange(values.shape[0]) + 0.5) * down
    return values, *np.meshgrid(x, y)


def test_advice_counts_cases_and_places_and_keeps_the_published_constants(
    run, layer, folder, cases, tmp_path
):
    said = re.search(r"burkitt\.shp.*n=(\d+)", (folder / "README.md").read_text(encoding="utf-8"))
    assert len(cases) == int(said[1]) == 188
    results, watcher = run(
        "bandwidthadvice", {"RECORDS": layer, "REPORT": str(tmp_path / "advice.html")}
    )
    places = len(np.unique(cases, axis=0))
    assert places < 188
    assert any(f"188 records on {places} places" in words for words in watcher.warnings)
    # s n^(-1/6) with s^2 the mean variance along the axes (Scott 1992, section 6.3)
    classic = np.sqrt(cases.var(axis=0, ddof=1).mean()) * 188 ** (-1 / 6)
    # constants of the plane: 1.085 (Terrell 1990, from the general formula) and 1 (Scott 1992),
    # the latter here with the spread of the quartiles where that is smaller
    assert results["OVERSMOOTHED"] / classic == pytest.approx(1.085, abs=0.01)
    assert 0.7 * classic < results["NORMAL_SCALE"] <= 1.003 * classic
    assert 1000 < results["ADVISED"] <= results["OVERSMOOTHED"]


def test_fixed_surface_agrees_with_scikit_learn_and_holds_all_cases(run, layer, cases, tmp_path):
    neighbors = pytest.importorskip("sklearn.neighbors")
    results, _ = run(
        "adaptivedensity",
        {
            "RECORDS": layer, "BANDWIDTH": 8000, "CELL_SIZE": 1000, "ADAPT": 0,
            "WORKING_CRS": "EPSG:32636", "DENSITY": str(tmp_path / "fixed.tif"),
        },
    )  # fmt: skip
    values, x, y = read(results["DENSITY"])
    # an independent implementation by trees
    model = neighbors.KernelDensity(bandwidth=8000, kernel="gaussian", rtol=1e-8).fit(cases)
    logarithms = model.score_samples(np.column_stack([x.ravel(), y.ravel()]))
    reference = 1e6 * 188 * np.exp(logarithms).reshape(values.shape)
    assert np.abs(values - reference).max() <= 1e-4 * reference.max()
    assert results["TOTAL"] == pytest.approx(reference.sum(), rel=1e-4)
    assert 0.97 * 188 < results["TOTAL"] <= 188


def test_outlines_of_the_adaptive_surface_hold_the_shares_and_cases_they_say(
    run, layer, cases, tmp_path
):
    advised = run("bandwidthadvice", {"RECORDS": layer, "REPORT": str(tmp_path / "advice.html")})[
        0
    ]["ADVISED"]
    surface, _ = run(
        "adaptivedensity",
        {
            "RECORDS": layer, "BANDWIDTH": advised, "WORKING_CRS": "EPSG:32636",
            "DENSITY": str(tmp_path / "adaptive.tif"),
        },
    )  # fmt: skip
    results, _ = run(
        "densityoutlines",
        {
            "DENSITY": surface["DENSITY"], "SHARES": "50, 90", "RECORDS": layer,
            "OUTLINES": str(tmp_path / "outlines.gpkg"),
        },
    )  # fmt: skip
    values, x, y = read(surface["DENSITY"])
    pieces = list(QgsVectorLayer(results["OUTLINES"], "outlines", "ogr").getFeatures())
    assert len(pieces) == results["PIECES"] > 1
    held, area = {50: 0.0, 90: 0.0}, {50: 0.0, 90: 0.0}
    for piece in pieces:
        shape = shapely.from_wkb(bytes(piece.geometry().asWkb()))
        share = 100 * values[shapely.contains_xy(shape, x, y)].sum() / values.sum()
        assert piece["piece_share"] == pytest.approx(share, rel=1e-5)
        within = shapely.contains_xy(shape, *cases.T).sum()
        touched = shapely.intersects_xy(shape, *cases.T).sum()
        assert within <= piece["records"] <= touched
        held[piece["share"]] += share
        area[piece["share"]] += shape.area
    for share in (50, 90):
        assert held[share] == pytest.approx(share, abs=0.3)
    assert area[50] < 0.4 * area[90]
