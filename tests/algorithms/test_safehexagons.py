"""Releases through the host: what an outsider finds in the files, and what the user is told."""

import re
import sys
from pathlib import Path

import numpy as np
import pytest
import shapely
from qgis.core import QgsProcessingException, QgsVectorLayer

sys.path.insert(0, str(Path(__file__).parent.parent))
import attacker

EAST, NORTH, SIDE = 4_000_000.0, 3_000_000.0, 2000.0
LEAST = 5


def district():
    return shapely.box(EAST, NORTH, EAST + SIDE, NORTH + SIDE)


def two_regions():
    middle = EAST + 930.0
    return [
        shapely.box(EAST, NORTH, middle, NORTH + SIDE),
        shapely.box(middle, NORTH, EAST + SIDE, NORTH + SIDE),
    ]


def practice(seed, count=500):
    """Clustered records with telling weights and named households, some without a name."""
    rng = np.random.default_rng(seed)
    hearts = rng.uniform(200, SIDE - 200, (8, 2))
    places = hearts[rng.integers(0, 8, count)] + rng.normal(0, 160, (count, 2))
    places = np.clip(places, 1, SIDE - 1)
    household = [f"H{k:05d}" for k in rng.integers(0, count, count)]
    return {
        "x": EAST + places[:, 0],
        "y": NORTH + places[:, 1],
        "household": household,
        "burden": (1.0 + rng.integers(1, 10**6, count) / 7.0e6).tolist(),
        "severe": (rng.random(count) < 0.4).astype(float).tolist(),
    }


@pytest.fixture
def made(run, point_layer, polygon_layer, tmp_path):
    """Run a release into files of this test."""

    def runner(seed=0, records=None, boundary=True, regions=False, cancel_at=None, **parameters):
        columns = dict(records or practice(seed))
        x, y = columns.pop("x"), columns.pop("y")
        given = {
            "RECORDS": point_layer(x, y, **columns),
            "HEXAGON_SIZE": 250,
            "LEAST_COUNT": LEAST,
            "SEED": 3,
            "RELEASE": str(tmp_path / f"release{len(list(tmp_path.iterdir()))}.gpkg"),
        }
        if boundary:
            given["BOUNDARY"] = polygon_layer([district()])
        if regions:
            given["REGIONS"] = polygon_layer(two_regions(), name=["west", "east"])
            given["REGION_NAME"] = "name"
        given.update(parameters)
        return run("safehexagons", given, cancel_at)

    return runner


def polygons_of(path):
    return [(fields, shapely.from_wkb(wkb)) for _, fields, wkb in attacker.features_of_file(path)]


def holders(shape, x, y):
    return shapely.intersects_xy(shape, x, y)


@pytest.mark.parametrize("method", [0, 1])
def test_every_published_polygon_meets_the_rule_when_counted_again_from_the_records(made, method):
    data = practice(1)
    results, _ = made(records=data, METHOD=method, CONTRIBUTOR="household")
    households = np.array(data["household"])
    published = 0
    for fields, shape in polygons_of(results["RELEASE"]):
        inside = holders(shape, data["x"], data["y"])
        if fields["count"] is None:
            assert fields["status"] == "withheld"
            continue
        published += 1
        assert fields["status"] == "released"
        assert fields["count"] == inside.sum()
        assert len(set(households[inside])) >= LEAST
    assert published > 8


@pytest.mark.parametrize("method", [0, 1])
def test_no_true_figure_of_an_unsafe_hexagon_stands_anywhere_in_the_file(made, method, tmp_path):
    """Weights make every hexagon's total a number of its own, which is looked for everywhere."""
    data = practice(2)
    results, _ = made(
        records=data, METHOD=method, CONTRIBUTOR="household", WEIGHT="burden", DOMINANCE_N=1,
        DOMINANCE_SHARE=60, REPORT=str(tmp_path / "report.html"),
    )  # fmt: skip
    plain, _ = made(records=data, METHOD=0, TOTALS=1, LEAST_COUNT=2, SHOW_EMPTY=True)
    weights = np.array(data["burden"])
    secrets = []
    for _, shape in polygons_of(plain["RELEASE"]):
        inside = holders(shape, data["x"], data["y"])
        if 0 < len(set(np.array(data["household"])[inside])) < LEAST:
            secrets.append(weights[inside].sum())
    assert len(secrets) > 10
    found = attacker.numbers_of_file(results["RELEASE"])
    values = np.array(
        [v for column in found.values() for v in column if isinstance(v, (int, float))], float
    )
    for secret in secrets:
        assert np.abs(values - secret).min() > 1e-6
    raw = Path(results["RELEASE"]).read_bytes()
    beside = list(Path(results["RELEASE"]).parent.glob(Path(results["RELEASE"]).stem + "*"))
    raw += b"".join(path.read_bytes() for path in beside)
    assert not re.search(rb"H\d{5}", raw)
    for secret in secrets:
        assert f"{secret:.5f}".encode() not in raw
        assert np.float64(secret).tobytes() not in raw
        assert np.float64(secret).byteswap().tobytes() not in raw
    for word in ("true", "confidential", "unsafe", "complementary", str(tmp_path)):
        assert word not in attacker.notes_of_file(results["RELEASE"])


