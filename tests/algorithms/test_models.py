"""The ready models through the host, and runs over several layers."""

import sys
from pathlib import Path

import numpy as np
import pytest
from osgeo import gdal
from qgis.core import (
    QgsApplication,
    QgsProcessingContext,
    QgsProcessingException,
    QgsProcessingModelAlgorithm,
    QgsVectorLayer,
)

ROOT = Path(__file__).resolve().parent.parent.parent
MODELS = {path.stem: path for path in sorted((ROOT / "plugin" / "models").glob("*.model3"))}
TENTH = 2
LEAST_COUNT = 10
OFFICIAL = "release_hexagons:Released hexagons"


@pytest.fixture(scope="session")
def table(provider, tmp_path_factory):
    """Address of a table of the practice district at a tenth of its size, by name."""
    import processing

    folder = tmp_path_factory.mktemp("district")
    made = processing.run(
        "steadfield:practicedistrict",
        {"SEED": 3, "SIZE": TENTH, "FOLDER": str(folder), "OPEN": False},
    )
    return lambda name: f"{made['PACKAGE']}|layername={name}"


@pytest.fixture
def chain(run):
    """Run a model, its outputs temporary unless told; returns results, steps and feedback."""

    def runner(model, parameters, without=()):
        destinations = find(model).destinationParameterDefinitions()
        wanted = {
            one.name(): "TEMPORARY_OUTPUT" for one in destinations if one.name() not in without
        }
        results, watcher = run(model, {**wanted, **parameters})
        return results, results["CHILD_RESULTS"], watcher

    return runner


def find(name):
    return QgsApplication.processingRegistry().algorithmById(f"steadfield:{name}")


def reports(model):
    """Reports of a model that may be left out, to save time."""
    optional = [
        one.name()
        for one in find(model).destinationParameterDefinitions()
        if one.flags() & one.Flag.FlagOptional
    ]
    assert all("Report" in name for name in optional)
    return optional


def column(layer, name):
    layer = QgsVectorLayer(layer, "read", "ogr") if isinstance(layer, str) else layer
    assert layer.isValid()
    return [feature[name] for feature in layer.getFeatures()]


def pixels(path):
    raster = gdal.Open(path)
    band = raster.GetRasterBand(1)
    values = band.ReadAsArray().astype(float)
    return np.where(values == band.GetNoDataValue(), np.nan, values)


@pytest.fixture
def plans():
    folder = str(ROOT / "tools")
    sys.path.insert(0, folder)
    try:
        import model_plans

        yield model_plans.PLANS
    finally:
        sys.path.remove(folder)


def content(path):
    """What a model file says, but for the outputs of the model, which follow from its steps.

    Later host versions name the outputs of the models that they make in another way.
    """
    model = QgsProcessingModelAlgorithm()
    assert model.fromFile(str(path))
    found = model.toVariant()
    found.pop("internal_version", None)
    found["parameterDefinitions"] = {
        name: found["parameterDefinitions"][name] for name in found["parameters"]
    }
    return found


def test_every_file_is_what_the_plans_give(plans, provider, tmp_path):
    assert set(MODELS) == set(plans)
    for name, plan in plans.items():
        planned = tmp_path / f"{name}.model3"
        assert plan().toFile(str(planned))
        found, wanted = content(MODELS[name]), content(planned)
        assert set(found) == set(wanted) >= {"children", "parameters", "help", "model_name"}
        for part, value in wanted.items():
            assert found[part] == value, f"{name}, {part}: run tools/make_models.py"


@pytest.mark.parametrize("name", MODELS)
def test_a_model_is_offered_under_its_file_name_and_passes_the_designers_own_check(name, provider):
    model = find(name)
    assert model.group() == "Ready models"
    assert model.canExecute()[0]
    assert model.validate() == (True, [])
    drawn = model.icon().pixmap(16, 16).toImage()
    assert any(drawn.pixelColor(x, y).alpha() for x in range(16) for y in range(16))
    copy = model.create()
    assert copy.id() == model.id() == f"steadfield:{name}"
    assert copy.displayName() != copy.name()
    assert len(copy.outputDefinitions()) == len(model.outputDefinitions()) >= 4
    text = model.shortHelpString()
    for definition in model.parameterDefinitions():
        assert definition.description() in text
        assert model.helpContent()[definition.name()] in text


