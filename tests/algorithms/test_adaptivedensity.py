"""Adaptive density surface through the host."""

import importlib.util
import re
from pathlib import Path

import numpy as np
import pytest
import shapely
from osgeo import gdal
from qgis.core import (
    QgsCoordinateTransform,
    QgsProcessingException,
    QgsProject,
    QgsRasterLayer,
    QgsVectorLayer,
)

gdal.UseExceptions()


def read(path, band=1):
    """Values of a band with NaN for no data, and x, y of the pixel centres."""
    dataset = gdal.Open(path)
    raster = dataset.GetRasterBand(band)
    values = raster.ReadAsArray().astype(float)
    values[values == raster.GetNoDataValue()] = np.nan
    left, cell, _, top, _, down = dataset.GetGeoTransform()
    rows, columns = values.shape
    x = left + (np.arange(columns) + 0.5) * cell
    y = top + (np.arange(rows) + 0.5) * down
    return values, *np.meshgrid(x, y)


@pytest.fixture
def density(run, tmp_path):
    """Run the algorithm; returns the results and the feedback."""

    def runner(cancel_at=None, **parameters):
        parameters.setdefault("DENSITY", str(tmp_path / "density.tif"))
        return run("adaptivedensity", parameters, cancel_at)

    return runner


def clusters(seed=1, records=600):
    rng = np.random.default_rng(seed)
    sharp = rng.random(records) < 0.4
    x = np.where(sharp, 4_301_000, 4_302_500) + rng.normal(0, 1, records) * np.where(sharp, 80, 700)
    y = np.where(sharp, 3_201_500, 3_202_200) + rng.normal(0, 1, records) * np.where(sharp, 80, 700)
    return x, y


DISTRICT = shapely.box(4_300_000, 3_200_000, 4_304_000, 3_204_000).difference(
    shapely.box(4_302_000, 3_202_000, 4_302_800, 3_203_000)
)


def test_one_record_is_one_gaussian_per_square_kilometre(density, point_layer):
    results, _ = density(
        RECORDS=point_layer([4_300_010.0], [3_200_030.0]), BANDWIDTH=100, CELL_SIZE=25
    )
    values, x, y = read(results["DENSITY"])
    apart = (x - 4_300_010.0) ** 2 + (y - 3_200_030.0) ** 2
    exact = 1e6 * np.exp(-apart / (2 * 100**2)) / (2 * np.pi * 100**2)
    assert np.abs(values - exact).max() <= 1e-4 * exact.max()
    assert results["PEAK"] == pytest.approx(exact.max(), rel=1e-4)
    assert (results["BANDWIDTH_USED"], results["CELL_SIZE_USED"]) == (100, 25)
    # within three bandwidths along each axis a Gaussian holds 0.9973^2 (the three-sigma rule)
    assert results["TOTAL"] == pytest.approx(0.9973**2, abs=0.003)


@pytest.mark.parametrize("kernel", [0, 1])
def test_fixed_surface_is_the_weighted_sum_of_kernels(density, point_layer, kernel):
    x, y = clusters()
    weight = np.random.default_rng(2).integers(1, 5, len(x))
    results, _ = density(
        RECORDS=point_layer(x, y, cases=weight),
        WEIGHT="cases",
        BANDWIDTH=150,
        CELL_SIZE=50,
        ADAPT=0,
        KERNEL=kernel,
    )
    values, place_x, place_y = read(results["DENSITY"])
    rows, columns = np.unravel_index(np.argsort(values.ravel())[::7], values.shape)
    apart = (place_x[rows, columns, None] - x) ** 2 + (place_y[rows, columns, None] - y) ** 2
    scaled = apart / 150**2
    shapes = (
        np.exp(-scaled / 2) / (2 * np.pi),
        np.maximum(1 - scaled / 8, 0) ** 2 * 3 / (8 * np.pi),
    )
    exact = 1e6 * (shapes[kernel] / 150**2) @ weight
    assert np.abs(values[rows, columns] - exact).max() <= 1.1e-4 * exact.max()


