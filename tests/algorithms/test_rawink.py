"""Raw layers as accumulated ink, through the host."""

import sys
from pathlib import Path

import numpy as np
import pytest
import shapely
from osgeo import gdal
from qgis.core import QgsFeature, QgsGeometry, QgsProcessingException, QgsVectorLayer
from steadfield.algorithms.numeric import colour, ink

sys.path.insert(0, str(Path(__file__).parent))
from raster_layers import read_bands, save_raster

LEFT, TOP, CELL = 4_000_000.0, 3_000_000.0, 10.0
ROWS, COLUMNS = 30, 40


@pytest.fixture
def grid(tmp_path):
    return save_raster(tmp_path / "grid.tif", np.ones((ROWS, COLUMNS)), LEFT, TOP, CELL)


@pytest.fixture
def draw(run, tmp_path):
    def runner(layers, cancel_at=None, **parameters):
        parameters = {
            "LAYERS": layers,
            "PICTURE": str(tmp_path / "picture.tif"),
            "LEGEND": str(tmp_path / "legend.svg"),
            **parameters,
        }
        return run("rawink", parameters, cancel_at)

    return runner


@pytest.fixture
def line_layer():
    """Make a memory layer of lines from well-known text."""

    def make(lines):
        layer = QgsVectorLayer("LineString?crs=EPSG:3035", "lines", "memory")
        features = []
        for line in lines:
            feature = QgsFeature()
            feature.setGeometry(QgsGeometry.fromWkt(line))
            features.append(feature)
        layer.dataProvider().addFeatures(features)
        return layer

    return make


def expected_colours(counts, coat, inks):
    """Colours of coat upon coat, from counts of each layer."""
    strengths = 1 - (1 - coat) ** np.asarray(counts, float)
    return np.clip(colour.oklab_to_srgb(ink.blend(strengths, inks)), 0, 1)


def random_points(seed, count):
    generator = np.random.default_rng(seed)
    # crowded towards one corner, so that they overlap
    return (
        LEFT + COLUMNS * CELL * generator.beta(1, 4, count),
        TOP - ROWS * CELL * generator.beta(1, 4, count),
    )


def counted(x, y):
    counts = np.zeros((ROWS, COLUMNS))
    for east, south in zip((x - LEFT) / CELL, (TOP - y) / CELL):
        counts[int(south), int(east)] += 1
    return counts


def test_points_of_two_layers_lie_as_coats_of_ink(draw, point_layer, grid):
    places = [random_points(1, 800), random_points(2, 500)]
    results, _ = draw([point_layer(*one) for one in places], GRID=grid, INK_PER_FEATURE=0.25)
    shown = ink.over(read_bands(results["PICTURE"]))
    expected = expected_colours([counted(*one) for one in places], 0.25, ink.default_inks(2))
    np.testing.assert_allclose(shown, expected, atol=2.5 / 255)


def test_polygons_count_where_they_hold_the_middle_of_a_pixel(draw, polygon_layer, grid):
    generator = np.random.default_rng(3)
    x, y = random_points(4, 12)
    polygons = [
        shapely.Point(a, b).buffer(size) for a, b, size in zip(x, y, generator.uniform(15, 90, 12))
    ]
    results, _ = draw([polygon_layer(polygons)], GRID=grid, INK_PER_FEATURE=0.2)
    rows, columns = np.mgrid[:ROWS, :COLUMNS]
    middles = shapely.points(LEFT + (columns + 0.5) * CELL, TOP - (rows + 0.5) * CELL)
    counts = sum(shapely.contains(polygon, middles).astype(int) for polygon in polygons)
    shown = ink.over(read_bands(results["PICTURE"]))
    expected = expected_colours([counts], 0.2, ink.default_inks(1))
    np.testing.assert_allclose(shown, expected, atol=2.5 / 255)
    assert counts.max() >= 3


def test_lines_count_once_on_each_pixel_they_cross(draw, line_layer, grid):
    # off the lattice, with a corner inside one pixel
    lines = [
        [(3.2, 4.1), (14.7, 9.3), (14.9, 9.6), (30.3, 25.2)],
        [(5.5, 25.5), (35.5, 3.25)],
    ]
    lines = [
        shapely.LineString([(LEFT + CELL * x, TOP - CELL * y) for x, y in one]) for one in lines
    ]
    results, _ = draw([line_layer([line.wkt for line in lines])], GRID=grid, INK_PER_FEATURE=0.3)
    rows, columns = np.mgrid[:ROWS, :COLUMNS]
    pixels = shapely.box(
        LEFT + columns * CELL,
        TOP - (rows + 1) * CELL,
        LEFT + (columns + 1) * CELL,
        TOP - rows * CELL,
    )
    counts = sum(shapely.intersects(pixels, line).astype(int) for line in lines)
    assert counts.max() == 2
    shown = ink.over(read_bands(results["PICTURE"]))
    expected = expected_colours([counts], 0.3, ink.default_inks(1))
    off = np.abs(shown - expected).max(axis=-1) > 2.5 / 255
    # a line that grazes a pixel by a hair may count either way
    assert off.sum() <= 2


