"""Centres and spreads through the host, on cases whose answer is known."""

import math
from pathlib import Path

import numpy as np
import pytest
from qgis.core import QgsProcessingException
from steadfield.algorithms import centrespread_page

EAST, NORTH = 3_840_000.0, 3_560_000.0


@pytest.fixture
def square(point_layer):
    """Two squares of side 200 m, 1 km apart; the second is 300 m further north."""
    x = EAST + np.array([0, 200, 200, 0, 1000, 1200, 1200, 1000])
    y = NORTH + np.array([0, 0, 200, 200, 300, 300, 500, 500])
    return point_layer(
        x,
        y,
        quarter=["b"] * 4 + ["a"] * 4,
        day=["2023-01-05"] * 4 + ["2023-03-01"] * 4,
        calls=[3, 1, 1, 3, 1, 1, 1, 1],
    )


@pytest.fixture
def spread(run, tmp_path):
    def runner(layer, cancel_at=None, **parameters):
        outputs = {
            name: str(tmp_path / f"{name.lower()}.gpkg") for name in ("CENTRES", "ELLIPSES", "PATH")
        }
        outputs["REPORT"] = str(tmp_path / "report.html")
        given = {"RECORDS": layer, "SEED": 1, "DRAWS": 199, **outputs, **parameters}
        given = {name: value for name, value in given.items() if value is not None}
        return run("centrespread", given, cancel_at)

    return runner


def rows(layer, *names):
    return [tuple(feature[name] for name in names) for feature in layer.getFeatures()]


def test_centre_and_standard_distance_of_squares_are_their_closed_forms(
    spread, square, open_output
):
    results, _ = spread(square, GROUP="quarter")
    layer = open_output(results, "CENTRES")
    found = {
        (f["group"], f["place"]): (f.geometry().asPoint(), f["standard_distance"])
        for f in layer.getFeatures()
    }
    for group, east, north in (("b", 100, 100), ("a", 1100, 400)):
        for place in ("mean centre", "geometric median"):
            point, distance = found[group, place]
            assert (point.x() - EAST, point.y() - NORTH) == pytest.approx((east, north), abs=1e-6)
            assert distance == pytest.approx(100 * math.sqrt(2))
    assert results["GROUPS"] == 2
    assert results["CENTRE_X"] == pytest.approx(EAST + 600)
    assert layer.labelsEnabled() and layer.renderer().type() == "categorizedSymbol"


def test_weights_pull_the_mean_centre(spread, square, open_output):
    results, _ = spread(square, GROUP="quarter", WEIGHT="calls")
    layer = open_output(results, "CENTRES")
    means = {
        f["group"]: f.geometry().asPoint().x() - EAST
        for f in layer.getFeatures()
        if f["place"] == "mean centre"
    }
    # (3 x 0 + 200 + 200 + 3 x 0) / 8.
    assert means["b"] == pytest.approx(50.0)


def test_the_path_follows_the_order_and_gives_distance_and_bearing(spread, square, open_output):
    by_name, _ = spread(square, GROUP="quarter")
    assert rows(open_output(by_name, "PATH"), "from_group", "to_group") == [("a", "b")]
    by_day, _ = spread(square, GROUP="quarter", ORDER="day")
    path = open_output(by_day, "PATH")
    ((start, stop, distance, direction),) = rows(
        path, "from_group", "to_group", "distance", "bearing"
    )
    assert (start, stop) == ("b", "a")
    assert distance == pytest.approx(math.hypot(1000, 300)) == by_day["PATH_LENGTH"]
    assert direction == pytest.approx(math.degrees(math.atan2(1000, 300)))


def test_ellipses_are_in_metres_and_hold_what_they_say(spread, point_layer, open_output):
    rng = np.random.default_rng(3)
    along, across = rng.normal(size=(2, 800)) * np.array([[600.0], [200.0]])
    # The long axis on bearing 60 degrees.
    angle = math.radians(30.0)
    x = EAST + along * math.cos(angle) - across * math.sin(angle)
    y = NORTH + along * math.sin(angle) + across * math.cos(angle)
    results, _ = spread(point_layer(x, y, a=np.arange(800).tolist()), DRAWS=999)
    layer = open_output(results, "ELLIPSES")
    ellipses = {feature["kind"]: feature for feature in layer.getFeatures()}
    deviation, confidence = ellipses["deviation"], ellipses["confidence"]
    # Axes are known to sigma / sqrt(2 n), 2.5 %.
    assert deviation["semi_major"] == pytest.approx(600, rel=0.08)
    assert deviation["semi_minor"] == pytest.approx(200, rel=0.08)
    assert deviation["bearing"] == pytest.approx(60, abs=4)
    assert deviation.geometry().area() / 1e6 == pytest.approx(deviation["area"], rel=0.01)
    # Hotelling for many records: root of the 95 % point of chi-square(2), 5.991, over n.
    ratio = confidence["semi_major"] / deviation["semi_major"]
    assert ratio == pytest.approx(math.sqrt(5.991 / 800), rel=0.1)


