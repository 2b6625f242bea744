"""Zoning variance from base units, through the host."""

import re

import numpy as np
import pytest
import shapely
from qgis.core import QgsProcessingException, QgsVectorLayer


def board(rows=8, columns=8, side=500.0, origin=(4_300_000.0, 3_200_000.0)):
    left, bottom = origin
    return [
        shapely.box(
            left + c * side, bottom + r * side, left + (c + 1) * side, bottom + (r + 1) * side
        )
        for r in range(rows)
        for c in range(columns)
    ]


def counts_of(units, seed=1, risk=0.05, hot=()):
    generator = np.random.default_rng(seed)
    totals = generator.integers(150, 400, units)
    risks = np.full(units, risk)
    risks[list(hot)] = 6 * risk
    return generator.binomial(totals, risks), totals


@pytest.fixture
def given(polygon_layer):
    """Parameters of a run over a board with a hot corner; columns may be replaced."""

    def make(polygons=None, parameters=None, **columns):
        polygons = board() if polygons is None else polygons
        units = len(polygons)
        counts, totals = counts_of(units, hot=[u for u in (0, 1, 8, 9) if u < units])
        standard = {
            "code": [f"U{u:02d}" for u in range(units)],
            "events": counts,
            "people": totals,
            "ward": [f"W{u // 16}" for u in range(units)],
        }
        layer = polygon_layer(polygons, **{**standard, **columns})
        return {
            "UNITS": layer,
            "COUNT": "events",
            "TOTAL": "people",
            "LABEL": "code",
            "ZONE_COUNTS": "6, 16",
            "REPLICATES": 60,
            "SEED": 5,
            "UNITS_OUT": "memory:",
            "TABLE": "memory:",
            **(parameters or {}),
        }

    return make


def rows_of(layer):
    names = layer.fields().names()
    return [dict(zip(names, feature.attributes())) for feature in layer.getFeatures()]


def number_or_nan(value):
    return np.nan if value is None or str(value) == "NULL" else float(value)


def test_units_come_out_with_their_fields_and_the_law_of_total_variance(run, given, open_output):
    results, watcher = run("unitvariance", given())
    rows = rows_of(open_output(results, "UNITS_OUT"))
    assert len(rows) == 64
    assert rows[3]["code"] == "U03"
    for row in rows:
        assert row["value"] == pytest.approx(1000 * row["events"] / row["people"])
        assert row["sd_total"] ** 2 == pytest.approx(row["sd_scale"] ** 2 + row["sd_zoning"] ** 2)
        assert row["q05"] <= row["q50"] <= row["q95"]
        assert 1 <= row["rank_low"] <= row["rank_high"] <= 64
        assert 0 <= row["p_above"] <= 1
        assert row["sd_counting"] > 0
    assert watcher.warnings == []


def test_the_hot_corner_holds_and_is_counted(run, given, open_output):
    results, _ = run("unitvariance", given())
    verdicts = {row["code"]: row["verdict"] for row in rows_of(open_output(results, "UNITS_OUT"))}
    assert verdicts["U00"] == 1
    assert results["UNITS_ABOVE"] == sum(v == 1 for v in verdicts.values())
    assert results["UNITS_ABOVE"] + results["UNITS_BELOW"] + results["UNITS_DEPEND"] == 64
    counts, totals = counts_of(64, hot=(0, 1, 8, 9))
    assert results["THRESHOLD_USED"] == pytest.approx(1000 * counts.sum() / totals.sum())


@pytest.mark.parametrize("builder", [0, 1, 2])
def test_the_same_seed_gives_the_same_result(run, given, open_output, builder):
    parameters = given(parameters={"BUILDER": builder, "REPLICATES": 20, "BALANCE_TOLERANCE": 0.5})
    first, second = (
        rows_of(open_output(run("unitvariance", parameters)[0], "UNITS_OUT")) for _ in range(2)
    )
    assert first == second