def test_densities_and_lengths_do_not_depend_on_the_unit_of_the_crs(density, point_layer, tmp_path):
    # New York in US survey feet and in metres: EPSG 2263 and 32118 share their projection
    x, y = clusters(3)
    x, y = x - 4_302_000 + 300_000, y - 3_202_000 + 60_000
    feet = 3937 / 1200
    found = []
    for name, scale, crs in (("feet", feet, "EPSG:2263"), ("metres", 1.0, "EPSG:32118")):
        results, _ = density(
            RECORDS=point_layer(x * scale, y * scale, crs),
            BANDWIDTH=200,
            CELL_SIZE=40,
            DENSITY=str(tmp_path / f"{name}.tif"),
        )
        found.append(results)
    assert found[0]["PEAK"] == pytest.approx(found[1]["PEAK"], rel=0.01)
    assert found[0]["BANDWIDTH_USED"] == pytest.approx(200)
    assert found[0]["CELL_SIZE_USED"] == pytest.approx(40)


def test_geographic_records_are_mapped_in_an_equal_area_crs(density, point_layer):
    rng = np.random.default_rng(4)
    layer = point_layer(10 + rng.normal(0, 0.01, 200), 52 + rng.normal(0, 0.01, 200), "EPSG:4326")
    results, watcher = density(RECORDS=layer)
    crs = QgsRasterLayer(results["DENSITY"]).crs()
    assert not crs.isGeographic()
    assert any("Working CRS" in words for words in watcher.informed)
    values = read(results["DENSITY"])[0]
    total = np.nansum(values) * results["CELL_SIZE_USED"] ** 2 / 1e6
    assert total == pytest.approx(200, rel=0.02)


def test_chosen_bandwidth_and_cell_are_said_and_returned(density, point_layer):
    x, y = clusters(5)
    results, watcher = density(RECORDS=point_layer(x, y))
    assert results["BANDWIDTH_USED"] > results["CELL_SIZE_USED"] > 0
    said = " ".join(watcher.informed)
    assert "Bandwidth chosen" in said and "Cell size chosen" in said


def test_correction_by_record_keeps_the_total(density, point_layer, polygon_layer):
    x, y = clusters(6)
    inside = shapely.contains_xy(DISTRICT, x, y)
    results, watcher = density(
        RECORDS=point_layer(x, y), BOUNDARY=polygon_layer([DISTRICT]), EDGE=1, CELL_SIZE=20
    )
    assert results["TOTAL"] == pytest.approx(inside.sum(), rel=1e-6)
    outside = int((~inside).sum())
    assert any(words.startswith(f"{outside} records outside") for words in watcher.warnings)


def test_correction_by_place_keeps_an_even_pattern_even(density, point_layer, polygon_layer):
    # a lattice of one record per 100 m x 100 m: 100 per km² up to the border
    x, y = (values.ravel() for values in np.meshgrid(*[np.arange(50, 4000, 100.0)] * 2))
    x, y = x + 4_300_000, y + 3_200_000
    inside = shapely.contains_xy(DISTRICT, x, y)
    results, _ = density(
        RECORDS=point_layer(x[inside], y[inside]),
        BOUNDARY=polygon_layer([DISTRICT]),
        BANDWIDTH=150,
        CELL_SIZE=50,
        EDGE=2,
    )
    values, place_x, place_y = read(results["DENSITY"])
    known = ~np.isnan(values)
    assert np.array_equal(known, shapely.contains_xy(DISTRICT, place_x, place_y))
    assert np.abs(values[known] / 100 - 1).max() < 0.05


def test_without_correction_records_beyond_the_border_count(density, point_layer, polygon_layer):
    x, y = np.array([4_299_900.0, 4_302_000.0]), np.array([3_202_000.0, 3_201_000.0])
    results, watcher = density(
        RECORDS=point_layer(x, y),
        BOUNDARY=polygon_layer([DISTRICT]),
        BANDWIDTH=150,
        CELL_SIZE=50,
        EDGE=0,
        ADAPT=0,
    )
    values, place_x, place_y = read(results["DENSITY"])
    pixel = np.unravel_index(np.argmin(np.hypot(place_x - x[0], place_y - y[0])), values.shape)
    assert values[pixel] > 1.0
    assert any("1 records outside the boundary count" in words for words in watcher.informed)


def test_error_and_support_say_how_many_records_stand_behind(density, point_layer, tmp_path):
    # 16 records on one place: 16 effective records, and an error of a quarter, near and far
    results, _ = density(
        RECORDS=point_layer([4_300_000.0] * 16, [3_200_000.0] * 16),
        BANDWIDTH=100,
        ADAPT=0,
        CELL_SIZE=20,
        ERROR=str(tmp_path / "error.tif"),
        SUPPORT=str(tmp_path / "support.tif"),
    )
    values = read(results["DENSITY"])[0]
    reached = values > 0.01 * values.max()
    assert read(results["SUPPORT"])[0][reached] == pytest.approx(16, rel=0.02)
    assert read(results["ERROR"])[0][reached] == pytest.approx(0.25, rel=0.01)


