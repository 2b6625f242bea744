"""Density ratio through the host."""

import numpy as np
import pytest
import shapely
from osgeo import gdal
from qgis.core import QgsProcessingException, QgsRasterLayer, QgsVectorLayer
from steadfield.algorithms.numeric import contrast

gdal.UseExceptions()
EAST, NORTH = 4_300_000.0, 3_200_000.0
SQUARE = shapely.box(EAST, NORTH, EAST + 4000, NORTH + 4000)
# two and a half of its own standard deviations and one bandwidth
RAISED = shapely.Point(EAST + 2800, NORTH + 1400).buffer(2.5 * 220 + 350)


def read(path, band=1):
    """Values of a band with NaN for no data, and x, y of the pixel centres."""
    dataset = gdal.Open(path)
    raster = dataset.GetRasterBand(band)
    values = raster.ReadAsArray().astype(float)
    values[values == raster.GetNoDataValue()] = np.nan
    left, cell, _, top, _, down = dataset.GetGeoTransform()
    x = left + (np.arange(values.shape[1]) + 0.5) * cell
    y = top + (np.arange(values.shape[0]) + 0.5) * down
    return values, *np.meshgrid(x, y)


def places(seed=1, records=300, extra=50, background=2500):
    """Records that follow an even background but for one raised area."""
    generator = np.random.default_rng(seed)
    even = generator.uniform(0, 4000, (2, records))
    raised = generator.normal((2800, 1400), 220, (extra, 2)).T
    x, y = np.clip(np.hstack([even, raised]), 1, 3999)
    behind = generator.uniform(0, 4000, (2, background))
    return (EAST + x, NORTH + y), (EAST + behind[0], NORTH + behind[1])


@pytest.fixture
def compare(run, tmp_path, point_layer, polygon_layer):
    """Run the algorithm on one pattern into files of this test."""

    def runner(cancel_at=None, records=None, background=None, **parameters):
        first, second = places()
        settings = {
            "RECORDS": records or point_layer(*first),
            "BACKGROUND": background or point_layer(*second),
            "BOUNDARY": polygon_layer([SQUARE]),
            "BANDWIDTH": 350,
            "CELL_SIZE": 100,
            "RELABELLINGS": 39,
            "SEED": 5,
            "RATIO": str(tmp_path / "ratio.tif"),
            **parameters,
        }
        settings = {name: value for name, value in settings.items() if value is not None}
        return run("densityratio", settings, cancel_at)

    return runner


def test_ratio_is_that_of_the_core_in_both_bands(compare):
    results, _ = compare()
    log_ratio, _, _ = read(results["RATIO"])
    ratio, _, _ = read(results["RATIO"], 2)
    assert np.nanmax(np.abs(np.exp(log_ratio) - ratio)) < 1e-5
    pooled = contrast.pool(*[(*own, None) for own in places()])
    assert pooled.records == 350
    assert results["HIGHEST_RATIO"] == pytest.approx(np.nanmax(ratio), rel=1e-5)
    assert results["LOWEST_RATIO"] == pytest.approx(np.nanmin(ratio), rel=1e-5)
    assert (results["BANDWIDTH_USED"], results["CELL_SIZE_USED"]) == (350, 100)
    assert ratio.shape == (40, 40) and not np.isnan(ratio).any()