def test_the_tables_of_a_release_are_those_that_a_layer_needs_and_nothing_hidden(made):
    results, _ = made(CONTRIBUTOR="household", NUMERATOR="severe", METHOD=0)
    found = attacker.numbers_of_file(results["RELEASE"])
    columns = {column for table, column in found if table == _layer_table(found)}
    assert columns == {
        "fid", "geom", "cell", "count", "numerator", "share", "per_km2", "area_km2", "cells",
        "status",
    }  # fmt: skip
    hidden = [
        table for table, _ in found
        if not table.startswith(("gpkg_", "rtree_", "sqlite_")) and table != _layer_table(found)
    ]  # fmt: skip
    assert not hidden
    assert len(set(found[(_layer_table(found), "status")])) == 2


def _layer_table(found):
    return found[("gpkg_contents", "table_name")][0]


def test_order_ids_shapes_and_extent_are_the_same_whatever_the_records(made):
    """Only published figures may differ between two releases of different records."""
    tables = []
    for seed in (3, 4):
        results, _ = made(seed=seed, METHOD=0)
        found = attacker.numbers_of_file(results["RELEASE"])
        name = _layer_table(found)
        kept = {column: found[(name, column)] for column in ("fid", "geom", "cell", "area_km2")}
        box = [found[("gpkg_contents", edge)] for edge in ("min_x", "min_y", "max_x", "max_y")]
        tables.append((kept, box))
    assert tables[0] == tables[1]
    fids = tables[0][0]["fid"]
    assert fids == list(range(1, len(fids) + 1))


def test_empty_hexagons_cannot_be_told_from_withheld_ones(made):
    data = practice(5)
    results, _ = made(records=data, METHOD=0)
    seen = set()
    for fields, shape in polygons_of(results["RELEASE"]):
        if fields["count"] is None:
            rest = {k: v for k, v in fields.items() if k not in ("cell", "area_km2")}
            seen.add((tuple(rest.items()), bool(holders(shape, data["x"], data["y"]).any())))
    assert {occupied for _, occupied in seen} == {True, False}
    assert len({rest for rest, _ in seen}) == 1


def attack_on_files(release, totals, least):
    """Bounds of every withheld hexagon from the two files alone."""
    cells = polygons_of(release)
    sums = [(fields, shape) for fields, shape in polygons_of(totals) if fields["count"] is not None]
    pieces, owner = [], []
    regions = [shape for fields, shape in sums if fields["region"] != "whole area"]
    for number, (_, shape) in enumerate(cells):
        parts = [shape.intersection(region) for region in regions] or [shape]
        rest = shape.intersection(district()).difference(shapely.union_all(regions))
        for part in [*parts, rest]:
            if part.area > 1e-6:
                pieces.append(part)
                owner.append(number)
    owner = np.array(owner)
    points = shapely.point_on_surface(np.array(pieces))
    known = []
    for number, (fields, _) in enumerate(cells):
        if fields["count"] is not None:
            known.append((np.flatnonzero(owner == number), fields["count"], fields["count"]))
    for fields, shape in sums:
        inside = np.flatnonzero(shapely.contains(shape, points))
        known.append((inside, fields["count"], fields["count"]))
    case = attacker.Case(np.zeros(len(pieces)), np.full(len(pieces), 1e4), known)
    withheld = [n for n, (fields, _) in enumerate(cells) if fields["count"] is None]
    return cells, withheld, lambda n: attacker.intervals([case], [np.flatnonzero(owner == n)])[0]