def test_models_are_there_after_the_provider_is_loaded_anew(provider):
    provider.refreshAlgorithms()
    names = {one.name() for one in provider.algorithms()}
    assert set(MODELS) <= names


def test_the_surface_is_made_with_the_advised_bandwidth(chain, table):
    results, steps, _ = chain(
        "advisedsurface",
        {"RECORDS": table("falls"), "BOUNDARY": table("district"), "SHARES": "50, 90"},
        without=reports("advisedsurface"),
    )
    assert steps["advice"]["ADVISED"] > 0
    assert steps["surface"]["BANDWIDTH_USED"] == steps["advice"]["ADVISED"]
    assert set(column(results["outlines:Outlines"], "share")) == {50, 90}
    # half of the density must lie inside: counted on the raster that the model hands out
    density = pixels(results["surface:Density"])
    first = next(
        feature for feature in results["outlines:Outlines"].getFeatures() if feature["share"] == 50
    )
    inside = density >= first["least"]
    assert np.nansum(density[inside]) / np.nansum(density) == pytest.approx(
        first["share_held"] / 100, abs=1e-6
    )


def test_places_that_hold_are_all_units_with_a_verdict_and_open_as_such(chain, table, tmp_path):
    kept = str(tmp_path / "hold.gpkg")
    results, _, _ = chain(
        "placesthathold",
        {
            "UNITS": table("base_units"),
            "COUNT": "falls",
            "TOTAL": "residents",
            "LABEL": "unit",
            "THRESHOLD": 50.0,
            "REPLICATES": 60,
            "SEED": 1,
            "hold:Places that hold": kept,
        },
        without=reports("placesthathold"),
    )
    units = results["variance:Units with variance"]
    verdicts = dict(zip(column(units, "unit"), column(units, "verdict")))
    expected = {unit: verdict for unit, verdict in verdicts.items() if verdict != 0}
    assert 0 < len(expected) < len(verdicts)
    assert dict(zip(column(kept, "unit"), column(kept, "verdict"))) == expected
    styled = QgsVectorLayer(kept, "kept", "ogr")
    assert styled.renderer().type() == "categorizedSymbol"
    assert {int(one.value()) for one in styled.renderer().categories()} == {1, 0, -1}


@pytest.fixture(scope="session")
def half_years(table):
    """Base units with the falls of either half of the year."""
    import processing

    units = table("base_units")
    for name, months in (("spring", "month <= 6"), ("autumn", "month > 6")):
        falls = processing.run(
            "native:extractbyexpression",
            {"INPUT": table("falls"), "EXPRESSION": months, "OUTPUT": "memory:"},
        )["OUTPUT"]
        units = processing.run(
            "native:countpointsinpolygon",
            {"POLYGONS": units, "POINTS": falls, "FIELD": name, "OUTPUT": "memory:"},
        )["OUTPUT"]
    return units


