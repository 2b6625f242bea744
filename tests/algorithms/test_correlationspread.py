import numpy as np
import pytest
import shapely
from qgis.core import QgsProcessingException

SIDE = 10


@pytest.fixture
def given(polygon_layer):
    """Parameters of a run over a board with two related rates."""

    def make(parameters=None, **columns):
        generator = np.random.default_rng(3)
        left, bottom = 4_300_000.0, 3_200_000.0
        polygons = [
            shapely.box(left + c, bottom + r, left + c + 400, bottom + r + 400)
            for r in range(0, 400 * SIDE, 400)
            for c in range(0, 400 * SIDE, 400)
        ]
        units = SIDE * SIDE
        totals = generator.integers(200, 500, (2, units))
        y, x = np.divmod(np.arange(units), SIDE)
        common = 0.1 + 0.05 * np.sin(x / 3) * np.cos(y / 3)
        standard = {
            "falls": generator.binomial(totals[0], common),
            "older": totals[0],
            "damp": generator.binomial(totals[1], common + 0.1),
            "homes": totals[1],
        }
        layer = polygon_layer(polygons, **{**standard, **columns})
        return {
            "UNITS": layer,
            "X_COUNT": "damp",
            "X_TOTAL": "homes",
            "Y_COUNT": "falls",
            "Y_TOTAL": "older",
            "ZONE_COUNTS": "10, 30",
            "REPLICATES": 200,
            "SEED": 4,
            "TABLE": "memory:",
            **(parameters or {}),
        }

    return make


def columns_of(layer):
    names = layer.fields().names()
    features = list(layer.getFeatures())
    return {name: [feature[name] for feature in features] for name in names}


def rates(parameters):
    values = columns_of(parameters["UNITS"])
    x = np.array(values["damp"]) / np.array(values["homes"])
    return x, np.array(values["falls"]) / np.array(values["older"]), np.array(values["older"])


def test_base_unit_values_are_those_of_numpy(run, given, open_output):
    parameters = given()
    results, watcher = run("correlationspread", parameters)
    table = columns_of(open_output(results, "TABLE"))
    x, y, weight = rates(parameters)
    expected = {
        "r": np.corrcoef(x, y)[0, 1],
        "slope": np.polyfit(x, y, 1)[0],
        "weighted_slope": np.polyfit(x, y, 1, w=np.sqrt(weight))[0],
    }
    base = dict(zip(table["measure"], table["base_units"]))
    for name, value in expected.items():
        assert base[name] == pytest.approx(value)
    assert results["R_UNITS"] == pytest.approx(expected["r"])
    assert watcher.warnings == []


def test_r_spreads_over_zonings_and_rises_with_fewer_zones(run, given, open_output):
    results, _ = run("correlationspread", given())
    table = columns_of(open_output(results, "TABLE"))
    rows = [dict(zip(table, row)) for row in zip(*table.values())]
    r = {row["zone_count"]: row for row in rows if row["measure"] == "r"}
    for row in r.values():
        assert -1 <= row["lowest"] <= row["q05"] <= row["q50"] <= row["q95"] <= row["highest"] <= 1
    # neighbours are alike here, so r rises as units are merged (Gehlke & Biehl 1934)
    assert results["R_UNITS"] < r[30]["q50"] < r[10]["q50"]
    assert results["R_LOW"] <= results["R_MEDIAN"] <= results["R_HIGH"]
    assert {row["measure"] for row in rows} == {"r", "slope", "weighted_r", "weighted_slope"}


@pytest.mark.parametrize("builder", [0, 1, 2])
def test_the_same_seed_gives_the_same_table(run, given, open_output, builder):
    parameters = given({"BUILDER": builder, "REPLICATES": 20, "BALANCE_TOLERANCE": 0.5})
    first, second = (
        columns_of(open_output(run("correlationspread", parameters)[0], "TABLE")) for _ in range(2)
    )
    assert first == second


def test_the_report_answers_and_names_its_sources(run, given, tmp_path):
    page = tmp_path / "page.html"
    run("correlationspread", given({"REPORT": str(page)}))
    text = page.read_text(encoding="utf-8")
    for words in ("r is between", "Gehlke", "Robinson 1950", "Openshaw", "per 1000 of y for 1"):
        assert words in text, words
    assert text.count("data:image/png;base64") == 3
    assert str(tmp_path) not in text


def test_without_totals_rates_are_per_square_kilometre(run, given, open_output):
    parameters = given({"X_TOTAL": None, "Y_TOTAL": None})
    results, _ = run("correlationspread", parameters)
    table = columns_of(open_output(results, "TABLE"))
    values = columns_of(parameters["UNITS"])
    expected = np.polyfit(np.array(values["damp"]) / 0.16, np.array(values["falls"]) / 0.16, 1)[0]
    base = dict(zip(table["measure"], table["base_units"]))
    assert base["slope"] == pytest.approx(expected, rel=1e-5)
    assert "per km²" in table["unit"][table["measure"].index("slope")]


@pytest.mark.parametrize(
    ("parameters", "columns", "words"),
    [
        ({"ZONE_COUNTS": "2"}, {}, "needs 3 zones"),
        ({"ZONE_COUNTS": "101"}, {}, "101 zones cannot be made"),
        ({}, {"homes": [0] * 100}, "X_TOTAL: it is 0"),
        ({}, {"falls": [5] * 100, "older": [50] * 100}, "Y_COUNT: its rate is the same"),
        ({"REPLICATES": 5_000_000, "ZONE_COUNTS": "4,5,6,7,8,9,10,11,12,13,14,15,16,17,18"},
         {}, "choose"),
    ],
)  # fmt: skip
def test_what_cannot_be_done_is_refused_in_words(run, given, parameters, columns, words):
    made = given(parameters, **columns)
    with pytest.raises(QgsProcessingException, match=words):
        run("correlationspread", made)


def test_nulls_are_counted(run, given):
    falls = [None] + [7] * 50 + [3] * 49
    _, watcher = run("correlationspread", given(falls=falls))
    assert any("1 units have no number" in words for words in watcher.warnings)


def test_a_cancelled_run_leaves_nothing(run, given, tmp_path):
    parameters = given({"TABLE": str(tmp_path / "t.gpkg"), "REPORT": str(tmp_path / "p.html")})
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        run("correlationspread", {**parameters, "REPLICATES": 50_000}, cancel_at=0.2)
    assert list(tmp_path.iterdir()) == []