@pytest.mark.parametrize("noise", [1, 2])
def test_noisy_pixels_are_dropped_or_marked(density, point_layer, tmp_path, noise):
    x, y = clusters(7)
    results, _ = density(
        RECORDS=point_layer(x, y),
        BANDWIDTH=150,
        ADAPT=0,
        CELL_SIZE=50,
        NOISE=noise,
        MOST_ERROR=0.3,
        SUPPORT=str(tmp_path / "support.tif"),
    )
    if noise == 1:
        shown, support = read(results["DENSITY"])[0], read(results["SUPPORT"])[0]
        assert np.array_equal(np.isnan(shown), np.isnan(support))
        # 1 / 0.3^2
        assert np.nanmin(support) >= 11.1 and np.isnan(shown).mean() > 0.2
    else:
        plain, marked = read(results["DENSITY"])[0], read(results["DENSITY"], 2)[0]
        noisy = read(results["SUPPORT"])[0] < 1 / 0.3**2
        assert np.array_equal(marked == -1, noisy) and noisy.any()
        assert np.array_equal(plain[~noisy], marked[~noisy])
    layer = QgsRasterLayer(results["DENSITY"])
    labels = [item.label for item in _items(layer)]
    assert any("per km²" in label for label in labels)
    assert any("30" in label and "error" in label for label in labels) == (noise == 2)


def _items(layer):
    return layer.renderer().shader().rasterShaderFunction().colorRampItemList()


def test_least_records_widens_bandwidths(density, point_layer, tmp_path):
    x, y = clusters(8)
    layer = point_layer(x, y)
    free, _ = density(RECORDS=layer, BANDWIDTH=60, CELL_SIZE=25)
    held, watcher = density(
        RECORDS=layer,
        BANDWIDTH=60,
        CELL_SIZE=25,
        LEAST_RECORDS=40,
        DENSITY=str(tmp_path / "held.tif"),
    )
    assert held["PEAK"] < free["PEAK"]
    assert any("reach 40 other records" in words for words in watcher.informed)


def test_bandwidth_below_a_pixel_is_raised_with_a_counted_warning(density, point_layer):
    x, y = clusters(9)
    results, watcher = density(RECORDS=point_layer(x, y), BANDWIDTH=30, CELL_SIZE=100, ADAPT=0)
    assert any("600 records" in words and "100 m" in words for words in watcher.warnings)
    values = read(results["DENSITY"])[0]
    assert np.nansum(values) * 0.01 == pytest.approx(600, rel=0.02)


def test_unusable_records_are_counted_in_warnings(density, point_layer):
    x, y = clusters(10, 50)
    layer = point_layer(x, y, cases=[None, None, -2, -1, -5, *[3] * 45])
    feature = next(layer.getFeatures("cases = 3"))
    layer.dataProvider().changeGeometryValues({feature.id(): type(feature.geometry())()})
    results, watcher = density(RECORDS=layer, WEIGHT="cases", BANDWIDTH=200)
    said = " ".join(watcher.warnings)
    assert re.search(r"\b2 features", said) and re.search(r"\b3 features", said)
    assert re.search(r"\b1 features", said)
    assert results["TOTAL"] == pytest.approx(44 * 3, rel=0.01)


@pytest.mark.parametrize(
    ("parameters", "message"),
    [
        ({"x": []}, "RECORDS"),
        ({"x": [4_300_000.0]}, "BANDWIDTH"),
        ({"weight": 0}, "WEIGHT"),
        ({"elsewhere": True}, "BOUNDARY"),
        ({"CELL_SIZE": 0.01}, r"CELL_SIZE.*choose \S+ m or more"),
    ],
)
def test_what_cannot_work_is_refused_by_name(
    density, point_layer, polygon_layer, tmp_path, parameters, message
):
    x, y = clusters(11, 40)
    x = parameters.pop("x", x)
    y = y[: len(x)]
    settings = {"RECORDS": point_layer(x, y, cases=[parameters.pop("weight", 1)] * len(x))}
    settings["WEIGHT"] = "cases"
    if parameters.pop("elsewhere", False):
        settings["BOUNDARY"] = polygon_layer([shapely.box(0, 0, 1000, 1000)])
    with pytest.raises(QgsProcessingException, match=message):
        density(**settings, **parameters)
    assert not list(tmp_path.iterdir())


