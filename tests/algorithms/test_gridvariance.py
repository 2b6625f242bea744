"""Zoning variance from points through the host."""

from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pytest
import shapely
from osgeo import gdal, ogr
from qgis.core import (
    QgsCoordinateTransform,
    QgsFeature,
    QgsFeatureRequest,
    QgsGeometry,
    QgsProcessingException,
    QgsProject,
    QgsRasterLayer,
    QgsVectorLayer,
)

LEFT, BOTTOM = 4_000_000.0, 3_000_000.0


@pytest.fixture
def simulate(run, tmp_path):
    """Run the algorithm with few zonings; returns bands by name, results and the feedback."""

    def runner(cancel_at=None, **parameters):
        chosen = {
            "CELL_SIZES": "700, 1200",
            "REPLICATES": 30,
            "SEED": 4,
            "EVALUATION_CELL": 200,
            "VARIANCE": str(tmp_path / "variance.tif"),
            "TABLE": str(tmp_path / "table.gpkg"),
            "REPORT": None,
            **parameters,
        }
        results, watcher = run("gridvariance", chosen, cancel_at)
        dataset = gdal.Open(results["VARIANCE"])
        bands = {}
        for index in range(1, dataset.RasterCount + 1):
            band = dataset.GetRasterBand(index)
            values = band.ReadAsArray().astype(float)
            values[values == band.GetNoDataValue()] = np.nan
            bands[band.GetDescription()] = values
        return bands, results, watcher

    return runner


def people(seed=1, number=4000, side=5000.0):
    place = np.random.default_rng(seed).uniform(0, side, (2, number))
    return place[0] + LEFT, place[1] + BOTTOM


def halves(point_layer, seed=1):
    """Residents, and records of whom the western half has eight times as many per resident."""
    x, y = people(seed)
    chance = np.where(x < LEFT + 2500, 0.4, 0.05)
    hit = np.random.default_rng(seed + 1).random(len(x)) < chance
    return point_layer(x[hit], y[hit]), point_layer(x, y), (x, y, hit)


def test_the_high_half_holds_above_and_the_low_half_below(simulate, point_layer, tmp_path):
    records, background, (_, _, hit) = halves(point_layer)
    bands, results, _ = simulate(RECORDS=records, BACKGROUND=background)
    assert list(bands) == [
        "mean", "sd_scale", "sd_zoning", "sd_counting", "p_above", "verdict", "evidence"
    ]  # fmt: skip
    assert results["THRESHOLD_USED"] == pytest.approx(1000 * hit.mean())
    west, east = bands["verdict"][:, :8], bands["verdict"][:, -8:]
    assert np.nanmean(west == 1) > 0.9 and np.nanmean(east == -1) > 0.9
    # Along the border between the halves a cell mixes both.
    assert np.mean(bands["verdict"][:, 12:14] == 0) > 0.5
    assert np.nanmean(bands["mean"][:, :8]) == pytest.approx(400, rel=0.1)
    assert np.nanmean(bands["mean"][:, -8:]) == pytest.approx(50, rel=0.15)
    assert results["SHARE_ABOVE"] > 0.25 and results["SHARE_BELOW"] > 0.25


def test_the_table_has_a_row_for_each_size_and_statistic(simulate, point_layer):
    records, background, _ = halves(point_layer)
    _, results, _ = simulate(RECORDS=records, BACKGROUND=background, BUDGET=0.2)
    table = QgsVectorLayer(results["TABLE"], "table", "ogr")
    rows = list(table.getFeatures())
    assert {row["cell_size"] for row in rows} == {700, 1200}
    assert len(rows) == 2 * 9
    for row in rows:
        figures = [row[name] for name in ("lowest", "q05", "q50", "q95", "highest")]
        assert figures == sorted(figures) and row["replicates"] == 30
        assert (row["unit"] == "per 1000") == (
            row["statistic"] in ("largest", "smallest", "value_range")
        )
    largest = {row["cell_size"]: row["q50"] for row in rows if row["statistic"] == "largest"}
    assert largest[700] > largest[1200] > results["THRESHOLD_USED"]


def test_a_budget_reaches_more_than_chance_and_is_reported(simulate, point_layer, tmp_path):
    records, background, (_, _, hit) = halves(point_layer)
    _, results, _ = simulate(
        RECORDS=records, BACKGROUND=background, BUDGET=0.2, REPORT=str(tmp_path / "report.html")
    )
    # Places of the high half hold 0.4 / 0.225 times their share of the records.
    assert results["EVENTS_REACHED"] == pytest.approx(0.2 * 0.4 / 0.225 * hit.sum(), rel=0.1)
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "held-out" in page and "places drawn at random would reach 20.0" in page


def test_the_report_answers_in_a_sentence_and_names_no_path(simulate, point_layer, tmp_path):
    records, background, _ = halves(point_layer)
    _, results, _ = simulate(
        RECORDS=records, BACKGROUND=background, REPORT=str(tmp_path / "report.html")
    )
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "however the cells are drawn" in page
    assert "confidential" in page and "Seed used" in page and page.count("<img") == 3
    assert str(tmp_path) not in page and "made for a test" in page