def test_the_raised_area_is_found_over_the_whole_map_and_nothing_else(compare, tmp_path):
    results, _ = compare(
        OUTLINES=str(tmp_path / "areas.gpkg"), P_VALUE=str(tmp_path / "p.tif"), RELABELLINGS=99
    )
    layer = QgsVectorLayer(results["OUTLINES"], "areas", "ogr")
    names = [field.name() for field in layer.fields()]
    found = [dict(zip(names, feature.attributes())) for feature in layer.getFeatures()]
    shapes = np.array([shapely.from_wkb(bytes(f.geometry().asWkb())) for f in layer.getFeatures()])
    assert shapely.is_valid(shapes).all()
    sure = [shape for shape, row in zip(shapes, found) if row["class"] == 2]
    assert len(sure) == results["AREAS_RAISED"] == 1
    assert RAISED.contains(sure[0])
    assert not any(row["class"] == -2 for row in found)
    (x, y), (behind_x, behind_y) = places()
    for shape, row in zip(shapes, found):
        assert row["records"] == shapely.contains_xy(shape, x, y).sum()
        assert row["background"] == shapely.contains_xy(shape, behind_x, behind_y).sum()
        assert row["expected"] == pytest.approx(row["background"] * 350 / 2500)
        assert row["area_km2"] == pytest.approx(shape.area / 1e6)
    assert results["P_RAISED"] == 0.01 < results["P_LOWERED"]
    raised, place_x, place_y = read(results["P_VALUE"], 3)
    inside = shapely.contains_xy(sure[0], place_x, place_y)
    assert np.array_equal(raised <= 0.05, inside)


def test_base_units_with_counts_serve_as_background(compare, point_layer):
    # 400 lattice units of 100 m x 200 m stand for residents spread evenly
    x, y = (values.ravel() for values in np.meshgrid(*[np.arange(100, 4000, 200.0)] * 2))
    residents = np.full(400, 25)
    units = point_layer(EAST + x, NORTH + y, residents=residents)
    results, watcher = compare(background=units, BACKGROUND_WEIGHT="residents")
    ratio, place_x, place_y = read(results["RATIO"], 2)
    peak = np.unravel_index(np.nanargmax(ratio), ratio.shape)
    assert RAISED.contains(shapely.Point(place_x[peak], place_y[peak]))
    assert results["P_RAISED"] == 1 / 40
    assert not any("importance" in words for words in watcher.warnings)


def test_weights_that_are_not_whole_are_taken_as_importance(compare, point_layer):
    (x, y), _ = places()
    weight = np.random.default_rng(6).gamma(3.0, size=len(x))
    _, watcher = compare(records=point_layer(x, y, severity=weight), WEIGHT="severity")
    assert any("importance of each record" in words for words in watcher.warnings)


def test_thin_background_gets_no_value(compare, point_layer):
    _, (behind_x, behind_y) = places()
    west = behind_x < EAST + 2000
    results, watcher = compare(background=point_layer(behind_x[west], behind_y[west]), ADAPT=0)
    ratio, place_x, _ = read(results["RATIO"], 2)
    assert np.isnan(ratio[place_x > EAST + 3600]).all()
    assert not np.isnan(ratio[place_x < EAST + 2000]).any()
    assert any("effective background points: no value" in words for words in watcher.informed)


def test_the_seed_decides_the_p_values(compare, tmp_path):
    maps = []
    for number, seed in enumerate((5, 5, 6)):
        path = str(tmp_path / f"p{number}.tif")
        results, _ = compare(SEED=seed, P_VALUE=path)
        assert results["SEED_USED"] == seed
        maps.append(read(path)[0])
    assert np.array_equal(maps[0], maps[1]) and not np.array_equal(maps[0], maps[2])


def test_without_relabellings_there_is_a_ratio_and_no_p_value(compare, tmp_path):
    results, _ = compare(RELABELLINGS=0)
    assert "P_RAISED" not in results
    with pytest.raises(QgsProcessingException, match=r"RELABELLINGS.*P_VALUE.*needs"):
        compare(RELABELLINGS=0, P_VALUE=str(tmp_path / "p.tif"))
    assert not (tmp_path / "p.tif").exists()


def test_bandwidth_and_cell_are_chosen_said_and_returned(compare):
    results, watcher = compare(BANDWIDTH=0, CELL_SIZE=0, BOUNDARY=None, RELABELLINGS=0)
    pooled = contrast.pool(*[(*own, None) for own in places()])
    assert results["BANDWIDTH_USED"] == pytest.approx(contrast.common_bandwidth(pooled))
    assert 0 < results["CELL_SIZE_USED"] <= results["BANDWIDTH_USED"] / 3
    said = " ".join(watcher.informed)
    assert "Bandwidth chosen" in said and "Cell size chosen" in said


