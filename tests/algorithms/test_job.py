"""The shared run of an algorithm, on a small algorithm made for the purpose."""

import os
from pathlib import Path

import numpy as np
import pytest
import shapely
from osgeo import gdal
from qgis.core import (
    NULL,
    QgsApplication,
    QgsProcessingException,
    QgsProcessingParameterFeatureSink,
    QgsProcessingProvider,
    QgsRasterLayer,
    QgsVectorLayer,
)
from steadfield.algorithms.base import SteadfieldAlgorithm
from steadfield.algorithms.numeric.grid import covering
from steadfield.plugin import outputs
from steadfield.plugin.looks import SEQUENCE, ramp, single, spread
from steadfield.plugin.outputs import Column
from steadfield.plugin.rasters import Band, read_raster
from steadfield.plugin.report import Report


class Counting(SteadfieldAlgorithm):
    ID = "counting"
    NAME = "Counting"
    GROUP = "records"
    QUESTION = "real"
    HELP = "Counts records in pixels."

    def define(self):
        self.add_points("RECORDS", "Records", "Points.")
        self.add_field("WEIGHT", "Weight", "RECORDS", "Weights.")
        self.add_boundary()
        self.add_length("CELL_SIZE", "Cell size", "Side of a pixel.", default=10.0)
        self.add_seed()
        self.add_working_crs()
        self.add_raster("COUNTS", "Counts")
        self.add(QgsProcessingParameterFeatureSink("PLACES", "Places", optional=True))
        self.add_report()
        self.add_numbers(TOTAL="Total")

    def work(self, job):
        records = job.records("RECORDS", "WEIGHT")
        job.boundary()
        for step in range(50):
            job.progress(step / 100)
        cell = job.length("CELL_SIZE")
        bounds = records.x.min(), records.y.min(), records.x.max(), records.y.max()
        grid = covering(bounds, cell, margin=cell)
        rows, columns, _ = grid.pixels(records.x, records.y)
        counts = np.full(grid.shape, np.nan)
        counts[rows, columns] = 1.0
        job.seed()
        look = ramp(1, spread(SEQUENCE, 0, 1), "records")
        job.write_raster("COUNTS", grid, [Band("records", counts, "records")], look)
        places = shapely.points(records.x, records.y)
        weights = Column("weight", "float", records.weight, "Weight (records)")
        job.write_layer("PLACES", [weights], places, "point", single("#2e7179"))
        report = Report("Counting", "How many?", f"There are {len(records)}.")
        report.plot("Plot", lambda figure: figure.add_subplot().plot([1, 2]), "A line.")
        job.write_report(report, ["Counted."], ["None."])
        job.give("TOTAL", float(records.weight.sum()))


class Probe(QgsProcessingProvider):
    def id(self):
        return "probe"

    def name(self):
        return "Probe"

    def loadAlgorithms(self):
        self.addAlgorithm(Counting())


@pytest.fixture(scope="module")
def probe(provider):
    registry = QgsApplication.processingRegistry()
    registry.addProvider(Probe())
    yield
    registry.removeProvider("probe")


@pytest.fixture
def count(probe, point_layer, watch, tmp_path):
    import processing

    def run(cancel_at=None, watcher=None, **parameters):
        watcher = watcher or watch(cancel_at)
        if cancel_at == 0:
            watcher.cancel()
        chosen = {
            "RECORDS": point_layer([5, 25, 45], [5, 5, 25], weight=[1.0, 2.0, -1.0]),
            "COUNTS": str(tmp_path / "counts.tif"),
            "PLACES": str(tmp_path / "places.gpkg"),
            "REPORT": str(tmp_path / "report.html"),
            **parameters,
        }
        chosen = {key: value for key, value in chosen.items() if value is not None}
        return processing.run("probe:counting", chosen, feedback=watcher), watcher

    return run


def test_what_a_dialog_leaves_empty_counts_as_left_out(count, tmp_path):
    # a dialog hands over a null of the host, where scripts name nothing or None
    empty = dict.fromkeys(("WEIGHT", "BOUNDARY", "WORKING_CRS", "SEED"), NULL)
    results, watcher = count(**empty, PLACES=None, REPORT=None)
    assert results["TOTAL"] == 3
    assert set(results) == {"COUNTS", "TOTAL", "SEED_USED"}
    assert {file.name for file in tmp_path.iterdir()} <= {
        "counts.tif", "counts.qml", "counts.tif.aux.xml",
    }  # fmt: skip
    assert watcher.warnings == []