def test_extreme_zonings_are_whole_and_reach_the_value_they_claim(run, given, open_output):
    results, _ = run("unitvariance", given(parameters={"EXTREMES": "memory:"}))
    layer = open_output(results, "EXTREMES")
    counts, totals = counts_of(64, hot=(0, 1, 8, 9))
    by_zoning = {}
    for feature in layer.getFeatures():
        by_zoning.setdefault(feature["extreme"], []).append(feature)
    assert set(by_zoning) == {"largest", "smallest"}
    for features in by_zoning.values():
        assert sum(f["count"] for f in features) == counts.sum()
        assert sum(f["total"] for f in features) == totals.sum()
        area = sum(f.geometry().area() for f in features)
        assert area == pytest.approx(64 * 500**2)
        assert max(f["value"] for f in features) == pytest.approx(features[0]["reached"])
        for feature in features:
            parts = shapely.get_parts(shapely.from_wkb(bytes(feature.geometry().asWkb())))
            assert len(parts) == 1
    reached = {which: features[0]["reached"] for which, features in by_zoning.items()}
    assert reached["largest"] >= reached["smallest"]


def test_the_table_has_every_scale_and_statistic_and_the_official_place(run, given, open_output):
    results, _ = run("unitvariance", given(parameters={"OFFICIAL": "ward", "BUDGET": 0.2}))
    rows = rows_of(open_output(results, "TABLE"))
    assert {row["zone_count"] for row in rows} == {4, 6, 16}  # 4 official wards
    statistics = {row["statistic"] for row in rows}
    assert {"largest", "morans_i", "dissimilarity", "events_reached"} <= statistics
    placed = [row for row in rows if row["zone_count"] == 4]
    for row in placed:
        assert row["lowest"] <= row["q50"] <= row["highest"]
    largest = next(row for row in placed if row["statistic"] == "largest")
    counts, totals = counts_of(64, hot=(0, 1, 8, 9))
    wards = np.arange(64) // 16
    best = max(counts[wards == w].sum() / totals[wards == w].sum() for w in range(4))
    assert largest["official"] == pytest.approx(1000 * best)
    assert 0 <= largest["official_place"] <= 1
    assert results["EVENTS_REACHED"] > 0


def test_official_polygons_report_the_units_that_straddle(run, given, polygon_layer, open_output):
    left, bottom = 4_300_000.0, 3_200_000.0
    # the line between the zones cuts through the units of the fourth column
    zones = [
        shapely.box(left, bottom, left + 1700, bottom + 4000),
        shapely.box(left + 1700, bottom, left + 4000, bottom + 4000),
    ]
    official = polygon_layer(zones, name=["west", "east"])
    results, watcher = run("unitvariance", given(parameters={"OFFICIAL_ZONES": official}))
    layer = open_output(results, "UNITS_OUT")
    rows = rows_of(layer)
    assert sum(row["straddles"] for row in rows) == 8
    assert all(row["straddles"] == (int(row["code"][1:]) % 8 == 3) for row in rows)
    told = [words for words in watcher.warnings if "8 units lie across a line" in words]
    assert len(told) == 1
    named = re.search(r"see the field (\w+)", told[0])[1]
    assert named in layer.fields().names()


def test_kept_groups_are_never_crossed(run, given, open_output):
    results, _ = run(
        "unitvariance",
        given(parameters={"KEEP_WITHIN": "ward", "EXTREMES": "memory:", "ZONE_COUNTS": "9"}),
    )
    bottom = 3_200_000.0
    for feature in open_output(results, "EXTREMES").getFeatures():
        box = feature.geometry().boundingBox()
        low, high = (box.yMinimum() - bottom) / 1000, (box.yMaximum() - bottom) / 1000
        assert int(low + 1e-6) == int(high - 1e-6)  # wards are bands 1000 m high


def test_without_a_total_values_are_per_square_kilometre(run, given, open_output):
    results, _ = run("unitvariance", given(parameters={"TOTAL": None}))
    for row in rows_of(open_output(results, "UNITS_OUT")):
        assert row["value"] == pytest.approx(row["events"] / 0.25, rel=1e-6)


def test_numbers_of_zones_are_chosen_and_said(run, given, open_output):
    results, watcher = run("unitvariance", given(parameters={"ZONE_COUNTS": ""}))
    said = next(words for words in watcher.informed if "Numbers of zones chosen" in words)
    chosen = {int(value) for value in re.findall(r"\d+", said)}
    assert {row["zone_count"] for row in rows_of(open_output(results, "TABLE"))} == chosen