@pytest.mark.parametrize("method", [0, 1])
def test_from_release_and_totals_alone_no_hexagon_can_be_placed_below_the_least_count(
    made, tmp_path, method
):
    data = practice(6)
    results, _ = made(
        records=data, METHOD=method, regions=True, MERGE_REACH=1,
        TOTALS_OUT=str(tmp_path / "totals.gpkg"),
    )  # fmt: skip
    cells, withheld, bounds = attack_on_files(results["RELEASE"], results["TOTALS_OUT"], LEAST)
    occupied = [n for n in withheld if holders(cells[n][1], data["x"], data["y"]).any()]
    assert len(occupied) > 2
    for number in occupied[:12]:
        low, high = bounds(number)
        assert low <= 1
        assert high >= LEAST


def test_an_attacker_with_totals_that_were_not_reckoned_with_wins(made, tmp_path):
    """The same attack pins a lone hexagon when the release was made as if no totals were known."""
    x = np.r_[np.full(3, EAST + 250.0), np.full(30, EAST + 1000.0)]
    data = {"x": x, "y": np.full(33, NORTH + 900.0)}
    exact, _ = made(records=data, METHOD=0, TOTALS=1)
    shown = [fields["count"] for fields, _ in polygons_of(exact["RELEASE"])]
    published = sum(count for count in shown if count is not None)
    assert len(x) - published == 3
    careful, _ = made(records=data, METHOD=0, TOTALS=2, TOTALS_OUT=str(tmp_path / "totals.gpkg"))
    (total,) = [fields["count"] for fields, _ in polygons_of(careful["TOTALS_OUT"])]
    kept = [fields["count"] for fields, _ in polygons_of(careful["RELEASE"])]
    assert total is None or all(count is None for count in kept)


def test_shares_follow_from_the_published_figures_and_hide_few_in_either_answer(made):
    data = practice(8)
    results, _ = made(records=data, NUMERATOR="severe", METHOD=1)
    severe = np.array(data["severe"])
    for fields, shape in polygons_of(results["RELEASE"]):
        if fields["count"] is None:
            assert fields["numerator"] is None and fields["share"] is None
            continue
        inside = holders(shape, data["x"], data["y"])
        yes, no = severe[inside].sum(), (1 - severe[inside]).sum()
        assert (yes == 0 or yes >= LEAST) and no >= LEAST
        assert fields["numerator"] == yes
        assert fields["share"] == pytest.approx(yes / (yes + no))


def test_merged_zones_cover_the_tiling_without_overlap(made):
    results, _ = made(METHOD=1)
    shapes = [shape for _, shape in polygons_of(results["RELEASE"])]
    assert all(shape.is_valid and len(shape.geoms) == 1 for shape in shapes)
    assert sum(s.area for s in shapes) == pytest.approx(shapely.union_all(shapes).area)
    assert shapely.union_all(shapes).buffer(0.01).contains(district())


def test_rounded_and_controlled_figures_are_multiples_near_the_truth(made, tmp_path):
    data = practice(9)
    for method in (2, 3):
        results, _ = made(
            records=data, METHOD=method, regions=True,
            TOTALS_OUT=str(tmp_path / f"totals{method}.gpkg"),
        )  # fmt: skip
        figures = polygons_of(results["RELEASE"]) + polygons_of(results["TOTALS_OUT"])
        for fields, shape in figures:
            if fields["count"] is None:
                continue
            assert fields["count"] % LEAST == 0
            assert abs(fields["count"] - holders(shape, data["x"], data["y"]).sum()) < LEAST
    whole = [
        f["count"] for f, _ in polygons_of(results["TOTALS_OUT"]) if f["region"] == "whole area"
    ]
    assert whole == [sum(fields["count"] for fields, _ in polygons_of(results["RELEASE"]))]


def test_noise_is_released_everywhere_and_a_seeded_one_is_marked(made):
    results, watcher = made(METHOD=4, CONTRIBUTOR="household", EPSILON=1.0)
    rows = [fields for fields, _ in polygons_of(results["RELEASE"])]
    assert all(fields["count"] is not None for fields in rows)
    assert any(fields["count"] < 0 for fields in rows)
    assert {fields["note"] for fields in rows} == {"rehearsal: not for release"}
    assert any("Rehearsal" in words for words in watcher.warnings)
    results, watcher = made(METHOD=4, SEED=None)
    assert "note" not in polygons_of(results["RELEASE"])[0][0]
    assert "SEED_USED" not in results


