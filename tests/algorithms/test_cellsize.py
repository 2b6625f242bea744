"""Cell size sweep through the host."""

from pathlib import Path

import numpy as np
import pytest
from qgis.core import QgsProcessingException, QgsVectorLayer

LEFT, BOTTOM = 4_000_000.0, 3_000_000.0


@pytest.fixture
def sweep(run, tmp_path):
    def runner(cancel_at=None, **parameters):
        chosen = {
            "SEED": 4,
            "OFFSETS": 6,
            "TABLE": str(tmp_path / "table.gpkg"),
            "REPORT": str(tmp_path / "report.html"),
            **parameters,
        }
        return run("cellsize", chosen, cancel_at)

    return runner


def normal(number=3000, spread=800.0, seed=1):
    x, y = np.random.default_rng(seed).normal(0, spread, (2, number))
    return x + LEFT, y + BOTTOM


def test_the_criteria_of_normal_records_lie_near_the_reference_rule(sweep, point_layer):
    x, y = normal()
    results, _ = sweep(RECORDS=point_layer(x, y), SHAPE=1, OFFSETS=12)
    # Scott (1992): 3.5 s n^(-1/4) is best for normal records in squares.
    best = 3.5 * 800 * 3000**-0.25
    assert results["BY_CROSS_VALIDATION"] == pytest.approx(best, rel=0.6)
    assert results["BY_MEAN_VARIANCE"] == pytest.approx(best, rel=0.6)
    assert results["ADVISED"] >= results["BY_CROSS_VALIDATION"]
    assert results["RECORDS_BELOW"] <= 0.1


def test_the_table_has_a_row_for_each_size_and_marks_the_advised_one(sweep, point_layer):
    x, y = normal()
    results, _ = sweep(RECORDS=point_layer(x, y), CELL_SIZES="500; 250, 1000")
    rows = list(QgsVectorLayer(results["TABLE"], "table", "ogr").getFeatures())
    assert [row["cell_size"] for row in rows] == [250, 500, 1000]
    assert [row["cell_size"] for row in rows if row["advised"]] == [results["ADVISED"]]
    below = [row["records_below"] for row in rows]
    assert below == sorted(below, reverse=True)


def test_the_report_carries_both_plots_and_no_path(sweep, point_layer, tmp_path):
    x, y = normal(800)
    results, _ = sweep(RECORDS=point_layer(x, y))
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert page.count("<img") == 2 and "are advised" in page and str(tmp_path) not in page


def test_a_geographic_layer_is_swept_in_metres(sweep, point_layer):
    x, y = np.random.default_rng(2).normal(0, 0.01, (2, 500))
    results, watcher = sweep(RECORDS=point_layer(x + 8, y + 50, "EPSG:4326"))
    assert 50 < results["ADVISED"] < 10_000
    assert any("equal-area" in words for words in watcher.informed)


def test_stacked_null_and_negative_records_are_counted_in_warnings(sweep, point_layer):
    x, y = normal(300)
    x[:100], y[:100] = x[0], y[0]
    weight = np.ones(300).tolist()
    weight[200], weight[201], weight[202] = None, -1.0, 0.0
    _, watcher = sweep(RECORDS=point_layer(x, y, n=weight), WEIGHT="n")
    words = " ".join(watcher.warnings)
    assert "34 % of the records share their spot" in words.replace("\u202f", " ")
    assert "1 features with a null weight" in words and "1 records of weight 0" in words
    assert "1 features with a negative weight" in words


@pytest.mark.parametrize(
    ("places", "settings", "words"),
    [
        (0, {}, "no features"),
        (1, {}, "at least 2 records"),
        (5, {"CELL_SIZES": "-3"}, "above 0"),
        (5, {"CELL_SIZES": "wide"}, "CELL_SIZES"),
    ],
)
def test_what_cannot_be_swept_is_refused_in_words(
    sweep, point_layer, tmp_path, places, settings, words
):
    x, y = normal(places)
    with pytest.raises(QgsProcessingException, match=words):
        sweep(RECORDS=point_layer(x, y), **settings)
    assert not list(tmp_path.iterdir())


def test_records_on_one_spot_are_refused(sweep, point_layer):
    with pytest.raises(QgsProcessingException, match="one spot"):
        sweep(RECORDS=point_layer([LEFT] * 4, [BOTTOM] * 4))


@pytest.mark.parametrize("share", [0.0, 0.3])
def test_cancelling_leaves_no_file(sweep, point_layer, tmp_path, share):
    x, y = normal(300)
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        sweep(share, RECORDS=point_layer(x, y))
    assert not list(tmp_path.iterdir())
