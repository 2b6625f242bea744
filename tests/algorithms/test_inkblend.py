"""Blending rasters into one picture, through the host."""

import sys
from pathlib import Path

import numpy as np
import pytest
from osgeo import gdal, osr
from qgis.core import (
    QgsMultiBandColorRenderer,
    QgsProcessingException,
    QgsRasterLayer,
)
from qgis.PyQt.QtGui import QImage
from steadfield.algorithms.numeric import colour, ink
from steadfield.algorithms.numeric.ranks import mass_rank

sys.path.insert(0, str(Path(__file__).parent))
from raster_layers import read_bands, save_raster

LEFT, TOP = 4_000_000.0, 3_000_000.0


def hill(x, y, east, north, width):
    """A smooth density with its peak so many metres east and south of the corner."""
    return 40 * np.exp(-((x - LEFT - east) ** 2 + (y - TOP + north) ** 2) / (2 * width**2))


def centres(rows, columns, left, top, cell):
    return np.meshgrid(
        left + (np.arange(columns) + 0.5) * cell, top - (np.arange(rows) + 0.5) * cell
    )


@pytest.fixture
def blend(run, tmp_path):
    """Run the blend into files of this test."""

    def runner(layers, cancel_at=None, **parameters):
        parameters = {
            "LAYERS": layers,
            "PICTURE": str(tmp_path / "picture.tif"),
            "LEGEND": str(tmp_path / "legend.svg"),
            **parameters,
        }
        return run("inkblend", parameters, cancel_at)

    return runner


@pytest.fixture
def two_hills(tmp_path):
    x, y = centres(60, 80, LEFT, TOP, 100)
    values = [hill(x, y, 3000, 3000, 900), hill(x, y, 5000, 3000, 1200)]
    layers = [
        save_raster(tmp_path / f"{name}.tif", one, LEFT, TOP, 100, unit="per km²")
        for name, one in zip(("falls", "lamps"), values)
    ]
    return values, layers


def intended(values, inks):
    """The colours that the formulas give for exact ranks."""
    ranks = np.array([mass_rank(np.asarray(one, np.float32)) for one in values])
    return np.clip(colour.oklab_to_srgb(ink.blend(ranks, inks)), 0, 1)


def test_picture_over_white_paper_shows_the_blend_of_exact_ranks(blend, two_hills):
    values, layers = two_hills
    results, _ = blend(layers)
    levels = read_bands(results["PICTURE"])
    assert levels.shape == (4, 60, 80) and levels.dtype == np.uint8
    np.testing.assert_allclose(
        ink.over(levels), intended(values, ink.default_inks(2)), atol=2.5 / 255
    )


def test_picture_opens_see_through_and_unstretched(blend, two_hills):
    results, _ = blend(two_hills[1])
    layer = QgsRasterLayer(results["PICTURE"], "picture")
    layer.loadDefaultStyle()
    renderer = layer.renderer()
    assert isinstance(renderer, QgsMultiBandColorRenderer)
    assert renderer.alphaBand() == 4
    assert renderer.redContrastEnhancement() is None
    dataset = gdal.Open(results["PICTURE"])
    assert dataset.GetRasterBand(4).GetColorInterpretation() == gdal.GCI_AlphaBand
    levels = dataset.ReadAsArray()
    assert levels[3].min() < 10 and levels[3].max() > 100


def test_layers_of_other_crs_cell_extent_type_and_blocks_are_aligned(blend, tmp_path):
    x, y = centres(120, 150, LEFT, TOP, 100)
    places = [(6000, 6000, 1800), (8000, 5000, 2200), (5000, 7000, 2500)]
    whole = [hill(x, y, *place) for place in places]
    first = save_raster(tmp_path / "first.tif", whole[0], LEFT, TOP, 100)
    # finer, shifted, wider, whole numbers, tiled
    fine = centres(800, 1000, LEFT - 1013, TOP + 2007, 25)
    second = save_raster(
        tmp_path / "second.tif",
        np.rint(1000 * hill(*fine, *places[1])),
        LEFT - 1013,
        TOP + 2007,
        25,
        no_data=-1,
        kind=gdal.GDT_Int32,
        options=["TILED=YES", "BLOCKXSIZE=128", "BLOCKYSIZE=64", "COMPRESS=LZW"],
    )
    third = save_raster(tmp_path / "third.tif", *_in_degrees(places[2]), crs=4326, no_data=-9999)
    results, watcher = blend([first, second, third])
    shown = ink.over(read_bands(results["PICTURE"]))
    np.testing.assert_allclose(shown, intended(whole, ink.default_inks(3)), atol=8 / 255)
    assert any("averaged" in words for words in watcher.informed)