def test_without_a_boundary_the_outermost_records_do_not_show(made):
    data = practice(10)
    far = {k: list(v) for k, v in data.items()}
    far["x"].append(EAST + 30_000)
    far["y"].append(NORTH - 20_000)
    for name in ("household", "burden", "severe"):
        far[name].append(data[name][0])
    for method in (0, 1, 2):
        boxes = []
        for records in (data, far):
            results, _ = made(records=records, boundary=False, METHOD=method, TOTALS=1)
            boxes.append(shapely.total_bounds([s for _, s in polygons_of(results["RELEASE"])]))
        assert np.allclose(boxes[0], boxes[1])


def test_without_a_boundary_no_corner_is_missing_from_the_rectangle(made):
    # places whose own rectangle misses a hexagon at a corner of the rectangle of hexagons
    places = [[2560, 1838], [7971, 8212], [11198, 9018], [11122, 11367]]
    x, y = np.repeat(places, 20, axis=0).T
    records = {"x": EAST + x, "y": NORTH + y}
    results, _ = made(records=records, boundary=False, HEXAGON_SIZE=3000, TOTALS=1)
    names = [fields["cell"].split() for fields, _ in polygons_of(results["RELEASE"])]
    q, r = np.array(names, int).T
    across = 2 * q + r
    rectangle = {
        (a, b)
        for b in range(r.min(), r.max() + 1)
        for a in range(across.min(), across.max() + 1)
        if (a - b) % 2 == 0
    }
    assert set(zip(across.tolist(), r.tolist())) == rectangle


def test_the_custodians_layer_is_off_by_default_and_says_what_it_is(made, tmp_path):
    results, _ = made()
    assert "CUSTODIAN" not in results and "TOTALS_OUT" not in results
    data = practice(0)
    results, _ = made(CUSTODIAN=str(tmp_path / "custodian.gpkg"), regions=True)
    true = sum(fields["true_count"] for fields, _ in polygons_of(results["CUSTODIAN"]))
    assert true == len(data["x"])
    reasons = {fields["reason"] for fields, _ in polygons_of(results["CUSTODIAN"])}
    assert {"safe", "unsafe by the rules", "empty"} <= reasons


def test_number_outputs_agree_with_the_file(made):
    for method in (0, 1):
        data = practice(11)
        results, _ = made(records=data, METHOD=method)
        rows = [fields for fields, _ in polygons_of(results["RELEASE"])]
        released = [f for f in rows if f["count"] is not None]
        alone = [f for f in released if f["cells"] == 1]
        assert results["CELLS_RELEASED"] == len(alone)
        assert results["CELLS_MERGED"] == sum(f["cells"] for f in released if f["cells"] > 1)
        assert results["CELLS_WITHHELD"] == sum(f["cells"] for f in rows if f["count"] is None)
        assert results["RECORDS_RELEASED"] == sum(f["count"] for f in alone)
        kept = results["RECORDS_RELEASED"] + results["RECORDS_MERGED"]
        assert kept + results["RECORDS_WITHHELD"] == len(data["x"])
        assert 0 < results["HELLINGER"] < 1
        assert results["HEXAGON_SIZE_USED"] == 250


def test_a_seed_repeats_the_release(made):
    one, two = (made(METHOD=1)[0] for _ in range(2))
    assert [f for f, _ in polygons_of(one["RELEASE"])] == [
        f for f, _ in polygons_of(two["RELEASE"])
    ]


@pytest.mark.parametrize("count", [150, 300, 500, 900])
def test_a_size_that_is_chosen_is_round_and_little_above_four_times_the_least_count(made, count):
    size = made(records=practice(0, count), HEXAGON_SIZE=0, METHOD=1)[0]["HEXAGON_SIZE_USED"]
    assert float(f"{size:.1e}") == size
    # area of a hexagon between whose parallel sides lies the size: sqrt(3) / 2 of its square
    held = count * np.sqrt(3) / 2 * size**2 / district().area
    assert held * (1 + 1e-9) >= 4 * LEAST
    assert held < 1.5**2 * 4 * LEAST


def test_the_report_is_marked_confidential_and_names_no_path(made, tmp_path):
    results, _ = made(
        REPORT=str(tmp_path / "report.html"), METHOD=0, NUMERATOR="severe", DOMINANCE_N=1,
        P_PERCENT=10, regions=True,
    )  # fmt: skip
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "not for release" in page
    assert "may be published" in page
    assert str(tmp_path) not in page
    for words in ("Handbook on Statistical Disclosure Control", "data&#x27;s owner", "p % rule"):
        assert words in page


