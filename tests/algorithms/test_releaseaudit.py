"""Audits of published layers, through the host: what is found, said and refused."""

import numpy as np
import pytest
import shapely
from qgis.core import QgsProcessingContext, QgsProcessingException, QgsProject

SIDE = 1000
ORIGIN = 4_000_000, 3_000_000


def columns(*edges):
    """Zones side by side, edges in kilometres."""
    x, y = ORIGIN
    return [shapely.box(x + a * SIDE, y, x + b * SIDE, y + SIDE) for a, b in zip(edges, edges[1:])]


@pytest.fixture
def cells(polygon_layer):
    layer = polygon_layer(columns(*range(9)), count=[20] * 8, cell=[f"c{n}" for n in range(1, 9)])
    layer.setName("Hexagons")
    return layer


@pytest.fixture
def wards(polygon_layer):
    layer = polygon_layer(columns(0, 2.3, 8), count=[43, 117], name=["A7", "B1"])
    layer.setName("Wards")
    return layer


@pytest.fixture
def audit(run):
    def runner(layers, **more):
        given = {"RELEASES": layers, "LEAST_COUNT": 10, "RISKS": "TEMPORARY_OUTPUT", **more}
        return run("releaseaudit", given)

    return runner


def test_a_cell_cut_by_a_ward_is_found_with_its_derivation(audit, cells, wards, open_output):
    results, _ = audit([cells, wards])
    assert (results["CLEAN"], results["DISCLOSED_REGIONS"], results["WORST_COUNT"]) == (0, 1, 3)
    risk = next(open_output(results, "RISKS").getFeatures())
    assert risk["derivation"] == "Wards A7 minus Hexagons c1 and c2 leaves 3"
    assert (risk["kind"], risk["lower"], risk["upper"]) == ("exact", 3, 3)
    assert risk["area_km2"] == pytest.approx(0.3, rel=1e-4)
    assert risk.geometry().boundingBox().xMinimum() == pytest.approx(ORIGIN[0] + 2000, abs=0.1)


def test_one_layer_of_large_counts_is_clean_and_gives_an_empty_layer(audit, cells, open_output):
    results, _ = audit([cells])
    assert (results["CLEAN"], results["DISCLOSED_REGIONS"], results["WORST_COUNT"]) == (1, 0, 0)
    assert open_output(results, "RISKS").featureCount() == 0


def test_a_total_uncovers_a_withheld_cell(audit, polygon_layer):
    layer = polygon_layer(columns(0, 1, 2, 3), count=[20, None, 30])
    assert audit([layer])[0]["CLEAN"] == 1
    results, _ = audit([layer], TOTALS="54")
    assert (results["CLEAN"], results["WORST_COUNT"]) == (0, 4)


def test_kinds_of_counts_change_what_is_known(audit, polygon_layer, wards):
    rounded = polygon_layer(columns(*range(9)), count=[20] * 8)
    assert audit([rounded, wards], KINDS="rounded 5; exact")[0]["CLEAN"] == 1
    assert audit([rounded, wards], KINDS="exact; exact")[0]["CLEAN"] == 0
    fine = polygon_layer(columns(*range(3)), count=[4, 40])
    assert audit([fine], KINDS="nearest 2")[0]["CLEAN"] == 0
    small = polygon_layer(columns(*range(4)), count=[None, 0, 40])
    assert audit([small], KINDS="exact, withheld below 10")[0]["CLEAN"] == 1
    told = audit([small], KINDS="exact, withheld below 10", TOTALS="44")[0]
    assert (told["CLEAN"], told["WORST_COUNT"]) == (0, 4)


def test_releases_over_time_are_subtracted(audit, polygon_layer):
    spring = polygon_layer(columns(0, 1, 2), count=[20, 30])
    autumn = polygon_layer(columns(0, 1, 2), count=[23, 60])
    results, _ = audit([spring, autumn], RELEASE_ORDER="1; 2", NAMES="Spring; Autumn")
    assert (results["DISCLOSED_REGIONS"], results["WORST_COUNT"]) == (1, 3)
    same = audit([spring, autumn])[0]
    assert same["CONTRADICTIONS"] > 0 and same["CLEAN"] == 0


