"""Density outlines through the host."""

import math
import sys
from pathlib import Path

import numpy as np
import pytest
import shapely
from osgeo import gdal
from qgis.core import QgsProcessingException, QgsVectorLayer

sys.path.insert(0, str(Path(__file__).parent))
from raster_layers import save_raster

gdal.UseExceptions()
LEFT, TOP, CELL = 4_000_000.0, 3_000_000.0, 50.0


def hills():
    """Two hills; the second has a crater, so that outlines get a hole."""
    y, x = np.mgrid[0:90, 0:120]
    first = np.exp(-((x - 30) ** 2 + (y - 40) ** 2) / (2 * 9**2))
    ring = np.hypot(x - 85, y - 50) - 18
    return first + 0.6 * np.exp(-(ring**2) / (2 * 3**2))


@pytest.fixture
def outline(run, tmp_path):
    """Run the algorithm into a file; returns results, features as dicts and the feedback."""

    def runner(layer, cancel_at=None, **parameters):
        parameters.setdefault("OUTLINES", str(tmp_path / "outlines.gpkg"))
        results, watcher = run("densityoutlines", {"DENSITY": layer, **parameters}, cancel_at)
        opened = QgsVectorLayer(results["OUTLINES"], "outlines", "ogr")
        assert opened.isValid()
        names = [field.name() for field in opened.fields()]
        features = [
            {
                **dict(zip(names, feature.attributes())),
                "shape": shapely.from_wkb(bytes(feature.geometry().asWkb())),
            }
            for feature in opened.getFeatures()
        ]
        return results, features, watcher

    return runner


@pytest.fixture
def density_layer(tmp_path):
    """Save an array as a raster layer."""

    def make(values, name="density", unit="per km²", crs=3035, left=LEFT, top=TOP, cell=CELL):
        return save_raster(tmp_path / f"{name}.tif", values, left, top, cell, crs, unit=unit)

    return make


def pixel_sum(values, shape):
    """Sum of the pixels whose centres lie in a polygon, by shapely."""
    rows, columns = values.shape
    x, y = np.meshgrid(
        LEFT + (np.arange(columns) + 0.5) * CELL, TOP - (np.arange(rows) + 0.5) * CELL
    )
    return np.nansum(values[shapely.contains_xy(shape, x, y)])


def test_every_outline_holds_what_it_says(outline, density_layer):
    values = hills().astype(np.float32).astype(float)
    results, features, _ = outline(density_layer(values), SHARES="50, 90")
    assert results["PIECES"] == len(features) > 2
    for feature in features:
        held = 100 * pixel_sum(values, feature["shape"]) / values.sum()
        assert feature["piece_share"] == pytest.approx(held, rel=1e-6)
        assert feature["area_km2"] == pytest.approx(feature["shape"].area / 1e6, rel=1e-9)
    for share in (50.0, 90.0):
        pieces = [feature for feature in features if feature["share"] == share]
        total = sum(feature["piece_share"] for feature in pieces)
        assert total == pytest.approx(pieces[0]["share_held"], rel=1e-9)
        assert share <= total < share + 0.5
        assert [feature["rank"] for feature in pieces] == list(range(1, len(pieces) + 1))


def test_outlines_are_valid_nested_and_have_holes(outline, density_layer):
    _, features, _ = outline(density_layer(hills()), SHARES="25 60 95")
    shapes = np.array([feature["shape"] for feature in features])
    assert shapely.is_valid(shapes).all()
    whole = {
        share: shapely.union_all([f["shape"] for f in features if f["share"] == share])
        for share in (25.0, 60.0, 95.0)
    }
    assert shapely.difference(whole[25.0], whole[60.0]).area == 0
    assert shapely.difference(whole[60.0], whole[95.0]).area == 0
    holes = [len(part.interiors) for part in shapely.get_parts(whole[60.0])]
    assert max(holes) == 1
    # drawn from the largest share to the smallest
    shares = [feature["share"] for feature in features]
    assert shares == sorted(shares, reverse=True)


def test_outlines_of_noise_are_valid(outline, density_layer):
    noise = np.random.default_rng(1).gamma(1.0, size=(60, 70))
    _, features, _ = outline(density_layer(noise), SHARES="30, 60")
    shapes = np.array([feature["shape"] for feature in features])
    assert len(features) > 100 and shapely.is_valid(shapes).all()
    held = sum(f["piece_share"] for f in features if f["share"] == 60.0)
    assert held == pytest.approx(60, abs=0.2)


