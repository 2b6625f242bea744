"""The record check through the host: seeded faults come out, clean practice data stay clean."""

from pathlib import Path

import numpy as np
import pytest
import shapely
from qgis.core import QgsFeature, QgsGeometry, QgsProcessingException, QgsVectorLayer
from steadfield.algorithms.numeric.practice import make_district


@pytest.fixture(scope="module")
def district():
    return make_district(4, 0.1)


@pytest.fixture
def falls(district, point_layer):
    """A layer of the practice falls, with faults given as changes to the columns."""

    def make(crs="EPSG:3035", changed=None, doubled=(), lost=()):
        x, y = district.falls.x.copy(), district.falls.y.copy()
        columns = {
            "fall": np.arange(len(x)).tolist(),
            "month": district.falls.month.tolist(),
            "calls": [1.0] * len(x),
        }
        if changed:
            changed(x, y, columns)
        rows = [*range(len(x)), *doubled]
        layer = point_layer(
            x[rows], y[rows], crs, **{name: [v[i] for i in rows] for name, v in columns.items()}
        )
        ids = [feature.id() for feature in layer.getFeatures()]
        layer.dataProvider().changeGeometryValues({ids[row]: QgsGeometry() for row in lost})
        return layer

    return make


@pytest.fixture
def check(run, tmp_path):
    def checker(layer, cancel_at=None, **parameters):
        outputs = {"FLAGGED": str(tmp_path / "out.gpkg"), "REPORT": str(tmp_path / "out.html")}
        return run("recordcheck", {"RECORDS": layer, **outputs, **parameters}, cancel_at)[0]

    return checker


def flagged(results, open_output):
    layer = open_output(results, "FLAGGED")
    return {feature["fall"]: feature["faults"] for feature in layer.getFeatures()}


def test_clean_practice_data_have_no_fault(check, falls, open_output, district, polygon_layer):
    results = check(
        falls(),
        WEIGHT="calls",
        GROUP="month",
        KEY="fall",
        BOUNDARY=polygon_layer([district.boundary]),
    )
    assert (results["FAULTS"], results["RECORDS_CONCERNED"]) == (0, 0)
    assert results["RECORDS_PLACED"] == results["RECORDS_READ"] == len(district.falls.x)
    assert open_output(results, "FLAGGED").featureCount() == 0
    assert "No fault was found." in Path(results["REPORT"]).read_text(encoding="utf-8")


def test_seeded_faults_of_every_kind_come_out(check, falls, open_output, district, polygon_layer):
    rounded = np.arange(100, 180)

    def spoil(x, y, columns):
        x[rounded] = np.round(x[rounded], -2)
        y[rounded] = np.round(y[rounded], -2)
        x[200:230], y[200:230] = x[200], y[200]
        x[5], y[5] = y[5], x[5]
        columns["calls"][7] = -1.0
        columns["calls"][8] = None
        columns["month"][9] = None

    results = check(
        falls(changed=spoil, doubled=[40, 41], lost=[20, 21]),
        WEIGHT="calls",
        GROUP="month",
        KEY="fall",
        BOUNDARY=polygon_layer([district.boundary]),
    )
    found = flagged(results, open_output)
    expected = {row: {"rounded"} for row in rounded}
    expected.update({row: {"stacked"} for row in range(200, 230)})
    expected.update({40: {"duplicate", "record number"}, 41: {"duplicate", "record number"}})
    expected.update({20: {"no geometry"}, 21: {"no geometry"}, 5: {"outside", "far away"}})
    expected.update({7: {"negative weight"}, 8: {"null weight"}, 9: {"null month"}})
    assert {row: set(words.split("; ")) for row, words in found.items()} == expected
    assert results["ROUNDED_TO"] == pytest.approx(100.0)
    assert results["FULLEST_SPOT"] == 30
    assert results["RECORDS_CONCERNED"] == len(expected)
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "rounded" in page and "By group" in page and "data:image/png" in page