def test_cell_size_that_a_refusal_names_would_have_fitted(density, point_layer, monkeypatch):
    from steadfield.algorithms import adaptivedensity_study as study

    monkeypatch.setattr(study, "machine_memory", lambda: 60e6)
    x, y = clusters(12, 100)
    layer = point_layer(x, y)
    with pytest.raises(QgsProcessingException) as refusal:
        density(RECORDS=layer, BANDWIDTH=200, CELL_SIZE=1)
    named = float(re.search(r"choose (\S+) m or more", str(refusal.value)).group(1))
    results, _ = density(RECORDS=layer, BANDWIDTH=200, CELL_SIZE=named)
    assert results["CELL_SIZE_USED"] == named


@pytest.mark.parametrize("share", [0.0, 0.15, 0.5, 0.8])
def test_cancelling_leaves_no_file(density, point_layer, polygon_layer, tmp_path, share):
    x, y = clusters(13, 3000)
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        density(
            cancel_at=share,
            RECORDS=point_layer(x, y),
            BOUNDARY=polygon_layer([DISTRICT]),
            CELL_SIZE=20,
            ERROR=str(tmp_path / "error.tif"),
            REPORT=str(tmp_path / "report.html"),
        )
    assert not list(tmp_path.iterdir())


def test_progress_only_rises(density, point_layer, polygon_layer, tmp_path):
    x, y = clusters(14, 2000)
    _, watcher = density(
        RECORDS=point_layer(x, y),
        BOUNDARY=polygon_layer([DISTRICT]),
        EDGE=1,
        LEAST_RECORDS=5,
        REPORT=str(tmp_path / "report.html"),
    )
    assert watcher.shares == sorted(watcher.shares) and len(watcher.shares) > 10


def test_report_is_complete_and_names_no_path(density, point_layer, polygon_layer, tmp_path):
    x, y = clusters(15)
    results, _ = density(
        RECORDS=point_layer(x, y),
        BOUNDARY=polygon_layer([DISTRICT]),
        REPORT=str(tmp_path / "report.html"),
    )
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    for words in ("Abramson 1982", "Jones 1993", "Kish 1965", "half of the total", "Cautions"):
        assert words in page
    assert page.count("data:image/png") == 3
    assert str(tmp_path) not in page and str(Path.home()) + "/" not in page


def soho(name):
    """A layer of the 1854 Soho deaths and pumps as libpysal packages them, found unimported."""
    package = importlib.util.find_spec("libpysal")
    folder = Path(package.origin).parent / "examples" / "snow_maps"
    layer = QgsVectorLayer(str(folder / f"{name}.shp"), name, "ogr")
    assert layer.isValid()
    return layer


def test_soho_deaths_are_densest_near_the_broad_street_pump(density, tmp_path):
    # Snow (1855), On the Mode of Communication of Cholera: the deaths surround the pump in Broad
    # Street, here known as the pump that most deaths are nearest to
    results, _ = density(RECORDS=soho("SohoPeople"), WEIGHT="Count")
    values, x, y = read(results["DENSITY"])
    crs = QgsRasterLayer(results["DENSITY"]).crs()
    places = {}
    for name in ("SohoPeople", "SohoWater"):
        layer = soho(name)
        transform = QgsCoordinateTransform(layer.crs(), crs, QgsProject.instance())
        points = [transform.transform(f.geometry().asPoint()) for f in layer.getFeatures()]
        places[name] = np.array([(point.x(), point.y()) for point in points])
    deaths = np.array([feature["Count"] for feature in soho("SohoPeople").getFeatures()])
    pumps = places["SohoWater"]
    apart = np.linalg.norm(places["SohoPeople"][:, None] - pumps, axis=2)
    broad_street = pumps[np.argmax(np.bincount(apart.argmin(axis=1), deaths, len(pumps)))]
    peak = np.unravel_index(np.nanargmax(values), values.shape)
    assert np.hypot(x[peak] - broad_street[0], y[peak] - broad_street[1]) < 60
    assert results["TOTAL"] == pytest.approx(deaths.sum(), rel=0.01)