def test_area_of_a_normal_density_is_that_of_the_closed_form(outline, density_layer):
    # a round normal law holds a share p within -2 pi s^2 log(1 - p)
    y, x = np.mgrid[-60:61, -60:61] * CELL
    density = np.exp(-(x**2 + y**2) / (2 * 500**2))
    results, features, _ = outline(density_layer(density), SHARES="50")
    expected = -2 * math.pi * 0.5**2 * math.log(0.5)
    assert results["AREA"] == pytest.approx(expected, rel=0.01)
    (feature,) = features
    assert feature["peak_x"] == pytest.approx(LEFT + 60.5 * CELL)
    assert feature["peak_y"] == pytest.approx(TOP - 60.5 * CELL)
    assert feature["least"] == pytest.approx(0.5, rel=0.02)


def test_records_are_counted_inside(outline, density_layer, point_layer):
    values = hills()
    generator = np.random.default_rng(2)
    x = LEFT + generator.uniform(0, 120 * CELL, 300)
    y = TOP - generator.uniform(0, 90 * CELL, 300)
    _, features, _ = outline(density_layer(values), SHARES="40, 80", RECORDS=point_layer(x, y))
    for feature in features:
        assert feature["records"] == shapely.contains_xy(feature["shape"], x, y).sum()
    assert sum(feature["records"] for feature in features) > 20


def test_no_data_is_outside_of_every_outline(outline, density_layer):
    values = hills()
    values[:, :60] = np.nan
    _, features, _ = outline(density_layer(values), SHARES="100")
    assert min(feature["shape"].bounds[0] for feature in features) == LEFT + 60 * CELL
    assert sum(feature["piece_share"] for feature in features) == pytest.approx(100)


def test_small_pieces_are_left_out_and_what_they_hold_is_said(outline, density_layer):
    values = hills()
    values[5, 5] = 0.9
    _, whole, _ = outline(density_layer(values), SHARES="50")
    _, features, watcher = outline(density_layer(values), SHARES="50", LEAST_AREA=0.01)
    assert len(features) == len(whole) - 1
    assert any("1 pieces of the 50" in words for words in watcher.warnings)


def test_geographic_density_is_outlined_in_an_equal_area_crs(outline, density_layer):
    y, x = np.mgrid[0:80, 0:80]
    density = np.exp(-((x - 40) ** 2 + (y - 40) ** 2) / (2 * 8**2))
    layer = density_layer(density, crs=4326, left=10.0, top=52.0, cell=0.001)
    results, features, _ = outline(layer, SHARES="50")
    # one thousandth of a degree at 52 degrees: 68.6 m by 111.3 m (WGS 84)
    expected = -2 * math.pi * math.log(0.5) * (8 * 0.0686) * (8 * 0.1113)
    assert results["AREA"] == pytest.approx(expected, rel=0.02)
    assert features[0]["piece_share"] == pytest.approx(50, abs=1)


def test_report_names_shares_and_carries_the_picture(outline, density_layer, tmp_path):
    page = tmp_path / "outlines.html"
    outline(density_layer(hills()), SHARES="50, 90", REPORT=str(page))
    words = page.read_text(encoding="utf-8")
    assert "<img" in words and "Hyndman 1996" in words and str(tmp_path) not in words


@pytest.mark.parametrize(
    ("shares", "words"),
    [("0, 50", "SHARES"), ("120", "SHARES"), ("half", "numbers are expected")],
)
def test_shares_out_of_range_are_refused_in_words(outline, density_layer, shares, words):
    with pytest.raises(QgsProcessingException, match=words):
        outline(density_layer(hills()), SHARES=shares)


def test_rasters_that_are_no_density_are_refused_in_words(outline, density_layer):
    with pytest.raises(QgsProcessingException, match=r"DENSITY.*below 0"):
        outline(density_layer(hills() - 0.5))
    with pytest.raises(QgsProcessingException, match=r"DENSITY.*no value above 0"):
        outline(density_layer(np.zeros((5, 5)), "flat"))
    with pytest.raises(QgsProcessingException, match="no band 3"):
        outline(density_layer(hills(), "one"), BAND=3)


def test_a_cancelled_run_writes_nothing(outline, density_layer, tmp_path):
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        outline(density_layer(hills()), cancel_at=0.4)
    assert not (tmp_path / "outlines.gpkg").exists()