def test_two_periods_are_judged_under_the_same_zonings_as_each_alone(chain, run, half_years):
    shared = {
        "UNITS": half_years, "LABEL": "unit", "THRESHOLD": 12.0, "REPLICATES": 40,
        "ZONE_COUNTS": "8, 15",
    }  # fmt: skip
    results, steps, _ = chain(
        "placesthatholdtwice",
        {
            **shared,
            "COUNT_FIRST": "spring",
            "TOTAL_FIRST": "residents",
            "COUNT_SECOND": "autumn",
            "TOTAL_SECOND": "residents",
        },
        without=reports("placesthatholdtwice"),
    )
    used = steps["first"]["SEED_USED"]
    assert steps["second"]["SEED_USED"] == used
    alone = {}
    for count in ("spring", "autumn"):
        outputs = {"UNITS_OUT": "memory:", "TABLE": "memory:", "REPORT": None}
        found, _ = run(
            "unitvariance",
            {**shared, **outputs, "COUNT": count, "TOTAL": "residents", "SEED": used},
        )
        alone[count] = dict(
            zip(column(found["UNITS_OUT"], "unit"), column(found["UNITS_OUT"], "verdict"))
        )
    both = results["second:Units with both verdicts"]
    names = column(both, "unit")
    assert dict(zip(names, column(both, "verdict_first"))) == alone["spring"]
    assert dict(zip(names, column(both, "verdict"))) == alone["autumn"]
    expected = {unit for unit in names if alone["spring"][unit] == alone["autumn"][unit] != 0}
    assert 0 < len(expected) < len(names)
    assert set(column(results["hold:Places that hold in both"], "unit")) == expected


def layers_of(table):
    return {f"LAYER_{key}": table(name) for key, name in zip("ABC", POINTS)}


POINTS = ("falls", "unlit_paths", "icy_paths")


def test_three_layers_become_surfaces_picture_and_zones_under_their_own_names(chain, table):
    results, steps, _ = chain(
        "threelayerstogether",
        {**layers_of(table), "BOUNDARY": table("district"), "BANDWIDTH": 150.0, "SEED": 1},
        without=reports("threelayerstogether"),
    )
    for key, words in zip("abc", ("first", "second", "third")):
        assert steps[f"surface_{key}"]["BANDWIDTH_USED"] == 150
        assert np.nanmax(pixels(results[f"surface_{key}:Density, {words} layer"])) > 0
    legend = Path(results["blend:Legend"]).read_text(encoding="utf-8")
    assert all(f">{name}<" in legend for name in POINTS)
    assert gdal.Open(results["blend:Picture"]).RasterCount == 4
    zones = results["zones:Zones of agreement"]
    assert zones.featureCount() == steps["zones"]["ZONE_COUNT"] > 0
    # a zone is where two cores or more meet, each the densest half of its own surface
    for zone in zones.getFeatures():
        middle, _ = zone.geometry().poleOfInaccessibility(5.0)
        point = middle.asPoint()
        meeting = [in_core(steps[f"surface_{key}"]["DENSITY"], point) for key in "abc"]
        assert sum(meeting) >= 2


def in_core(path, point):
    """Whether a point lies on the densest ground that holds half of a density."""
    density = np.nan_to_num(pixels(path))
    falling = np.sort(density, axis=None)[::-1]
    least = falling[np.searchsorted(np.cumsum(falling), 0.5 * falling.sum())]
    left, width, _, top, _, height = gdal.Open(path).GetGeoTransform()
    row, col = int((point.y() - top) / height), int((point.x() - left) / width)
    return density[row, col] >= least


def release_inputs(table, official, **more):
    return {
        "RECORDS": table("falls"),
        "CONTRIBUTOR": "household",
        "BOUNDARY": table("district"),
        "OFFICIAL": official,
        "OFFICIAL_COUNT": "falls",
        "LEAST_COUNT": LEAST_COUNT,
        "HEXAGON_SIZE": 1500.0,
        **more,
    }


def targets(folder):
    return {
        OFFICIAL: str(folder / "hexagons.gpkg"),
        "release_surface:Released surface": str(folder / "surface.tif"),
    }