def test_a_geographic_layer_gives_the_same_neighbours(run, polygon_layer, open_output):
    degrees = board(4, 4, 0.02, (10.0, 52.0))
    counts, totals = counts_of(16)
    layer = polygon_layer(degrees, crs="EPSG:4326", events=counts, people=totals)
    parameters = {
        "UNITS": layer, "COUNT": "events", "TOTAL": "people", "ZONE_COUNTS": "4",
        "REPLICATES": 20, "SEED": 1, "UNITS_OUT": "memory:", "TABLE": "memory:",
    }  # fmt: skip
    results, watcher = run("unitvariance", parameters)
    assert not open_output(results, "UNITS_OUT").crs().isGeographic()
    assert watcher.warnings == []


def test_nulls_and_negatives_are_counted_and_get_no_value(run, given, open_output):
    counts, totals = counts_of(64)
    events = [None if u == 7 else int(counts[u]) for u in range(64)]
    people = [-5 if u == 20 else int(totals[u]) for u in range(64)]
    results, watcher = run("unitvariance", given(events=events, people=people))
    said = " ".join(watcher.warnings)
    assert "1 units have no number" in said and "1 units are below 0" in said
    rows = rows_of(open_output(results, "UNITS_OUT"))
    assert len(rows) == 64
    for unit in (7, 20):
        assert np.isnan(number_or_nan(rows[unit]["mean"]))
        assert np.isnan(number_or_nan(rows[unit]["verdict"]))


def test_counts_above_totals_are_counted_and_taken_for_a_rate(run, given):
    counts, totals = counts_of(64)
    counts[5] = totals[5] + 3
    _, watcher = run("unitvariance", given(events=counts, people=totals))
    assert any("1 units have a count above their total" in words for words in watcher.warnings)
    with pytest.raises(QgsProcessingException, match="cannot be members"):
        run("unitvariance", given(events=counts, people=totals, parameters={"KIND": 1}))


def test_crossing_outlines_islands_and_duplicates_are_counted(run, given):
    polygons = board(3, 3)
    left, bottom = 4_300_000.0, 3_200_000.0
    corners = [(0, 0), (500, 500), (500, 0), (0, 500)]
    polygons[0] = shapely.Polygon([(left + x, bottom + y) for x, y in corners])
    polygons += [shapely.box(left + 4000, bottom, left + 4500, bottom + 500), polygons[4]]
    _, watcher = run("unitvariance", given(polygons, parameters={"ZONE_COUNTS": "3"}))
    said = " ".join(watcher.warnings)
    assert "1 units had outlines that cross themselves" in said
    assert "1 islands touch nothing else" in said
    assert "1 units repeat the outline" in said


@pytest.mark.parametrize(
    ("parameters", "columns", "words"),
    [
        ({"ZONE_COUNTS": "65"}, {}, "65 zones cannot be made of 64 units"),
        ({"ZONE_COUNTS": "six"}, {}, "numbers are expected"),
        ({"ZONE_COUNTS": "2.5"}, {}, "whole numbers above 0"),
        ({"LEAST_TOTAL": 50}, {}, "kept by tree-cut zones only"),
        ({"BUILDER": 1, "LEAST_TOTAL": 10**9}, {}, "more than there is"),
        ({"KEEP_WITHIN": "code"}, {}, "64 separate groups"),
        ({"BUDGET": 1.0}, {}, "BUDGET"),
        ({"OFFICIAL": "ward", "OFFICIAL_ZONES": "UNITS"}, {}, "give one of the two"),
        ({}, {"people": [0] * 64}, "TOTAL: it is 0 in every unit"),
        ({}, {"events": [0] * 64}, "COUNT: it is 0 in every unit"),
        ({}, {"events": [None] * 63 + [1.5]}, "TOTAL"),
        ({"SCHEDULER": "tcp://127.0.0.1:9"}, {}, "SCHEDULER"),
        ({"REPLICATES": 5_000_000, "ZONE_COUNTS": "5,6,7,8,9"}, {}, "GB; choose"),
    ],
)
def test_what_cannot_be_done_is_refused_in_words(
    run, given, parameters, columns, words, monkeypatch
):
    monkeypatch.setattr("steadfield.algorithms.numeric.workers.SCHEDULER_SECONDS", 0.5)
    if words == "TOTAL":
        columns = {"events": [None] * 64, "people": [1] * 64}
        words = "no unit has a usable number"
        columns["events"][0] = -1.5
    made = given(parameters=parameters, **columns)
    if made.get("OFFICIAL_ZONES") == "UNITS":
        made["OFFICIAL_ZONES"] = made["UNITS"]
    with pytest.raises(QgsProcessingException, match=re.escape(words)):
        run("unitvariance", made)


