"""How results open in a project: styled, named, and in an order that hides none of them."""

import numpy as np
import pytest
from qgis.core import (
    QgsLayerTreeModel,
    QgsProcessingException,
    QgsProcessingOutputLayerDefinition,
    QgsProject,
    QgsVectorLayer,
)
from qgis.gui import QgsLayerTreeView
from qgis.PyQt.QtCore import QModelIndex

TENTH = 2
FROM_ABOVE = [
    "Falls",
    "Reports of icy paths",
    "Reports of unlit paths",
    "Resting places",
    "Residents aged 65 and over",
    "Where the risk is truly raised",
    "Care wards",
    "Base units",
    "Streets",
    "Land cover",
    "District",
]


@pytest.fixture
def project(provider):
    """The project that results are loaded into, empty before and after."""
    opened = QgsProject.instance()
    opened.clear()
    yield opened
    opened.clear()


@pytest.fixture
def load(project, monkeypatch):
    """Run an algorithm and load its results as its dialog does; returns them from above."""
    import processing
    from processing.gui import Postprocessing

    # newer hosts take nothing but a real view of the layers
    view = QgsLayerTreeView()
    view.setModel(QgsLayerTreeModel(project.layerTreeRoot(), view))
    iface = getattr(Postprocessing, "iface", None)
    if iface is not None:
        monkeypatch.setattr(iface, "layerTreeView", lambda: view, raising=False)

    def runner(algorithm, **parameters):
        # newer hosts put results above the layer that is chosen
        view.setCurrentIndex(QModelIndex())
        processing.runAndLoadResults(f"steadfield:{algorithm}", parameters)
        return [node.layer() for node in project.layerTreeRoot().findLayers()]

    return runner


@pytest.fixture
def records(point_layer):
    draw = np.random.default_rng(5)
    x, y = 4_321_000 + 400 * draw.normal(size=(2, 120)) * [[1], [0.5]]
    return point_layer(x, y - 1_111_000, shift=["day", "night"] * 60)


def test_the_practice_district_opens_as_it_is_to_be_drawn(load, tmp_path):
    layers = load("practicedistrict", SIZE=TENTH, FOLDER=str(tmp_path))
    assert [layer.name() for layer in layers] == FROM_ABOVE
    looks = {layer.name(): layer.renderer().type() for layer in layers}
    assert looks["Base units"] == "graduatedSymbol"
    assert looks["Streets"] == looks["Land cover"] == "categorizedSymbol"


def test_points_lie_over_lines_and_lines_over_polygons_wherever_they_are_written(
    load, records, tmp_path
):
    # the host takes results by the alphabet of their paths
    asked = {name: str(tmp_path / f"{first}.gpkg") for name, first in
             [("CENTRES", "a"), ("PATH", "b"), ("ELLIPSES", "c")]}  # fmt: skip
    layers = load("centrespread", RECORDS=records, GROUP="shift", **asked)
    assert [layer.name() for layer in layers] == ["Centres", "Path", "Ellipses"]


def test_the_first_result_lies_over_others_of_its_kind_and_a_table_below(
    load, records, tmp_path, project
):
    asked = {name: str(tmp_path / f"{first}.tif") for name, first in
             [("DENSITY", "a"), ("ERROR", "b"), ("SUPPORT", "c")]}  # fmt: skip
    layers = load("adaptivedensity", RECORDS=records, **asked)
    names = [layer.name() for layer in layers]
    assert names == ["Density", "Relative standard error", "Effective records"]
    # a later run lies above and stirs nothing of the earlier
    layers = load("gridvariance", RECORDS=records, REPLICATES=5, VARIANCE=str(tmp_path / "v.tif"),
                  TABLE="TEMPORARY_OUTPUT")  # fmt: skip
    later = ["Zoning variance", "Table of statistics"]
    assert [layer.name() for layer in layers] == later + names
    nodes = project.layerTreeRoot().findLayers()
    assert all(node.isExpanded() for node in nodes)
    assert len(project.mapLayers()) == len(nodes)


def test_several_results_go_into_one_geopackage(load, records, tmp_path):
    path = tmp_path / "all.gpkg"
    asked = {name: f"ogr:dbname='{path}' table=\"{name.lower()}\" (geom)"
             for name in ("CENTRES", "ELLIPSES", "PATH")}  # fmt: skip
    layers = load("centrespread", RECORDS=records, GROUP="shift", **asked)
    assert [layer.featureCount() for layer in layers] == [4, 1, 4]
    assert [len(list(layer.getFeatures())) for layer in layers] == [4, 1, 4]
    assert layers[0].renderer().type() == "categorizedSymbol"
    assert "Standard distance (m)" in [field.alias() for field in layers[0].fields()]


def test_fields_of_a_shapefile_stay_apart_and_keep_their_aliases(load, records, tmp_path):
    layers = load(
        "centrespread", RECORDS=records, GROUP="shift", CENTRES=str(tmp_path / "centres.shp"),
        ELLIPSES="TEMPORARY_OUTPUT",
    )  # fmt: skip
    fields = layers[0].fields()
    # ten characters are all that the format holds
    assert len(set(fields.names())) == len(fields) == 7
    aliases = {field.name(): field.alias() for field in fields}
    assert aliases["standard_d"] == "Standard distance (m)"
    again = QgsVectorLayer(str(tmp_path / "centres.shp"), "again", "ogr")
    assert again.attributeAlias(again.fields().indexFromName("standard_d")).endswith("(m)")


@pytest.mark.parametrize("wrap", [str, QgsProcessingOutputLayerDefinition])
def test_a_table_as_a_shapefile_is_refused_before_the_work(run, records, tmp_path, wrap):
    asked = {"RECORDS": records, "REPORT": "TEMPORARY_OUTPUT"}
    asked["TABLE"] = wrap(str(tmp_path / "sizes.SHP"))
    with pytest.raises(QgsProcessingException, match=r"\(TABLE\).*\.csv, \.xlsx.*found sizes\.SHP"):
        run("cellsize", asked)
    assert not list(tmp_path.iterdir())


def test_a_table_can_be_a_spreadsheet(load, records, tmp_path, provider):
    table = provider.algorithm("cellsize").parameterDefinition("TABLE")
    assert ".xlsx" in table.createFileFilter()
    path = str(tmp_path / "sizes.xlsx")
    (layer,) = load("cellsize", RECORDS=records, TABLE=path, REPORT="TEMPORARY_OUTPUT")
    assert layer.featureCount() > 3
