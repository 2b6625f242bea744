"""Zones where layers agree, through the host."""

import sys
from pathlib import Path

import numpy as np
import pytest
import shapely
from osgeo import gdal, ogr
from qgis.core import QgsProcessingException, QgsRasterLayer, QgsRenderContext, QgsVectorLayer

sys.path.insert(0, str(Path(__file__).parent))
from raster_layers import read_bands, save_raster

LEFT, TOP, CELL = 4_000_000.0, 3_000_000.0, 100.0
SHAPE = (40, 50)


def hills(*places):
    """Sum of smooth hills, each (row, column, width, height) in pixels."""
    rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]]
    return sum(
        height * np.exp(-((rows - row) ** 2 + (columns - column) ** 2) / (2 * width**2))
        for row, column, width, height in places
    )


VALUES = {
    # off the middles of pixels, so that no two values are equal
    "falls": hills((10.31, 12.17, 4, 9), (28.23, 36.41, 5, 6)),
    "lamps": hills((12.12, 14.37, 4, 3), (28.44, 10.29, 4, 3)),
    "ice": hills((27.27, 34.14, 4, 5), (10.19, 14.43, 3, 2)),
}


@pytest.fixture
def layers(tmp_path):
    return [
        save_raster(tmp_path / f"{name}.tif", values, LEFT, TOP, CELL, unit="per km²")
        for name, values in VALUES.items()
    ]


@pytest.fixture
def agree(run, tmp_path):
    """Run the search for zones into files of this test."""

    def runner(layers, cancel_at=None, **parameters):
        parameters = {
            "LAYERS": layers,
            "AGREEMENT": str(tmp_path / "agreement.tif"),
            "ZONES": str(tmp_path / "zones.gpkg"),
            "SEED": 4,
            **parameters,
        }
        return run("agreement", parameters, cancel_at)

    return runner


def read_zones(path):
    """Rows of the layer as dictionaries, with the geometry."""
    source = ogr.Open(path)
    return [
        {**feature.items(), "geometry": shapely.from_wkb(bytes(feature.geometry().ExportToWkb()))}
        for feature in source.GetLayer(0)
    ]


def brute_core(values, share):
    """The densest pixels until the share is reached, one at a time."""
    values = np.nan_to_num(values.astype(np.float32).astype(float))
    order = np.argsort(-values, axis=None)
    cumulated = np.cumsum(values.ravel()[order])
    core = np.zeros(values.size, bool)
    core[order[: np.searchsorted(cumulated, share * cumulated[-1]) + 1]] = True
    return core.reshape(values.shape)


def test_agreement_counts_the_cores_found_by_brute_force(agree, layers):
    results, _ = agree(layers)
    counted = sum(brute_core(values, 0.5).astype(int) for values in VALUES.values())
    np.testing.assert_array_equal(read_bands(results["AGREEMENT"])[0], counted)


def test_weights_scale_the_count(agree, layers):
    results, _ = agree(layers, WEIGHTS="1, 1, 4", SHARE=30)
    cores = [brute_core(values, 0.3) for values in VALUES.values()]
    expected = 0.5 * cores[0] + 0.5 * cores[1] + 2.0 * cores[2]
    np.testing.assert_allclose(read_bands(results["AGREEMENT"])[0], expected, atol=1e-6)


def test_held_meets_the_analytic_share_of_weightings_for_two_layers(agree, layers):
    results, _ = agree(layers[:2], DRAWS=4000)
    held = read_bands(results["AGREEMENT"])[1]
    ranks = []
    for values in list(VALUES.values())[:2]:
        flat = values.astype(np.float32).astype(float).ravel()
        order = np.argsort(flat)
        rank = np.empty(flat.size)
        rank[order] = np.cumsum(flat[order]) / flat.sum()
        ranks.append(rank.reshape(SHAPE))
    logs = np.log(ranks)
    high, low = logs.max(axis=0), logs.min(axis=0)
    expected = np.clip((high - np.log(0.5)) / (high - low), 0, 1)
    assert np.abs(held - expected).max() < 4.5 * 0.5 / np.sqrt(4000)
    assert ((expected > 0.1) & (expected < 0.9)).sum() > 20


def test_zones_are_the_places_where_two_cores_meet(agree, layers):
    results, _ = agree(layers)
    zones = read_zones(results["ZONES"])
    counted = sum(brute_core(values, 0.5).astype(int) for values in VALUES.values())
    area = sum(zone["geometry"].area for zone in zones)
    assert area == pytest.approx((counted >= 2).sum() * CELL**2)
    assert [zone["rank"] for zone in zones] == list(range(1, len(zones) + 1))
    rows, columns = np.nonzero(counted >= 2)
    centres = shapely.points(LEFT + (columns + 0.5) * CELL, TOP - (rows + 0.5) * CELL)
    union = shapely.union_all([zone["geometry"] for zone in zones])
    assert shapely.contains(union, centres).all()
    for zone in zones:
        assert zone["area_km2"] == pytest.approx(zone["geometry"].area / 1e6)
    assert results["ZONE_COUNT"] == len(zones)
    assert results["ZONE_AREA"] == pytest.approx(area / 1e6)