def test_a_geographic_layer_is_counted_in_an_equal_area_crs(run, point_layer, tmp_path):
    rng = np.random.default_rng(1)
    layer = point_layer(10 + rng.normal(0, 0.01, 300), 50 + rng.normal(0, 0.01, 300), "EPSG:4326")
    results, watcher = run(
        "safehexagons",
        {"RECORDS": layer, "HEXAGON_SIZE": 1000, "RELEASE": str(tmp_path / "release.gpkg")},
    )
    assert any("Working CRS" in words for words in watcher.informed)
    rows = polygons_of(results["RELEASE"])
    assert rows[0][1].area == pytest.approx(np.sqrt(3) / 2 * 1000**2, rel=1e-9)


def test_records_without_a_contributor_weight_or_numerator_are_counted_and_said(made):
    data = practice(12)
    data["household"] = [None, "", *data["household"][2:]]
    data["severe"] = [None, *data["severe"][1:]]
    data["burden"] = [-1.0, *data["burden"][1:]]
    _, watcher = made(records=data, CONTRIBUTOR="household", NUMERATOR="severe")
    assert any("name no contributor" in words for words in watcher.warnings)
    assert any("no value" in words for words in watcher.warnings)
    _, watcher = made(records=data, WEIGHT="burden")
    assert any("negative weight" in words for words in watcher.warnings)


@pytest.mark.parametrize(
    ("words", "parameters"),
    [
        ("LEAST_COUNT must be", {"LEAST_COUNT": 1}),
        ("larger than the area", {"HEXAGON_SIZE": 5000}),
        ("no regions are given", {"TOTALS": 3}),
        ("ROUNDING_BASE 3 is below", {"METHOD": 2, "ROUNDING_BASE": 3}),
        ("noise needs a boundary", {"METHOD": 4, "boundary": False}),
        ("noise needs a size", {"METHOD": 4, "HEXAGON_SIZE": 0}),
        ("EPSILON must be above 0", {"METHOD": 4, "EPSILON": 0}),
        ("WEIGHT", {"METHOD": 4, "WEIGHT": "burden"}),
        ("one above", {"NUMERATOR": "burden"}),
        ("No hexagon of", {"LEAST_COUNT": 400, "boundary": False}),
    ],
)
def test_settings_that_cannot_be_kept_are_refused_in_words(made, words, parameters):
    with pytest.raises(QgsProcessingException, match=words):
        made(**parameters)


def test_the_size_of_hexagons_in_a_refusal_is_in_metres_where_the_crs_is_in_feet(
    run, point_layer, tmp_path
):
    rng = np.random.default_rng(5)
    x, y = 990_000 + rng.uniform(0, 9000, (2, 40))
    given = {
        "RECORDS": point_layer(x, y - 790_000, crs="EPSG:2263"),
        "HEXAGON_SIZE": 250,
        "LEAST_COUNT": 30,
        "RELEASE": str(tmp_path / "release.gpkg"),
    }
    with pytest.raises(QgsProcessingException, match="No hexagon of 250 m can be published"):
        run("safehexagons", given)


def test_regions_that_overlap_are_refused_and_gaps_are_said(made, polygon_layer):
    west, east = two_regions()
    overlapping = polygon_layer([west, east.union(west.buffer(-300))])
    with pytest.raises(QgsProcessingException, match="overlap"):
        made(REGIONS=overlapping)
    _, watcher = made(REGIONS=polygon_layer([west]))
    assert any("lie in no region" in words for words in watcher.warnings)


def test_an_empty_layer_is_refused(run, point_layer, tmp_path):
    with pytest.raises(QgsProcessingException, match="no features"):
        run(
            "safehexagons",
            {"RECORDS": point_layer([], []), "RELEASE": str(tmp_path / "release.gpkg")},
        )


def test_a_cancelled_run_leaves_nothing(made, tmp_path):
    with pytest.raises(QgsProcessingException):
        made(METHOD=1, regions=True, cancel_at=0.2)
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("parameters", "unit"),
    [
        ({}, "records"),
        ({"NUMERATOR": "severe"}, "of the count"),
        ({"METHOD": 1}, "per km²"),
    ],
)
def test_the_legend_says_what_is_counted(made, parameters, unit):
    layer = QgsVectorLayer(made(**parameters)[0]["RELEASE"], "release", "ogr")
    missing, *groups = [one.label() for one in layer.renderer().legendSymbolItems()]
    assert missing == "withheld"
    assert groups and all(words.endswith(f" {unit}") for words in groups)