@pytest.mark.parametrize(
    ("polygons", "words"),
    [
        (board(1, 1), "at least two"),
        (board(1, 5, 500.0)[::2], "shares a border"),
    ],
)
def test_units_that_cannot_be_grouped_are_refused_in_words(run, given, polygons, words):
    with pytest.raises(QgsProcessingException, match=words):
        run("unitvariance", given(polygons))


@pytest.mark.parametrize("share", [0, 0.05, 0.4])
def test_a_cancelled_run_leaves_nothing(run, given, tmp_path, share):
    targets = {name: str(tmp_path / f"{name}.gpkg") for name in ("UNITS_OUT", "TABLE", "EXTREMES")}
    targets["REPORT"] = str(tmp_path / "page.html")
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        run("unitvariance", given(parameters={**targets, "REPLICATES": 20_000}), cancel_at=share)
    assert list(tmp_path.iterdir()) == []


def test_the_report_answers_and_gives_sources_and_no_path(run, given, tmp_path):
    page = tmp_path / "page.html"
    run(
        "unitvariance",
        given(parameters={"REPORT": str(page), "OFFICIAL": "ward", "BUDGET": 0.2}),
    )
    text = page.read_text(encoding="utf-8")
    for words in (
        "stand above the overall value",
        "The official zoning among 60",
        "Units that hold above",
        "U00",
        "A service that covers 20",
        "Hammersley",
        "Tuson et al. 2020",
        "not for release",
        "Seed used",
    ):
        assert words in text, words
    assert str(tmp_path) not in text
    assert text.count("data:image/png;base64") == 5


def test_layers_open_styled_and_with_aliases(run, given, tmp_path):
    path = str(tmp_path / "units.gpkg")
    extremes = str(tmp_path / "extremes.gpkg")
    run("unitvariance", given(parameters={"UNITS_OUT": path, "EXTREMES": extremes}))
    layer = QgsVectorLayer(path, "units", "ogr")
    assert layer.renderer().type() == "categorizedSymbol"
    index = layer.fields().indexFromName("sd_zoning")
    assert "per 1000" in layer.attributeAlias(index)
    layer = QgsVectorLayer(extremes, "extremes", "ogr")
    root = layer.renderer().rootRule()
    assert [rule.active() for rule in root.children()] == [True, False]
    # every zone of each zoning falls into exactly one step
    for rule, which in zip(root.children(), ("largest", "smallest")):
        steps = [step.filterExpression() for step in rule.children()]
        fits = [
            sum(1 for _ in layer.getFeatures(f"{rule.filterExpression()} AND {step}"))
            for step in steps
        ]
        assert sum(fits) == sum(1 for _ in layer.getFeatures(f"extreme = '{which}'")) > 0
        assert max(fits) < sum(fits)


def test_units_keep_their_fields_though_the_tool_has_written_them_before(run, given, tmp_path):
    marks = np.arange(64)
    earlier = {"verdict": marks, "Verdict_in": [f"T{u}" for u in marks], "FID": marks // 2}
    path = tmp_path / "units.gpkg"
    run("unitvariance", given(parameters={"UNITS_OUT": str(path)}, **earlier))
    written = QgsVectorLayer(str(path), "units", "ogr")
    assert written.featureCount() == 64
    rows = sorted(written.getFeatures(), key=lambda feature: feature["code"])
    assert [row["verdict_in_in"] for row in rows] == marks.tolist()
    assert [row["Verdict_in"] for row in rows] == [f"T{u}" for u in marks]
    assert {row["verdict"] for row in rows} <= {-1, 0, 1}