def test_zone_figures_are_those_of_its_pixels(agree, layers):
    results, _ = agree(layers)
    rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]]
    centres = shapely.points(LEFT + (columns + 0.5) * CELL, TOP - (rows + 0.5) * CELL)
    bands = read_bands(results["AGREEMENT"])
    for zone in read_zones(results["ZONES"]):
        shapely.prepare(zone["geometry"])
        inside = shapely.contains(zone["geometry"], centres)
        assert zone["held"] == pytest.approx(bands[1][inside].mean(), abs=1e-6)
        assert zone["cores"] == bands[0][inside].max()
        for position, (name, values) in enumerate(VALUES.items(), start=1):
            assert zone[f"mean_{position}"] == pytest.approx(values[inside].mean(), rel=1e-5)
            share = values[inside].sum() / values.sum()
            assert zone[f"share_{position}"] == pytest.approx(share, rel=1e-5)
            takes_half = brute_core(values, 0.5)[inside].mean() >= 0.5
            assert (name in zone["layers"]) == takes_half


def test_small_zones_are_dropped_and_three_cores_can_be_asked_for(agree, layers):
    everything = read_zones(agree(layers)[0]["ZONES"])
    areas = sorted(zone["area_km2"] for zone in everything)
    fewer = read_zones(agree(layers, LEAST_AREA=areas[-1])[0]["ZONES"])
    assert len(everything) > 1 and len(fewer) == 1
    # the three hills lie apart, so that no place is in three cores of a tenth
    results, watcher = agree(layers, LEAST_LAYERS=3, SHARE=10)
    assert results["ZONE_COUNT"] == 0 and read_zones(results["ZONES"]) == []
    assert any("No zone was found" in words for words in watcher.warnings)


def test_same_seed_gives_the_same_bits_and_a_drawn_one_is_returned(agree, layers):
    first = read_bands(agree(layers)[0]["AGREEMENT"])
    np.testing.assert_array_equal(read_bands(agree(layers)[0]["AGREEMENT"]), first)
    results, watcher = agree(layers, SEED=None)
    assert any(str(results["SEED_USED"]) in words for words in watcher.informed)


def test_report_tests_pairs_and_names_no_path(agree, layers, tmp_path):
    results, _ = agree(layers, REPORT=str(tmp_path / "report.html"))
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    for words in ("falls – lamps", "falls – ice", "lamps – ice", "Lotwick", "Seed used"):
        assert words in page
    assert str(tmp_path) not in page


def test_no_data_in_every_layer_stays_no_data(agree, tmp_path):
    holed = []
    for name, values in VALUES.items():
        cut = values.copy()
        cut[:, :5] = np.nan
        cut[:2] = np.nan if name != "ice" else cut[:2]
        holed.append(save_raster(tmp_path / f"{name}.tif", cut, LEFT, TOP, CELL, no_data=-9999))
    results, _ = agree(holed)
    values = gdal.Open(results["AGREEMENT"]).ReadAsArray()
    assert (values[:, :, :5] == -9999).all() and (values[:, :2, 5:] >= 0).all()


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"WEIGHTS": "1, 2"}, "One weight for each of the 3 layers"),
        ({"WEIGHTS": "0, 0, 0"}, "not all 0"),
        ({"LEAST_LAYERS": 4}, "1 to 3"),
        ({"CELL_SIZE": 0.4}, "GB of memory; choose"),
    ],
)
def test_settings_that_cannot_work_are_refused_in_words(agree, layers, parameters, words, tmp_path):
    with pytest.raises(QgsProcessingException, match=words):
        agree(layers, **parameters)
    assert not (tmp_path / "agreement.tif").exists() and not (tmp_path / "zones.gpkg").exists()


def test_single_layer_is_refused(agree, layers):
    with pytest.raises(QgsProcessingException):
        agree(layers[:1])


@pytest.mark.parametrize("share", [0, 0.5])
def test_cancelled_run_leaves_no_file(agree, layers, tmp_path, share):
    before = sorted(tmp_path.iterdir())
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        agree(layers, cancel_at=share)
    assert sorted(tmp_path.iterdir()) == before


def test_legends_count_whole_cores_and_percent_of_weightings(agree, layers):
    results, _ = agree(layers)
    raster = QgsRasterLayer(results["AGREEMENT"], "agreement")
    raster.loadDefaultStyle()
    items = raster.renderer().shader().rasterShaderFunction().colorRampItemList()
    assert [item.label for item in items] == [f"{met} of 3 cores" for met in range(4)]
    assert [item.color.alpha() for item in items] == [0, 255, 255, 255]
    zones = QgsVectorLayer(results["ZONES"], "zones", "ogr")
    words = [one.label() for one in zones.renderer().legendSymbolItems()]
    assert words[-1] == "95 – 100 % of weightings"
    zone = next(zones.getFeatures())
    context = QgsRenderContext()
    context.expressionContext().setFeature(zone)
    zones.renderer().startRender(context, zones.fields())
    assert zones.renderer().symbolForFeature(zone, context) is not None
    zones.renderer().stopRender(context)