def test_layers_in_another_crs_meet_on_the_same_ground(audit, cells, polygon_layer, wards):
    import processing
    from qgis.core import QgsCoordinateReferenceSystem

    moved = processing.run(
        "native:reprojectlayer",
        {
            "INPUT": wards,
            "TARGET_CRS": QgsCoordinateReferenceSystem("EPSG:4326"),
            "OUTPUT": "TEMPORARY_OUTPUT",
        },
    )["OUTPUT"]
    results, _ = audit([cells, moved])
    assert (results["DISCLOSED_REGIONS"], results["WORST_COUNT"]) == (1, 3)
    first_geographic, _ = audit([moved, cells])
    assert (first_geographic["DISCLOSED_REGIONS"], first_geographic["WORST_COUNT"]) == (1, 3)


def test_dirty_borders_within_the_tolerance_are_no_ground_of_their_own(audit, cells, polygon_layer):
    shaken = polygon_layer(columns(0, 2.0004, 8), count=[40, 120])
    results, _ = audit([cells, shaken])
    assert results["CLEAN"] == 1
    strict, _ = audit([cells, shaken], TOLERANCE=0.01)
    assert (strict["CLEAN"], strict["EMPTY_REGIONS"]) == (1, 1)


def test_records_confirm_the_risk(audit, cells, wards, point_layer, open_output):
    generator = np.random.default_rng(5)
    x = np.concatenate(
        [
            *(n + generator.uniform(0.01, 0.99, 20) for n in (0, 1, 3, 4, 5, 6, 7)),
            generator.uniform(2.01, 2.29, 3),
            generator.uniform(2.31, 2.99, 17),
        ]
    )
    points = point_layer(ORIGIN[0] + x * SIDE, np.full(len(x), ORIGIN[1] + 500.0))
    results, _ = audit([cells, wards], RECORDS=points)
    risk = next(open_output(results, "RISKS").getFeatures())
    assert risk["true_count"] == 3 and results["CONTRADICTIONS"] == 0


def test_a_model_can_be_made_to_halt(audit, cells, wards, tmp_path):
    target = tmp_path / "risks.gpkg"
    with pytest.raises(QgsProcessingException, match="Wards A7 minus Hexagons c1 and c2 leaves 3"):
        audit([cells, wards], STOP=True, RISKS=str(target))
    assert not target.exists()
    assert audit([cells], STOP=True)[0]["CLEAN"] == 1


def test_the_report_is_complete_and_names_no_place_on_the_machine(audit, cells, wards, tmp_path):
    page = tmp_path / "audit.html"
    audit([cells, wards], REPORT=str(page))
    text = page.read_text(encoding="utf-8")
    for words in (
        "Not clean: 1 region with fewer than 10 records",
        "Wards A7 minus Hexagons c1 and c2 leaves 3",
        "Costemalle 2019",
        "The least count belongs to the data&#x27;s owner and to law",
        "confidential",
        "data:image/png",
    ):
        assert words in text
    assert str(tmp_path) not in text


def test_a_withheld_release_is_clean_and_one_with_a_lower_least_count_is_not(
    run, audit, point_layer, tmp_path
):
    """Hexagons of this plugin, their grand total, and one official zone around everything."""
    generator = np.random.default_rng(11)
    x, y = generator.normal(0, 700, (2, 900))
    points = point_layer(ORIGIN[0] + x, ORIGIN[1] + y)
    for least_count, clean in ((10, 1), (2, 0)):
        target = str(tmp_path / f"release_{least_count}.gpkg")
        run(
            "safehexagons",
            {"RECORDS": points, "HEXAGON_SIZE": 400, "LEAST_COUNT": least_count, "METHOD": 0,
             "SEED": 1, "RELEASE": target},
        )  # fmt: skip
        results, _ = audit([target], COUNT_FIELDS="count", TOTALS="900", RECORDS=points)
        assert results["CLEAN"] == clean and results["CONTRADICTIONS"] == 0


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ({"COUNT_FIELDS": "number; count"}, "Hexagons has no field number; its fields are"),
        ({"COUNT_FIELDS": "count"}, "one entry for each of the 2 layers"),
        ({"KINDS": "about 5"}, "“about 5” for Hexagons is not understood"),
        ({"KINDS": "rounded 3"}, "hold 20, which is no multiple of 3"),
        ({"TOTALS": "many;"}, "a number is wanted; found “many”"),
        ({"RELEASE_ORDER": "first;second"}, "whole numbers are wanted; found “first”"),
        ({"LABEL_FIELDS": "title;name"}, "Hexagons has no field title"),
        ({"NAMES": "one"}, "a name for each of the 2 layers"),
    ],
)
def test_settings_that_cannot_be_followed_are_named(audit, cells, wards, more, words):
    with pytest.raises(QgsProcessingException, match=words):
        audit([cells, wards], **more)


