"""The practice district through the host."""

import sqlite3

import numpy as np
import pytest
from osgeo import ogr
from qgis.core import QgsProcessingException, QgsVectorLayer
from steadfield.algorithms.numeric.practice import make_district

TENTH = 2
LAYERS = {
    "district",
    "land_cover",
    "streets",
    "base_units",
    "care_wards",
    "true_risk_areas",
    "residents",
    "resting_places",
    "unlit_paths",
    "icy_paths",
    "falls",
}


@pytest.fixture(scope="module")
def made(provider, tmp_path_factory):
    import processing

    folder = tmp_path_factory.mktemp("practice")
    return processing.run(
        "steadfield:practicedistrict", {"SEED": 3, "SIZE": TENTH, "FOLDER": str(folder / "new")}
    )


@pytest.fixture(scope="module")
def district():
    return make_district(3, 0.1)


def layer_of(made, name):
    return QgsVectorLayer(f"{made['PACKAGE']}|layername={name}", name, "ogr")


def column(made, layer, name):
    opened = layer_of(made, layer)
    return np.array([feature[name] for feature in opened.getFeatures()])


def test_one_geopackage_holds_every_layer_in_an_equal_area_crs(made):
    dataset = ogr.Open(made["PACKAGE"])
    found = {dataset.GetLayer(index).GetName() for index in range(dataset.GetLayerCount())}
    assert found - {"layer_styles"} == LAYERS
    for name in LAYERS:
        layer = layer_of(made, name)
        assert layer.isValid() and layer.featureCount() > 0
        assert layer.crs().authid() == "EPSG:3035"


def test_the_file_carries_the_generated_data(made, district):
    assert layer_of(made, "falls").featureCount() == len(district.falls.x) == made["FALLS"]
    assert made["RESIDENTS"] == len(district.residents.x)
    assert made["UNITS"] == len(district.units.polygons) == 90
    assert np.array_equal(column(made, "falls", "household"), district.falls.household)
    assert np.array_equal(column(made, "base_units", "residents"), district.units.residents)
    assert column(made, "base_units", "true_rate") == pytest.approx(
        1000 * district.units.true_risk, rel=1e-12
    )
    falls = layer_of(made, "falls")
    places = [feature.geometry().asPoint() for feature in falls.getFeatures()]
    assert np.array_equal([place.x() for place in places], district.falls.x)
    assert np.array_equal([place.y() for place in places], district.falls.y)


def test_base_units_in_the_file_still_tile_the_district(made, district):
    layer = layer_of(made, "base_units")
    units = [feature.geometry() for feature in layer.getFeatures()]
    assert sum(unit.area() for unit in units) == pytest.approx(district.boundary.area, rel=1e-12)
    assert all(unit.isGeosValid() for unit in units)


def test_layers_open_styled_with_units_in_their_aliases(made):
    for name in LAYERS:
        layer = layer_of(made, name)
        fields = layer.fields()
        aliases = {field.name(): field.alias() for field in fields if field.name() != "fid"}
        assert all(aliases.values()), name
    units = layer_of(made, "base_units")
    assert units.renderer().type() == "graduatedSymbol"
    assert units.attributeAlias(units.fields().indexFromName("rate")) == (
        "Falls per 1000 residents and year"
    )
    wards = layer_of(made, "care_wards")
    assert wards.labelsEnabled()
    streets = layer_of(made, "streets")
    kinds = {category.value() for category in streets.renderer().categories()}
    assert kinds == set(column(made, "streets", "kind"))


def test_nothing_in_the_file_names_a_path(made, tmp_path_factory):
    with sqlite3.connect(made["PACKAGE"]) as package:
        dump = "\n".join(line for line in package.iterdump() if "layer_styles" in line)
    assert "styleQML" in dump
    assert str(tmp_path_factory.getbasetemp()) not in dump


def test_an_older_package_is_replaced_with_steady_progress_and_nothing_else_is_left(run, tmp_path):
    first, watcher = run("practicedistrict", {"SEED": 1, "SIZE": TENTH, "FOLDER": str(tmp_path)})
    second, _ = run("practicedistrict", {"SEED": 2, "SIZE": TENTH, "FOLDER": str(tmp_path)})
    assert first["PACKAGE"] == second["PACKAGE"]
    assert layer_of(second, "falls").featureCount() == second["FALLS"] != first["FALLS"]
    assert [file.name for file in tmp_path.iterdir()] == ["ostermoor.gpkg"]
    assert np.all(np.diff(watcher.shares) >= 0) and len(watcher.shares) > 10


@pytest.mark.parametrize("share", [0, 0.3, 0.7])
def test_cancelling_leaves_no_file(run, tmp_path, share):
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        run(
            "practicedistrict",
            {"SEED": 1, "SIZE": TENTH, "FOLDER": str(tmp_path)},
            cancel_at=share,
        )
    assert list(tmp_path.iterdir()) == []