def test_the_same_seed_gives_the_same_bits_and_another_seed_does_not(simulate, point_layer):
    records, background, _ = halves(point_layer)
    layers = {"RECORDS": records, "BACKGROUND": background}
    first, _, _ = simulate(**layers)
    again, _, _ = simulate(**layers)
    other, results, _ = simulate(**layers, SEED=5)
    for name, values in first.items():
        np.testing.assert_array_equal(values, again[name])
    assert not np.array_equal(first["mean"], other["mean"]) and results["SEED_USED"] == 5


def test_without_a_background_values_are_records_per_square_kilometre(simulate, point_layer):
    x, y = people(number=2000)
    boundary = shapely.box(LEFT, BOTTOM, LEFT + 5000, BOTTOM + 5000)
    bands, results, _ = simulate(
        RECORDS=point_layer(x, y), BOUNDARY=box_layer(boundary), SHAPE=1, ROTATE=False
    )
    assert results["THRESHOLD_USED"] == pytest.approx(2000 / 25, rel=1e-6)
    assert np.nanmean(bands["mean"]) == pytest.approx(80, rel=0.03)
    assert not np.isnan(bands["verdict"]).any()
    assert np.mean(bands["verdict"] == 0) > 0.95


def box_layer(polygon, crs="EPSG:3035"):
    layer = QgsVectorLayer(f"Polygon?crs={crs}", "box", "memory")
    feature = QgsFeature()
    feature.setGeometry(QgsGeometry.fromWkt(polygon.wkt))
    layer.dataProvider().addFeatures([feature])
    layer.updateExtents()
    return layer


def test_base_polygons_keep_the_overall_value(simulate, polygon_layer):
    generator = np.random.default_rng(6)
    squares = [
        shapely.box(LEFT + 500 * i, BOTTOM + 500 * j, LEFT + 500 * i + 500, BOTTOM + 500 * j + 500)
        for i in range(10)
        for j in range(10)
    ]
    total = generator.integers(50, 400, 100)
    count = generator.binomial(total, 0.1)
    layer = polygon_layer(squares, events=count.tolist(), people=total.tolist())
    bands, results, _ = simulate(
        RECORDS=layer, COUNT="events", BACKGROUND=layer, TOTAL="people", CELL_SIZES="1000, 2000"
    )
    overall = 1000 * count.sum() / total.sum()
    assert results["THRESHOLD_USED"] == pytest.approx(overall, rel=1e-9)
    assert np.nanmean(bands["mean"]) == pytest.approx(overall, rel=0.1)
    again, _, _ = simulate(RECORDS=layer, COUNT="events", TOTAL="people", CELL_SIZES="1000, 2000")
    np.testing.assert_array_equal(again["mean"], bands["mean"])


def test_polygons_without_a_count_are_refused(simulate, polygon_layer):
    layer = polygon_layer([shapely.box(LEFT, BOTTOM, LEFT + 900, BOTTOM + 900)])
    with pytest.raises(QgsProcessingException, match="COUNT"):
        simulate(RECORDS=layer)


def test_a_geographic_layer_is_worked_on_in_an_equal_area_crs(simulate, point_layer):
    x, y = np.random.default_rng(3).uniform(0, 0.05, (2, 900))
    background = point_layer(x + 8, y + 50, "EPSG:4326")
    records = point_layer(x[:200] + 8, y[:200] + 50, "EPSG:4326")
    _, results, watcher = simulate(RECORDS=records, BACKGROUND=background)
    assert "Azimuthal" in gdal.Info(results["VARIANCE"], format="json")["coordinateSystem"]["wkt"]
    assert any("equal-area" in words for words in watcher.informed)


def test_what_cannot_be_used_is_left_out_and_counted(simulate, point_layer):
    x, y = people(number=600)
    x, y = list(x), list(y)
    records = point_layer(
        [*x[:100], LEFT + 90_000], [*y[:100], BOTTOM], n=[None, -1, -2, *([1] * 98)]
    )
    background = point_layer(x, y)
    box = box_layer(shapely.box(LEFT, BOTTOM, LEFT + 5000, BOTTOM + 5000))
    _, results, watcher = simulate(
        RECORDS=records, COUNT="n", BACKGROUND=background, BOUNDARY=box, CELL_SIZES="1500"
    )
    words = " ".join(watcher.warnings)
    assert "1 features with a null weight" in words
    assert "2 features with a negative weight" in words
    assert "1 features outside the boundary" in words
    assert results["THRESHOLD_USED"] == pytest.approx(1000 * 97 / 600)


def test_one_record_over_a_background_still_makes_a_map(simulate, point_layer):
    x, y = people(number=300)
    bands, results, _ = simulate(
        RECORDS=point_layer(x[:1], y[:1]), BACKGROUND=point_layer(x, y), CELL_SIZES="2000, 3000"
    )
    assert results["THRESHOLD_USED"] == pytest.approx(1000 / 300)
    assert not (bands["verdict"] == 1).any()