def test_a_geographic_layer_in_degrees_gives_metres(spread, point_layer):
    # A degree of latitude at 50 degrees is 111,229 m on WGS 84 (series of the meridian arc).
    results, watcher = spread(point_layer([8.0, 8.0], [50.0, 50.01], "EPSG:4326", a=[1, 2]))
    assert results["STANDARD_DISTANCE"] == pytest.approx(1112.3 / 2, rel=0.002)
    assert any("equal-area" in words for words in watcher.informed)


def test_the_same_seed_gives_the_same_ellipses(spread, point_layer, open_output):
    places = np.random.default_rng(5).normal(size=(2, 60)) * 300
    layer = point_layer(EAST + places[0], NORTH + places[1], g=[1, 2] * 30)
    runs = []
    for seed in (4, 4, 5):
        results, _ = spread(layer, GROUP="g", SEED=seed)
        runs.append(rows(open_output(results, "ELLIPSES"), "semi_major", "semi_minor", "bearing"))
    assert runs[0] == runs[1] != runs[2]


def test_records_of_one_household_widen_the_confidence(spread, point_layer, open_output):
    homes = np.random.default_rng(6).normal(size=(2, 40)) * 300
    x, y = np.repeat(homes, 5, axis=1)
    layer = point_layer(EAST + x, NORTH + y, household=np.repeat(np.arange(40), 5).tolist())

    def long_axis(**parameters):
        results, _ = spread(layer, DRAWS=499, **parameters)
        ellipses = open_output(results, "ELLIPSES")
        return next(f["semi_major"] for f in ellipses.getFeatures() if f["kind"] == "confidence")

    # Five records of each home tell no more than one: the axis grows by sqrt(5).
    grown = long_axis(CONTRIBUTOR="household") / long_axis()
    assert grown == pytest.approx(math.sqrt(5), rel=0.15)


def test_one_record_has_a_centre_and_no_ellipse(spread, point_layer, open_output):
    results, watcher = spread(point_layer([EAST], [NORTH], a=[1]))
    assert open_output(results, "CENTRES").featureCount() == 2
    assert open_output(results, "ELLIPSES").featureCount() == 0
    assert results["STANDARD_DISTANCE"] == 0.0
    assert any("Too few places" in words for words in watcher.warnings)


def test_records_without_group_geometry_or_weight_are_left_out_and_counted(spread, point_layer):
    x = EAST + np.arange(8.0) * 100
    layer = point_layer(
        x,
        np.full(8, NORTH),
        g=["a", "a", "a", "b", "b", "b", None, "c"],
        w=[1, 1, 1, 2, 2, -2, 1, 0],
    )
    results, watcher = spread(layer, GROUP="g", WEIGHT="w")
    assert results["GROUPS"] == 2
    said = " ".join(watcher.warnings)
    assert "1 features with a negative weight" in said
    assert "1 records without a value" in said
    assert "Group c" in said


def test_the_page_answers_in_words_and_names_no_folder(spread, square, save_layer, tmp_path):
    results, _ = spread(save_layer(square), GROUP="quarter", ORDER="day")
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    # 1000 m to the east and 300 m to the north is nearest to east.
    assert "From b to a the mean centre lies 1\u202f044 m further to the east." in page
    assert str(tmp_path) not in page and "not for release" in page


@pytest.mark.parametrize(
    ("group", "order", "arrows"),
    [("quarter", None, 0), ("quarter", "day", 1), ("day", None, 1), ("calls", None, 1)],
)
def test_arrows_join_only_groups_that_have_an_order(
    spread, square, monkeypatch, group, order, arrows
):
    seen = []
    draw = centrespread_page._draw

    def count_arrows(figure, groups, steps, *rest):
        seen.append(len(steps))
        draw(figure, groups, steps, *rest)

    monkeypatch.setattr(centrespread_page, "_draw", count_arrows)
    spread(square, GROUP=group, ORDER=order)
    assert seen == [arrows, arrows]


def test_outputs_that_are_not_asked_for_are_not_made(spread, square):
    results, _ = spread(square, PATH=None, REPORT=None)
    assert "PATH" not in results and "REPORT" not in results


def test_what_cannot_be_worked_with_is_refused_in_words(spread, point_layer):
    with pytest.raises(QgsProcessingException, match=r"RECORDS.*no features"):
        spread(point_layer([], [], a=[]))
    with pytest.raises(QgsProcessingException, match=r"WEIGHT.*no record has a value above 0"):
        spread(point_layer([EAST], [NORTH], w=[0]), WEIGHT="w")
    many = point_layer(EAST + np.arange(600.0), np.full(600, NORTH), g=list(range(600)))
    with pytest.raises(QgsProcessingException, match=r"GROUP.*600 groups"):
        spread(many, GROUP="g")


@pytest.mark.parametrize("share", [0, 0.3])
def test_cancelling_leaves_nothing(spread, square, tmp_path, share):
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        spread(square, GROUP="quarter", cancel_at=share)
    assert list(tmp_path.iterdir()) == []