def _in_degrees(place):
    """A hill sampled on a lattice of degrees that covers the test's ground."""
    metres, degrees = osr.SpatialReference(), osr.SpatialReference()
    metres.ImportFromEPSG(3035)
    degrees.ImportFromEPSG(4326)
    for reference in (metres, degrees):
        reference.SetAxisMappingStrategy(osr.OAMS_TRADITIONAL_GIS_ORDER)
    middle = osr.CoordinateTransformation(metres, degrees).TransformPoint(LEFT + 7500, TOP - 6000)
    cell, half = 0.001, 160
    left, top = middle[0] - half * cell, middle[1] + half * cell
    lattice = np.stack(centres(2 * half, 2 * half, left, top, cell), axis=-1).reshape(-1, 2)
    placed = osr.CoordinateTransformation(degrees, metres).TransformPoints(lattice.tolist())
    x, y = np.array(placed)[:, :2].T.reshape(2, 2 * half, 2 * half)
    return hill(x, y, *place), left, top, cell


def test_no_data_is_bare_paper_and_hides_no_other_layer(blend, two_hills, tmp_path):
    values, layers = two_hills
    holed = values[1].copy()
    holed[:, 40:] = np.nan
    second = save_raster(tmp_path / "holed.tif", holed, LEFT, TOP, 100, no_data=-9999)
    results, _ = blend([layers[0], second])
    shown = ink.over(read_bands(results["PICTURE"]))
    np.testing.assert_allclose(
        shown, intended([values[0], np.nan_to_num(holed)], ink.default_inks(2)), atol=2.5 / 255
    )
    both = np.full((60, 80), np.nan)
    both[:30] = 1.0
    empty_half = [
        save_raster(tmp_path / f"half{i}.tif", both, LEFT, TOP, 100, no_data=-9999)
        for i in range(2)
    ]
    results, _ = blend(empty_half)
    assert (read_bands(results["PICTURE"])[3, 30:] == 0).all()


def test_order_of_layers_changes_inks_only(blend, two_hills):
    _, layers = two_hills
    own = "#c04020, #2060c0"
    first = ink.over(read_bands(blend(layers, INKS=own)[0]["PICTURE"]))
    turned = "#2060c0, #c04020"
    second = ink.over(read_bands(blend(layers[::-1], INKS=turned)[0]["PICTURE"]))
    np.testing.assert_allclose(first, second, atol=1.01 / 255)


def test_strength_of_nought_takes_a_layer_out(blend, two_hills):
    values, layers = two_hills
    results, _ = blend(layers, STRENGTHS="1, 0")
    shown = ink.over(read_bands(results["PICTURE"]))
    alone = intended(values[:1], ink.default_inks(2)[:1])
    np.testing.assert_allclose(shown, alone, atol=2.5 / 255)


def test_linear_stretch_follows_the_value(blend, two_hills):
    values, layers = two_hills
    results, _ = blend(layers, STRETCH=1)
    shares = np.array([one / one.max() for one in values])
    expected = np.clip(colour.oklab_to_srgb(ink.blend(shares, ink.default_inks(2))), 0, 1)
    np.testing.assert_allclose(ink.over(read_bands(results["PICTURE"])), expected, atol=2.5 / 255)


def test_legend_comes_as_drawing_and_as_picture_of_the_same_shape(blend, two_hills):
    results, _ = blend(two_hills[1], TITLE="Falls and lamps")
    drawing = Path(results["LEGEND"])
    text = drawing.read_text(encoding="utf-8")
    assert "Falls and lamps" in text and "per km²" in text and ">falls<" in text
    picture = QImage(str(drawing.with_suffix(".png")))
    height = float(text.split('height="')[1].split("mm")[0])
    assert picture.width() == pytest.approx(96 / 25.4 * 300, abs=1)
    assert picture.height() == pytest.approx(height / 25.4 * 300, abs=1)
    colours = {picture.pixelColor(x, y).name() for x in range(0, picture.width(), 9)
               for y in range(0, picture.height(), 9)}  # fmt: skip
    assert len(colours) > 30


def test_report_names_the_differences_and_no_path(blend, two_hills, tmp_path):
    results, _ = blend(two_hills[1], REPORT=str(tmp_path / "report.html"))
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "CIEDE2000" in page and "protanopia" in page and "Machado" in page
    assert str(tmp_path) not in page
    smallest = ink.smallest_difference(ink.default_inks(2))
    assert results["SMALLEST_DIFFERENCE"] == pytest.approx(smallest)


def test_layers_of_one_name_are_numbered_and_can_be_named(blend, two_hills, tmp_path):
    values, layers = two_hills
    (tmp_path / "other").mkdir()
    same = save_raster(tmp_path / "other" / "falls.tif", values[1], LEFT, TOP, 100)
    results, _ = blend([layers[0], same])
    legend = Path(results["LEGEND"]).read_text(encoding="utf-8")
    assert ">falls (1)<" in legend and ">falls (2)<" in legend
    results, _ = blend([layers[0], same], NAMES="Falls in winter; Falls in summer")
    legend = Path(results["LEGEND"]).read_text(encoding="utf-8")
    assert ">Falls in winter<" in legend and ">Falls in summer<" in legend