def test_grid_covers_all_layers_by_default_and_is_returned(draw, point_layer):
    layers = [point_layer([LEFT, LEFT + 400], [TOP, TOP]), point_layer([LEFT + 900], [TOP - 300])]
    results, _ = draw(layers, CELL_SIZE=25)
    dataset = gdal.Open(results["PICTURE"])
    left, cell, _, top, _, _ = dataset.GetGeoTransform()
    assert cell == 25 and results["CELL_SIZE_USED"] == 25
    assert left <= LEFT and left + 25 * dataset.RasterXSize >= LEFT + 900
    assert top >= TOP and top - 25 * dataset.RasterYSize <= TOP - 300
    assert (dataset.ReadAsArray()[3] > 0).sum() == 3


def test_layers_in_degrees_are_placed_in_an_equal_area_crs(draw, point_layer):
    layer = point_layer([8.0, 8.3, 8.1], [54.0, 54.2, 54.1], crs="EPSG:4326")
    results, _ = draw([layer])
    dataset = gdal.Open(results["PICTURE"])
    assert "Azimuthal_Equal_Area" in dataset.GetProjection()
    assert (dataset.ReadAsArray()[3] > 0).sum() == 3


def test_filter_of_a_layer_is_honoured(draw, point_layer, save_layer, grid):
    layer = save_layer(point_layer([LEFT + 5, LEFT + 95], [TOP - 5, TOP - 5], kind=["a", "b"]))
    layer.setSubsetString("kind = 'a'")
    results, _ = draw([layer], GRID=grid)
    assert (read_bands(results["PICTURE"])[3] > 0).sum() == 1


def test_null_geometry_is_counted_in_a_warning(draw, point_layer):
    layer = point_layer([LEFT, LEFT + 300], [TOP, TOP - 300])
    layer.dataProvider().addFeatures([QgsFeature(layer.fields())])
    _, watcher = draw([layer], NAMES="Falls")
    assert any("Falls: 1 features without geometry" in words for words in watcher.warnings)


def test_names_go_to_the_legend_and_the_report_is_marked_confidential(draw, point_layer, tmp_path):
    layers = [point_layer(*random_points(5, 40)), point_layer(*random_points(6, 40))]
    results, _ = draw(
        layers, NAMES="Falls; Unlit paths", REPORT=str(tmp_path / "report.html"), CELL_SIZE=10
    )
    legend = Path(results["LEGEND"]).read_text(encoding="utf-8")
    assert ">Falls<" in legend and ">Unlit paths<" in legend and "nearly full: 3" in legend
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "not for release" in page and str(tmp_path) not in page


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"NAMES": "one; two"}, "found 2"),
        ({"INKS": "#123456, #654321"}, "for each of the 1 layers"),
        ({"CELL_SIZE": 0.01}, "too many to hold; choose"),
    ],
)
def test_settings_that_cannot_work_are_refused_in_words(draw, point_layer, parameters, words):
    with pytest.raises(QgsProcessingException, match=words):
        draw([point_layer(*random_points(7, 30))], **parameters)


def test_empty_layer_and_layer_off_the_grid_are_refused(draw, point_layer, grid):
    with pytest.raises(QgsProcessingException, match="has no features"):
        draw([point_layer([], [])])
    with pytest.raises(QgsProcessingException, match="No feature lies on the grid"):
        draw([point_layer([LEFT - 5000], [TOP])], GRID=grid)


def test_single_point_is_drawn(draw, point_layer):
    results, _ = draw([point_layer([LEFT], [TOP])])
    assert (read_bands(results["PICTURE"])[3] > 0).sum() == 1


@pytest.mark.parametrize("share", [0, 0.5])
def test_cancelled_run_leaves_no_file(draw, point_layer, tmp_path, share):
    before = sorted(tmp_path.iterdir())
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        draw([point_layer(*random_points(8, 50))], cancel_at=share)
    assert sorted(tmp_path.iterdir()) == before