def test_counts_in_text_are_read_and_words_are_not_taken_for_withheld(audit, polygon_layer, wards):
    cells = polygon_layer(columns(*range(9)), count=["20"] * 8)
    assert audit([cells, wards], COUNT_FIELDS="count;count")[0]["WORST_COUNT"] == 3
    for words in ("1,250", "<5"):
        layer = polygon_layer(columns(0, 1, 2), count=["20", words])
        with pytest.raises(QgsProcessingException, match=f"holds “{words}”"):
            audit([layer], COUNT_FIELDS="count")
    withheld = polygon_layer(columns(0, 1, 2), count=["20", None])
    assert audit([withheld], COUNT_FIELDS="count", TOTALS="24")[0]["WORST_COUNT"] == 4


def test_a_total_that_counts_zones_without_ground_is_refused(audit, polygon_layer):
    # 20, a withheld 4 and 30 without ground add up to 54: over what is left it would be 34
    layer = polygon_layer([*columns(0, 1, 2), shapely.Polygon()], count=[20, None, 30])
    with pytest.raises(QgsProcessingException, match="zones without usable ground"):
        audit([layer], TOTALS="54")
    assert audit([layer])[0]["CLEAN"] == 1


def test_layers_that_cannot_be_audited_are_named(audit, polygon_layer, cells):
    empty = polygon_layer([], count=[])
    empty.setName("Nothing")
    with pytest.raises(QgsProcessingException, match="Nothing has no usable polygon"):
        audit([cells, empty], COUNT_FIELDS="count;count")
    two = polygon_layer(columns(0, 1), old=[20], new=[30])
    two.setName("Two")
    with pytest.raises(QgsProcessingException, match="which field of Two holds the counts"):
        audit([two])
    split = polygon_layer(columns(0, 1), count=[20.5])
    with pytest.raises(QgsProcessingException, match=r"whole numbers; found 20\.5"):
        audit([split])
    negative = polygon_layer(columns(0, 1), count=[-4])
    with pytest.raises(QgsProcessingException, match="0 or more; found -4"):
        audit([negative])
    null = polygon_layer([*columns(0, 1), shapely.Polygon()], count=[20, 30])
    results, watcher = audit([null])
    assert results["CLEAN"] == 1
    assert any("1 zones without geometry" in words for words in watcher.warnings)


def test_cancelling_leaves_nothing_behind(run, cells, wards, tmp_path):
    target = tmp_path / "risks.gpkg"
    with pytest.raises(QgsProcessingException):
        run("releaseaudit", {"RELEASES": [cells, wards], "RISKS": str(target)}, cancel_at=0.2)
    assert not target.exists()


def test_a_layer_that_cannot_be_read_is_refused_and_never_left_out(
    provider, cells, watch, tmp_path
):
    """As in a step of a model, where the host does not check the values before it runs."""
    algorithm = provider.algorithm("releaseaudit").create()
    context = QgsProcessingContext()
    context.setProject(QgsProject.instance())
    watcher = watch()
    gone = str(tmp_path / "gone.gpkg")
    given = {"RELEASES": [cells, gone], "LEAST_COUNT": 10, "RISKS": "TEMPORARY_OUTPUT"}
    _, well = algorithm.run(given, context, watcher)
    assert not well
    assert any("1 of the 2 layers cannot be read" in words for words in watcher.errors)


def test_a_geographic_working_crs_is_refused_by_the_name_of_its_parameter(audit, cells):
    with pytest.raises(QgsProcessingException, match=r"WORKING_CRS\): A working CRS must be"):
        audit([cells], WORKING_CRS="EPSG:4326")