def test_own_inks_that_look_alike_raise_a_warning_in_words(blend, two_hills):
    _, watcher = blend(two_hills[1], INKS="#2277cc #2379cc")
    assert any("cannot be told apart" in words for words in watcher.warnings)


def test_negative_values_are_counted_in_a_warning(blend, two_hills, tmp_path):
    values, layers = two_hills
    lowered = save_raster(tmp_path / "lowered.tif", values[1] - 1, LEFT, TOP, 100)
    _, watcher = blend([layers[0], lowered])
    assert any("below 0" in words and "lowered" in words for words in watcher.warnings)


def test_grid_and_cell_size_follow_the_choice(blend, two_hills, tmp_path):
    _, layers = two_hills
    x, y = centres(20, 20, LEFT + 2000, TOP - 2000, 50)
    small = save_raster(
        tmp_path / "small.tif", hill(x, y, 2500, 2500, 400), LEFT + 2000, TOP - 2000, 50
    )
    results, _ = blend(layers, GRID=small)
    dataset = gdal.Open(results["PICTURE"])
    assert (dataset.RasterXSize, dataset.RasterYSize) == (20, 20)
    results, _ = blend(layers, CELL_SIZE=400)
    dataset = gdal.Open(results["PICTURE"])
    assert dataset.GetGeoTransform()[1] == 400
    assert (dataset.RasterXSize, dataset.RasterYSize) == (20, 15)


def test_geographic_first_layer_is_put_in_an_equal_area_crs(blend, tmp_path):
    x, y = centres(40, 60, 8.0, 54.0, 0.01)
    hills = [np.exp(-((x - 8.2 - i / 10) ** 2 + (y - 53.8) ** 2) / 0.01) for i in range(2)]
    layers = [
        save_raster(tmp_path / f"{i}.tif", one, 8.0, 54.0, 0.01, crs=4326)
        for i, one in enumerate(hills)
    ]
    results, _ = blend(layers)
    dataset = gdal.Open(results["PICTURE"])
    assert "Azimuthal_Equal_Area" in dataset.GetProjection()
    transform = dataset.GetGeoTransform()
    assert transform[1] == pytest.approx(-transform[5])
    assert read_bands(results["PICTURE"])[3].max() > 100


def test_layer_without_a_value_above_zero_is_refused_by_name(blend, two_hills, tmp_path):
    empty = save_raster(tmp_path / "bare.tif", np.zeros((60, 80)), LEFT, TOP, 100)
    with pytest.raises(QgsProcessingException, match=r"bare.*no value above 0"):
        blend([two_hills[1][0], empty])


def test_layer_that_lies_elsewhere_is_refused_by_name(blend, two_hills, tmp_path):
    far = save_raster(tmp_path / "far.tif", np.ones((5, 5)), LEFT + 90_000, TOP, 100)
    with pytest.raises(QgsProcessingException, match=r"far.*no ground in common"):
        blend([two_hills[1][0], far])


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"INKS": "#123456"}, "A colour for each of the 2 layers"),
        ({"INKS": "#123456, blue"}, "blue"),
        ({"STRENGTHS": "1, 2"}, "from 0 to 1"),
        ({"STRENGTHS": "1"}, "for each of the 2 layers"),
        ({"BAND": 3}, "no band 3"),
        ({"LEGEND": "legend.png"}, "ends in .svg"),
    ],
)
def test_settings_that_cannot_work_are_refused_in_words(
    blend, two_hills, parameters, words, tmp_path
):
    with pytest.raises(QgsProcessingException, match=words):
        blend(two_hills[1], **parameters)
    assert not (tmp_path / "picture.tif").exists()


def test_a_legend_whose_picture_cannot_be_written_is_refused_and_nothing_stays(
    blend, two_hills, tmp_path
):
    (tmp_path / "legend.png").mkdir()
    before = sorted(tmp_path.iterdir())
    with pytest.raises(QgsProcessingException, match=r"LEGEND\): the file cannot be written"):
        blend(two_hills[1])
    assert sorted(tmp_path.iterdir()) == before


def test_seven_layers_are_refused(blend, two_hills):
    with pytest.raises(QgsProcessingException, match="found 7"):
        blend([two_hills[1][0]] * 7)


@pytest.mark.parametrize("share", [0, 0.2, 0.5])
def test_cancelled_run_leaves_no_file(blend, two_hills, tmp_path, share):
    before = sorted(tmp_path.iterdir())
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        blend(two_hills[1], cancel_at=share)
    assert sorted(tmp_path.iterdir()) == before