def test_layers_in_different_and_geographic_crs_are_brought_together(compare, point_layer):
    from qgis.core import QgsCoordinateReferenceSystem, QgsProject
    from steadfield.plugin.reference_system import reproject

    (x, y), _ = places()
    degrees = reproject(
        np.column_stack([x, y]),
        QgsCoordinateReferenceSystem("EPSG:3035"),
        QgsCoordinateReferenceSystem("EPSG:4326"),
        QgsProject.instance().transformContext(),
    )
    results, watcher = compare(records=point_layer(*degrees.T, "EPSG:4326"))
    assert not QgsRasterLayer(results["RATIO"]).crs().isGeographic()
    assert any("Working CRS" in words for words in watcher.informed)
    expected, _ = compare()
    assert results["HIGHEST_RATIO"] == pytest.approx(expected["HIGHEST_RATIO"], rel=0.03)


def test_bad_weights_and_points_outside_are_counted(compare, point_layer):
    (x, y), _ = places()
    x, y = np.r_[x, EAST - 500], np.r_[y, NORTH]
    cases = [1] * 347 + [None, -1, -2, 1]
    layer = point_layer(x, y, cases=cases)
    empty = type(next(layer.getFeatures()).geometry())()
    layer.dataProvider().changeGeometryValues({1: empty, 2: empty})
    _, watcher = compare(records=layer, WEIGHT="cases")
    said = " ".join(watcher.warnings)
    assert "2 features without geometry" in said
    assert "1 features with a null weight" in said
    assert "2 features with a negative weight" in said
    assert "1 points outside the boundary" in said


def test_report_answers_in_a_sentence(compare, tmp_path):
    page = tmp_path / "ratio.html"
    compare(REPORT=str(page))
    words = page.read_text(encoding="utf-8")
    assert "1 area has clearly more records than expected" in words
    assert words.count("<img") == 2 and str(tmp_path) not in words
    assert "Seed used" in words and "Kelsall" in words


def test_what_cannot_be_compared_is_refused_in_words(compare, point_layer):
    with pytest.raises(QgsProcessingException, match=r"RECORDS.*no features"):
        compare(records=point_layer([], []))
    with pytest.raises(QgsProcessingException, match=r"BACKGROUND.*no features"):
        compare(background=point_layer([], []))
    far = point_layer([EAST + 90_000.0] * 3, [NORTH] * 3)
    with pytest.raises(QgsProcessingException, match=r"BOUNDARY.*no point of Background"):
        compare(background=far)
    with pytest.raises(QgsProcessingException, match=r"CELL_SIZE.*too coarse"):
        compare(CELL_SIZE=300)
    with pytest.raises(QgsProcessingException, match=r"LEVELS.*at least 99"):
        compare(LEVELS="1")


def test_one_record_is_compared(compare, point_layer):
    results, _ = compare(records=point_layer([EAST + 1000], [NORTH + 1000]))
    ratio, place_x, place_y = read(results["RATIO"], 2)
    peak = np.unravel_index(np.nanargmax(ratio), ratio.shape)
    assert np.hypot(place_x[peak] - EAST - 1000, place_y[peak] - NORTH - 1000) < 600
    assert results["P_RAISED"] > 0.05


@pytest.mark.parametrize("share", [0, 0.5])
def test_a_cancelled_run_writes_nothing(compare, tmp_path, share):
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        compare(cancel_at=share)
    assert not (tmp_path / "ratio.tif").exists()


def test_records_are_not_compared_with_themselves_but_with_their_weights(compare, point_layer):
    """The dialog offers the layer at hand for both."""
    draw = np.random.default_rng(7)
    layer = point_layer(*places()[1], falls=draw.poisson(0.3, 2500), residents=[3] * 2500)
    with pytest.raises(QgsProcessingException, match=r"BACKGROUND.*choose what the records come"):
        compare(records=layer, background=layer)
    results, _ = compare(
        records=layer, background=layer, WEIGHT="falls", BACKGROUND_WEIGHT="residents"
    )
    assert results["HIGHEST_RATIO"] > 1