def test_what_the_audit_passes_is_released_and_opens_styled(chain, table, tmp_path):
    import processing

    falls = len(column(table("falls"), "fall"))
    whole = processing.run(
        "native:fieldcalculator",
        {
            "INPUT": table("district"), "FIELD_NAME": "falls", "FIELD_TYPE": 1,
            "FORMULA": str(falls), "OUTPUT": "memory:",
        },
    )["OUTPUT"]  # fmt: skip
    paths = targets(tmp_path)
    _, steps, watcher = chain(
        "cleanrelease", release_inputs(table, whole, **paths), without=reports("cleanrelease")
    )
    assert steps["audit"]["CLEAN"] == 1
    assert "refuse" not in steps and not watcher.errors
    counts = [count for count in column(paths[OFFICIAL], "count") if isinstance(count, int)]
    assert 0 < sum(counts) <= falls
    assert min(counts) >= LEAST_COUNT
    layer = QgsVectorLayer(paths[OFFICIAL], "released", "ogr")
    assert layer.renderer().type() == "graduatedSymbol"
    surface = paths["release_surface:Released surface"]
    released, made = pixels(surface), pixels(steps["surface"]["DENSITY"])
    assert np.array_equal(released, made, equal_nan=True)
    assert Path(surface).with_suffix(".qml").exists()
    # the host notes statistics of what it opened beside it, here of released values only
    written = {path.name for path in tmp_path.iterdir()} - {"surface.tif.aux.xml"}
    assert written == {"hexagons.gpkg", "hexagons.qml", "surface.tif", "surface.qml"}


def test_nothing_is_released_when_the_audit_is_not_clean(chain, table, tmp_path):
    wards = column(table("care_wards"), "falls")
    # a published ward below the least count gives itself away, whatever the hexagons are
    assert any(0 < falls < LEAST_COUNT for falls in wards)
    paths = targets(tmp_path)
    earlier = Path(paths["release_surface:Released surface"])
    earlier.write_bytes(b"of an earlier run")
    results, steps, watcher = chain(
        "cleanrelease",
        release_inputs(table, table("care_wards"), **paths),
        without=reports("cleanrelease"),
    )
    assert steps["audit"]["CLEAN"] == 0
    assert results["audit:Risks (confidential)"].featureCount() > 0
    assert "release_hexagons" not in steps and "release_surface" not in steps
    assert not set(paths) & set(results)
    assert [path.name for path in tmp_path.iterdir()] == ["surface.tif"]
    assert earlier.read_bytes() == b"of an earlier run"
    assert any("Nothing was released" in words for words in watcher.errors + watcher.warnings)


def test_an_unattended_run_stops_with_an_error_when_asked_to(chain, table, tmp_path):
    wards = release_inputs(table, table("care_wards"), STOP=True, **targets(tmp_path))
    with pytest.raises(QgsProcessingException):
        chain("cleanrelease", wards, without=reports("cleanrelease"))
    assert list(tmp_path.iterdir()) == []


def test_layers_for_release_leave_the_model_through_the_gate_only(provider):
    steps = find("cleanrelease").childAlgorithms()
    for name, output in (("hexagons", "RELEASE"), ("surface", "DENSITY")):
        handed_out = {one.childOutputName() for one in steps[name].modelOutputs().values()}
        assert output not in handed_out
    for name in ("release_hexagons", "release_surface"):
        before = steps[name].dependencies()
        assert [(one.childId, one.conditionalBranch) for one in before] == [("gate", "clean")]
    waited_for = {one.childId for one in steps["gate"].dependencies()}
    assert waited_for == {"audit", "surface"}


FACTORS = (1, 2, 3)


@pytest.fixture(scope="session")
def folder_of_layers(provider, tmp_path_factory):
    """One pattern of points at three sizes, each layer in a file of its own."""
    import processing

    folder = tmp_path_factory.mktemp("a folder of layers")
    draw = np.random.default_rng(11)
    places = np.concatenate([draw.normal(0, 300, (80, 2)), draw.normal(1500, 500, (70, 2))])
    for factor in FACTORS:
        layer = QgsVectorLayer("Point?crs=EPSG:3035", "records", "memory")
        made = folder / f"records {factor}.csv"
        rows = [f"{4e6 + factor * x!r},{3e6 + factor * y!r}" for x, y in places.tolist()]
        made.write_text("\n".join(["x,y", *rows]), encoding="utf-8")
        source = f"{made.as_uri()}?delimiter=,&xField=x&yField=y&crs=EPSG:3035"
        layer = QgsVectorLayer(source, "records", "delimitedtext")
        assert layer.featureCount() == len(places)
        target = {"INPUT": layer, "OUTPUT": str(made.with_suffix(".gpkg"))}
        processing.run("native:savefeatures", target)
        del layer
    return folder


