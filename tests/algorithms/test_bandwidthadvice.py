"""Bandwidth advice through the host."""

import numpy as np
import pytest
import shapely
from qgis.core import QgsProcessingException
from steadfield.algorithms.numeric import advice, bandwidth

NAMES = ("NORMAL_SCALE", "OVERSMOOTHED", "LEAST_SQUARES_CV", "LIKELIHOOD_CV", "ADVISED")


@pytest.fixture
def advise(run, tmp_path):
    """Run the algorithm into a report of this test."""

    def runner(layer, cancel_at=None, **parameters):
        parameters.setdefault("REPORT", str(tmp_path / "advice.html"))
        return run("bandwidthadvice", {"RECORDS": layer, **parameters}, cancel_at)

    return runner


def cloud(count=400, seed=1):
    x, y = np.random.default_rng(seed).normal(0, 900, (2, count))
    return 4_300_000 + x, 3_200_000 + y


def test_numbers_are_those_of_the_core_and_the_report_says_them(advise, point_layer, tmp_path):
    x, y = cloud()
    results, _ = advise(point_layer(x, y))
    expected = advice.advise(x, y)
    assert results["NORMAL_SCALE"] == pytest.approx(bandwidth.normal_scale(x, y))
    assert results["ADVISED"] == pytest.approx(expected.advised)
    assert results["LEAST_SQUARES_CV"] == pytest.approx(expected.least_squares)
    assert set(NAMES) <= set(results)
    page = (tmp_path / "advice.html").read_text(encoding="utf-8")
    assert expected.reason in page and page.count("<img") == 2
    assert str(tmp_path) not in page


def test_the_advice_chains_into_a_surface(advise, run, point_layer, tmp_path):
    layer = point_layer(*cloud())
    advised = advise(layer)[0]["ADVISED"]
    results, _ = run(
        "adaptivedensity",
        {"RECORDS": layer, "BANDWIDTH": advised, "DENSITY": str(tmp_path / "density.tif")},
    )
    assert results["BANDWIDTH_USED"] == pytest.approx(advised)


def test_bandwidths_are_metres_whatever_the_unit_of_the_crs(advise, point_layer):
    # EPSG 2263 and 32118 share their projection, in US survey feet and in metres
    x, y = np.random.default_rng(2).normal(0, 900, (2, 200))
    x, y = x + 300_000, y + 60_000
    feet = 3937 / 1200
    metres = advise(point_layer(x, y, "EPSG:32118"))[0]
    results = advise(point_layer(x * feet, y * feet, "EPSG:2263"))[0]
    for name in NAMES:
        assert results[name] == pytest.approx(metres[name], rel=1e-3), name


def test_geographic_records_get_a_bandwidth_in_metres(advise, point_layer):
    generator = np.random.default_rng(3)
    y = 52 + generator.normal(0, 0.01, 300)
    x = 10 + generator.normal(0, 0.01, 300) / np.cos(np.radians(52))
    results, watcher = advise(point_layer(x, y, "EPSG:4326"))
    # a hundredth of a degree of latitude is 1112.7 m at 52 degrees (WGS 84)
    expected = bandwidth.normal_scale(
        111_270 * (x - 10) * np.cos(np.radians(52)), 111_270 * (y - 52)
    )
    assert results["NORMAL_SCALE"] == pytest.approx(expected, rel=0.01)
    assert any("Working CRS" in words for words in watcher.informed)


def test_stacked_and_rounded_records_are_named_in_log_and_report(advise, point_layer, tmp_path):
    x, y = cloud(600)
    layer = point_layer(np.round(x / 300) * 300, np.round(y / 300) * 300)
    results, watcher = advise(layer)
    said = " ".join(watcher.warnings)
    assert "share their coordinates" in said and "rounded to a lattice of about 300 m" in said
    assert "lattice of about 300 m" in (tmp_path / "advice.html").read_text(encoding="utf-8")
    assert results["ADVISED"] >= 299


def test_a_curve_without_best_value_gives_no_number(advise, point_layer):
    x, y = cloud(120)
    x, y = np.repeat(x, 4), np.repeat(y, 4)
    results, watcher = advise(point_layer(x, y))
    assert results["LEAST_SQUARES_CV"] is None
    assert results["ADVISED"] == results["NORMAL_SCALE"]
    assert any("no best value" in words for words in watcher.warnings)


def test_records_outside_the_boundary_are_left_out(advise, point_layer, polygon_layer):
    x, y = cloud(500)
    box = shapely.box(4_298_000, 3_199_000, 4_302_000, 3_203_000)
    inside = shapely.contains_xy(box, x, y)
    results, watcher = advise(point_layer(x, y), BOUNDARY=polygon_layer([box]))
    assert results["NORMAL_SCALE"] == pytest.approx(bandwidth.normal_scale(x[inside], y[inside]))
    assert any(f"{(~inside).sum()} records lie outside" in words for words in watcher.warnings)


def test_bad_weights_and_null_geometry_are_counted(advise, point_layer):
    x, y = cloud(200)
    cases = [2.0] * 195 + [None, None, -1.0, 3.0, 0.0]
    layer = point_layer(x, y, cases=cases)
    layer.dataProvider().changeGeometryValues({5: type(next(layer.getFeatures()).geometry())()})
    results, watcher = advise(layer, WEIGHT="cases")
    said = " ".join(watcher.warnings)
    assert "2 features with a null weight" in said
    assert "1 features with a negative weight" in said
    assert "1 features without geometry" in said
    kept = np.r_[np.arange(4), np.arange(5, 195), 198]
    weights = np.r_[np.full(194, 2.0), 3.0]
    expected = bandwidth.normal_scale(x[kept], y[kept], weights)
    assert results["NORMAL_SCALE"] == pytest.approx(expected)


def test_one_record_and_no_record_are_refused_in_words(advise, point_layer):
    with pytest.raises(QgsProcessingException, match=r"RECORDS.*one place"):
        advise(point_layer([4_300_000.0], [3_200_000.0]))
    with pytest.raises(QgsProcessingException, match="no features"):
        advise(point_layer([], []))


@pytest.mark.parametrize("share", [0, 0.3])
def test_a_cancelled_run_writes_nothing(advise, point_layer, tmp_path, share):
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        advise(point_layer(*cloud()), cancel_at=share)
    assert not (tmp_path / "advice.html").exists()