def test_flagged_records_keep_fields_and_open_styled(check, falls, open_output):
    results = check(falls(lost=[3]))
    layer = open_output(results, "FLAGGED")
    names = [field.name() for field in layer.fields()]
    assert [name for name in names if name != "fid"] == [
        "fault",
        "faults",
        "on_spot",
        "fall",
        "month",
        "calls",
    ]
    assert layer.renderer().type() == "categorizedSymbol"
    feature = next(layer.getFeatures())
    assert (feature["fall"], feature["faults"]) == (3, "no geometry")
    assert feature.geometry().isEmpty()


def test_rounded_degrees_are_reported_in_metres(check, point_layer):
    rng = np.random.default_rng(2)
    places = np.round(rng.uniform((8.0, 54.0), (8.2, 54.1), size=(800, 2)), 3)
    results = check(point_layer(places[:, 0], places[:, 1], "EPSG:4326"))
    # A thousandth of a degree of latitude is about 111 m.
    assert results["ROUNDED_TO"] == pytest.approx(111.2, abs=0.5)
    assert "stored in degrees" in Path(results["REPORT"]).read_text(encoding="utf-8")


def test_a_crs_that_does_not_keep_areas_is_named_with_its_distortion(check, point_layer):
    rng = np.random.default_rng(2)
    places = rng.uniform((900_000, 7_000_000), (920_000, 7_020_000), size=(200, 2))
    results = check(point_layer(places[:, 0], places[:, 1], "EPSG:3857"))
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    # Web Mercator at 53 degrees north stretches areas by about 1 / cos^2(53 deg) = 2.76.
    assert "an area appears 2.7" in page
    assert results["FAULTS"] == 0


def test_features_of_several_points_count_each(check):
    layer = QgsVectorLayer("MultiPoint?crs=EPSG:3035", "several", "memory")
    feature = QgsFeature()
    feature.setGeometry(
        QgsGeometry.fromWkt("MultiPoint ((3840000 3560000), (3840100 3560000), (3840000 3560100))")
    )
    layer.dataProvider().addFeatures([feature])
    assert check(layer)["RECORDS_READ"] == 3


def test_one_record_is_checked(check, point_layer):
    results = check(point_layer([3_840_000.5], [3_560_000.25], a=[1]))
    assert (results["RECORDS_READ"], results["FAULTS"]) == (1, 0)


def test_an_empty_layer_and_one_without_any_place_are_refused(check, point_layer, falls, district):
    with pytest.raises(QgsProcessingException, match=r"RECORDS.*no features"):
        check(point_layer([], [], a=[]))
    with pytest.raises(QgsProcessingException, match=r"RECORDS.*no record has a usable place"):
        check(falls(lost=range(len(district.falls.x))))


@pytest.mark.parametrize("share", [0, 0.4])
def test_cancelling_leaves_nothing(check, falls, tmp_path, share):
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        check(falls(), cancel_at=share)
    assert list(tmp_path.iterdir()) == []


def test_the_page_names_no_folder(check, falls, save_layer, tmp_path):
    page = Path(check(save_layer(falls()))["REPORT"]).read_text(encoding="utf-8")
    assert str(tmp_path) not in page and "not for release" in page


def test_middle_points_of_units_are_recognised(check, district, point_layer):
    middle = shapely.centroid(district.units.polygons[district.fall_unit])
    results = check(point_layer(shapely.get_x(middle), shapely.get_y(middle)))
    assert results["FAULTS"] >= 1
    assert "middle points of areas" in Path(results["REPORT"]).read_text(encoding="utf-8")


def test_the_row_numbers_of_a_file_can_be_the_key_and_are_not_handed_on(
    check, falls, save_layer, open_output
):
    def mark(x, y, columns):
        columns["fault"] = columns["fall"]
        columns["Fault_stored"] = columns["month"]

    lost = falls(changed=mark, lost=[3])
    results = check(save_layer(lost), KEY="fid")
    layer = open_output(results, "FLAGGED")
    feature = next(layer.getFeatures())
    assert (feature["fault"], feature["fault_stored_stored"]) == ("empty geometry", 3)
    assert results["RECORDS_CONCERNED"] == layer.featureCount() == 1
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "Every record has a number of its own." in page