def batch(name, rows):
    """Run one algorithm row by row as the batch dialog of the host does; returns the results."""
    from processing.gui.AlgorithmExecutor import execute

    algorithm = find(name).create()
    results = []
    for row in rows:
        context = QgsProcessingContext()
        assert algorithm.checkParameterValues(row, context) == (True, "")
        done, found = execute(algorithm, row, context)
        assert done
        results.append(found)
    return results


def rows_of(folder, key, **outputs):
    """Parameters for each layer of a folder, the outputs named after the layer."""
    return [
        {key: str(path), **{k: str(folder / f"{path.stem} {v}") for k, v in outputs.items()}}
        for path in sorted(folder.glob("*.gpkg"))
        if path.stem.startswith("records") and path.stem[-1].isdigit()
    ]


def test_density_tools_run_in_batch_with_outputs_of_each_layer(folder_of_layers):
    import processing

    folder = folder_of_layers
    # lengths of a pattern grow with its coordinates, areas with their square
    factors = np.array(FACTORS, float)

    advice = batch("bandwidthadvice", rows_of(folder, "RECORDS", REPORT="advice.html"))
    widths = np.array([found["NORMAL_SCALE"] for found in advice])
    assert widths == pytest.approx(widths[0] * factors, rel=1e-9)

    rows = rows_of(folder, "RECORDS", DENSITY="density.tif")
    for row, width in zip(rows, widths):
        row.update(BANDWIDTH=float(width), CELL_SIZE=float(width) / 4, EDGE=1)
    batch("adaptivedensity", rows)
    for row in rows:
        cell = row["CELL_SIZE"] / 1000
        assert np.nansum(pixels(row["DENSITY"])) * cell**2 == pytest.approx(150, rel=0.01)

    outlined = rows_of(folder, "DENSITY", OUTLINES="outlines.gpkg")
    for row, made in zip(outlined, rows):
        row.update(DENSITY=made["DENSITY"], SHARES="50")
    batch("densityoutlines", outlined)
    areas = [sum(column(row["OUTLINES"], "area_km2")) for row in outlined]
    assert areas == pytest.approx(areas[0] * factors**2, rel=0.05)

    ratios = rows_of(folder, "RECORDS", RATIO="ratio.tif")
    for row, width in zip(ratios, widths):
        row.update(BANDWIDTH=float(width), RELABELLINGS=0)
        # the same points a millionth of a metre aside, as the layer itself would be refused
        row["BACKGROUND"] = row["RATIO"].replace("ratio.tif", "background.gpkg")
        asked = {"INPUT": row["RECORDS"], "DELTA_X": 1e-6, "OUTPUT": row["BACKGROUND"]}
        processing.run("native:translategeometry", asked)
    batch("densityratio", ratios)
    for row in ratios:
        # records over points on the same places: the logarithm of the ratio is 0 everywhere
        assert np.nanmax(np.abs(pixels(row["RATIO"]))) < 1e-6


def test_a_model_runs_in_batch_with_outputs_of_each_layer(folder_of_layers):
    rows = rows_of(
        folder_of_layers,
        "RECORDS",
        **{
            "advice:Report on the bandwidth": "model advice.html",
            "surface:Density": "model density.tif",
            "outlines:Outlines": "model outlines.gpkg",
        },
    )[:2]
    for row in rows:
        row["SHARES"] = "50"
    found = batch("advisedsurface", rows)
    used = [one["CHILD_RESULTS"]["surface"]["BANDWIDTH_USED"] for one in found]
    assert used == [one["CHILD_RESULTS"]["advice"]["ADVISED"] for one in found]
    for row in rows:
        assert set(column(row["outlines:Outlines"], "share")) == {50}
        assert Path(row["surface:Density"]).is_file()
        assert Path(row["advice:Report on the bandwidth"]).is_file()