def test_one_record_alone_is_refused_in_words(simulate, point_layer):
    with pytest.raises(QgsProcessingException, match="neither a background nor a boundary"):
        simulate(RECORDS=point_layer([LEFT], [BOTTOM]))


def test_sizes_are_chosen_and_logged_when_none_are_given(simulate, point_layer):
    records, background, _ = halves(point_layer)
    _, results, watcher = simulate(
        RECORDS=records, BACKGROUND=background, CELL_SIZES="", EVALUATION_CELL=0
    )
    chosen = next(words for words in watcher.informed if words.startswith("Cell sizes"))
    assert chosen.count(",") == 5
    assert results["EVALUATION_CELL_USED"] == 17.0


@pytest.mark.parametrize(
    ("wrong", "words"),
    [
        ({"CELL_SIZES": "0, 100"}, "above 0"),
        ({"CELL_SIZES": "a bit"}, "CELL_SIZES"),
        ({"CELL_SIZES": "0.5"}, "too small for this extent"),
        ({"EVALUATION_CELL": 2.0, "CELL_SIZES": "400,500,600,700,800"}, "GB of memory"),
        ({"LEAST_TOTAL": 1e9}, "LEAST_TOTAL"),
        ({"BUDGET": 1.0}, "BUDGET"),
    ],
)
def test_impossible_settings_are_refused_by_name(simulate, point_layer, wrong, words, tmp_path):
    records, background, _ = halves(point_layer)
    with pytest.raises(QgsProcessingException, match=words):
        simulate(RECORDS=records, BACKGROUND=background, **wrong)
    assert not list(tmp_path.iterdir())


def test_members_cannot_outnumber_their_background(simulate, point_layer):
    x, y = people(number=50)
    with pytest.raises(QgsProcessingException, match="KIND"):
        simulate(RECORDS=point_layer(x, y), BACKGROUND=point_layer(x[:20], y[:20]), KIND=1)


def test_an_empty_layer_is_refused(simulate, point_layer):
    with pytest.raises(QgsProcessingException, match=r"RECORDS.*no features"):
        simulate(RECORDS=point_layer([], []))


@pytest.mark.parametrize("share", [0.0, 0.06])
def test_cancelling_leaves_no_file(simulate, point_layer, tmp_path, share):
    records, background, _ = halves(point_layer)
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        simulate(
            share,
            RECORDS=records,
            BACKGROUND=background,
            REPLICATES=10_000,
            REPORT=str(tmp_path / "report.html"),
        )
    assert not list(tmp_path.iterdir())


def example(folder, name):
    package = find_spec("libpysal")
    if package is None:
        pytest.skip("the package libpysal, which carries the data, is not installed")
    return str(Path(package.origin).parent / "examples" / folder / name)


def test_north_carolina_counties_keep_their_published_totals(simulate, tmp_path):
    # 667 cases among 329,962 births (Cressie & Chan 1989, JASA 84:393).
    path = example("sids2", "sids2.shp")
    source = ogr.Open(path)
    copy = str(tmp_path / "counties.gpkg")
    gdal.VectorTranslate(
        copy, source.GetName(), format="GPKG", dstSRS="EPSG:4267", srcSRS="EPSG:4267"
    )
    _, results, _ = simulate(
        RECORDS=copy, COUNT="SID74", BACKGROUND=copy, TOTAL="BIR74",
        CELL_SIZES="80000, 150000", EVALUATION_CELL=10_000,
    )  # fmt: skip
    assert results["THRESHOLD_USED"] == pytest.approx(1000 * 667 / 329_962, rel=1e-9)


def test_the_mean_over_zonings_peaks_at_the_broad_street_pump(simulate, tmp_path):
    # Snow (1855): the deaths of 1854 gather around the pump of Broad Street, here the one that is
    # nearest to the most deaths.
    people_at, pumps_at = (
        QgsVectorLayer(example("snow_maps", f"Soho{name}.shp"), name, "ogr")
        for name in ("People", "Water")
    )
    copy = people_at.materialize(QgsFeatureRequest())
    bands, results, _ = simulate(
        RECORDS=copy, COUNT="Count", CELL_SIZES="50, 80", REPLICATES=50, EVALUATION_CELL=5
    )
    raster = QgsRasterLayer(results["VARIANCE"], "variance")
    extent = raster.extent()
    row, column = np.unravel_index(np.nanargmax(bands["mean"]), bands["mean"].shape)
    peak = extent.xMinimum() + 5 * (column + 0.5), extent.yMaximum() - 5 * (row + 0.5)

    def placed(layer):
        move = QgsCoordinateTransform(layer.crs(), raster.crs(), QgsProject.instance())
        found = [move.transform(one.geometry().asPoint()) for one in layer.getFeatures()]
        return np.array([(point.x(), point.y()) for point in found])

    places, pumps = placed(people_at), placed(pumps_at)
    deaths = np.array([feature["Count"] for feature in people_at.getFeatures()], float)
    nearest = np.hypot(*(places[:, None] - pumps).transpose(2, 0, 1)).argmin(axis=1)
    broad_street = pumps[np.bincount(nearest, weights=deaths).argmax()]
    assert np.hypot(*(broad_street - peak)) < 60