def test_outputs_are_whole_and_open_styled(count, tmp_path):
    results, watcher = count(WEIGHT="weight", SEED=7)
    assert results["TOTAL"] == 3
    assert results["SEED_USED"] == 7
    assert any("1 features with a negative weight" in words for words in watcher.warnings)
    values, grid, unit = read_raster(results["COUNTS"])
    assert np.nansum(values) == 2
    assert (grid.cell, unit) == (10, "records")
    raster = QgsRasterLayer(results["COUNTS"], "counts")
    assert raster.renderer().type() == "singlebandpseudocolor"
    ramp_items = raster.renderer().shader().rasterShaderFunction().colorRampItemList()
    assert all("records" in item.label for item in ramp_items)
    vector = QgsVectorLayer(results["PLACES"], "places", "ogr")
    assert vector.attributeAlias(vector.fields().indexFromName("weight")) == "Weight (records)"
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "There are 2." in page and "data:image/png" in page and str(tmp_path) not in page
    endings = {"counts.tif", "counts.qml", "places.gpkg", "places.qml", "report.html"}
    assert {file.name for file in tmp_path.iterdir()} - endings <= {"counts.tif.aux.xml"}


@pytest.mark.parametrize("share", [0, 0.2])
def test_cancelling_leaves_nothing(count, tmp_path, share):
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        count(cancel_at=share)
    assert list(tmp_path.iterdir()) == []


def test_a_failure_takes_back_what_was_written(count, tmp_path):
    with pytest.raises(QgsProcessingException, match="REPORT"):
        count(REPORT=str(tmp_path / "no such folder" / "deeper" / "report.html"))
    assert not [file for file in tmp_path.iterdir() if file.is_file()]


def test_a_file_that_cannot_be_taken_back_is_named_and_the_failure_still_said(
    count, watch, tmp_path, monkeypatch
):
    remove = os.remove

    def held_open(path):
        if str(path).endswith("counts.tif"):
            raise PermissionError(13, "held open", path)
        remove(path)

    monkeypatch.setattr(os, "remove", held_open)
    watcher = watch()
    with pytest.raises(QgsProcessingException, match="REPORT"):
        count(watcher=watcher, REPORT=str(tmp_path / "no such folder" / "report.html"))
    assert any("counts.tif could not be removed" in words for words in watcher.warnings)


def test_an_earlier_result_survives_a_cancelled_run(count, tmp_path):
    count(REPORT=None)
    before = {file.name: file.read_bytes() for file in tmp_path.iterdir()}
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        count(cancel_at=0.2, REPORT=None)
    assert {file.name: file.read_bytes() for file in tmp_path.iterdir()} == before


@pytest.mark.parametrize("ending", ["gpkg", "geojson", "fgb", "csv", "shp"])
def test_a_layer_appears_only_when_it_is_whole(count, tmp_path, monkeypatch, ending):
    path = tmp_path / f"places.{ending}"
    seen = []
    fill = outputs.fill_sink

    def look_and_fill(*arguments):
        seen.append(path.exists())
        return fill(*arguments)

    monkeypatch.setattr(outputs, "fill_sink", look_and_fill)
    count(PLACES=str(path), REPORT=None)
    # the host writes a shapefile, which is several files, in its place
    assert seen == [ending == "shp"]
    layer = QgsVectorLayer(str(path), "places", "ogr")
    assert layer.featureCount() == 3
    if ending == "gpkg":
        assert layer.dataProvider().subLayers()[0].split("!!::!!")[1] == "places"


def test_an_earlier_layer_survives_a_run_that_fails_while_writing(count, tmp_path, monkeypatch):
    count(REPORT=None)
    before = (tmp_path / "places.gpkg").read_bytes()
    monkeypatch.setattr(outputs, "fill_sink", lambda *arguments: False)
    with pytest.raises(QgsProcessingException, match="PLACES"):
        count(REPORT=None)
    assert (tmp_path / "places.gpkg").read_bytes() == before
    assert not list(tmp_path.glob(".steadfield*"))


def test_a_geographic_layer_is_worked_on_in_metres(count, point_layer):
    layer = point_layer([8.0, 8.001, 8.002], [50.0, 50.0, 50.001], "EPSG:4326")
    results, watcher = count(RECORDS=layer)
    info = gdal.Info(results["COUNTS"], format="json")
    assert "Azimuthal" in info["coordinateSystem"]["wkt"]
    assert any("equal-area" in words for words in watcher.informed)


def test_an_empty_layer_is_refused_by_name(count, point_layer):
    with pytest.raises(QgsProcessingException, match=r"Records \(RECORDS\).*no features"):
        count(RECORDS=point_layer([], []))


def test_memory_outputs_are_loaded_styled(count):
    results, _ = count(PLACES="memory:")
    assert results["PLACES"].featureCount() == 3


@pytest.mark.parametrize("ending", ["gpkg", "csv"])
def test_a_style_file_is_not_shared_by_two_outputs_of_one_stem(count, tmp_path, ending):
    count(PLACES=str(tmp_path / f"counts.{ending}"))
    style = (tmp_path / "counts.qml").read_text(encoding="utf-8")
    assert "singlebandpseudocolor" in style


@pytest.mark.filterwarnings("error")
def test_a_processor_flag_of_the_geometry_library_puts_no_warning_into_the_log(count, monkeypatch):
    work = Counting.work

    def flagged(self, job):
        # raises the flag for certain, which the library does only now and then
        np.sqrt(np.array([-1.0]))
        work(self, job)

    monkeypatch.setattr(Counting, "work", flagged)
    count(REPORT=None)
