import numpy as np
import pytest
import shapely
from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsCoordinateTransform,
    QgsCoordinateTransformContext,
    QgsExpression,
    QgsFeatureRequest,
    QgsPointXY,
    QgsProcessingContext,
    QgsProcessingFeatureSourceDefinition,
    QgsProcessingParameterFeatureSource,
    QgsProcessingParameters,
    QgsProject,
    QgsRectangle,
)
from steadfield.algorithms.numeric.errors import InputError
from steadfield.plugin import layers, outputs, reference_system

CONTEXT = QgsCoordinateTransformContext()


def as_source(layer, selected=False):
    context = QgsProcessingContext()
    QgsProject.instance().addMapLayer(layer, False)
    context.setProject(QgsProject.instance())
    definition = QgsProcessingParameterFeatureSource("INPUT")
    value = QgsProcessingFeatureSourceDefinition(layer.id(), selected)
    return QgsProcessingParameters.parameterAsSource(definition, {"INPUT": value}, context)


@pytest.fixture
def mixed_layer(point_layer, save_layer):
    rng = np.random.default_rng(11)
    n = 500
    words = [None if i % 17 == 0 else f"Straße {i % 5}" for i in range(n)]
    counts = [None if i % 13 == 0 else int(2**55 + i) for i in range(n)]
    sizes = [None if i % 11 == 0 else i / 7 for i in range(n)]
    layer = point_layer(
        rng.uniform(4e6, 4.1e6, n), rng.uniform(3e6, 3.1e6, n),
        words=words, counts=counts, sizes=sizes, plain=list(range(n)),
    )  # fmt: skip
    return save_layer(layer)


FIELDS = ["words", "counts", "sizes", "plain", "fid"]


def assert_same(first, second):
    assert shapely.equals_exact(first[0], second[0]).all()
    assert first[2].tolist() == second[2].tolist()
    for name in FIELDS:
        assert first[1][name].dtype == second[1][name].dtype
        for a, b in zip(first[1][name].tolist(), second[1][name].tolist()):
            assert a == b or (a != a and b != b)


@pytest.mark.parametrize("subset", ["", '"plain" > 100 and "words" like \'%3\''])
def test_stream_and_loop_give_the_same_arrays(mixed_layer, subset):
    mixed_layer.setSubsetString(subset)
    assert layers._plain_file_layer(mixed_layer, FIELDS)
    source = as_source(mixed_layer)
    stream = layers.read_table(mixed_layer, source, FIELDS)
    loop = layers.read_table(None, source, FIELDS)
    assert len(stream[0]) == mixed_layer.featureCount() > 0
    assert_same(stream, loop)


def test_a_selection_narrows_what_is_read(mixed_layer):
    mixed_layer.selectByExpression('"plain" < 7')
    source = as_source(mixed_layer, selected=True)
    _, values, _ = layers.read_table(None, source, ["plain"])
    assert sorted(values["plain"].tolist()) == list(range(7))


def test_an_edited_layer_is_read_as_the_host_shows_it(mixed_layer):
    mixed_layer.startEditing()
    request = QgsFeatureRequest(QgsExpression('"plain" = 3'))
    mixed_layer.deleteFeature(next(mixed_layer.getFeatures(request)).id())
    source = as_source(mixed_layer)
    _, values, _ = layers.read_table(mixed_layer, source, ["plain"])
    assert 3 not in values["plain"].tolist() and len(values["plain"]) == 499
    mixed_layer.rollBack()


def test_left_out_records_are_counted_by_reason(point_layer):
    layer = point_layer([1, 2, 3, 4, 5], [0] * 5, weight=[1.0, None, -2.0, 0.0, 2.5])
    source = as_source(layer)
    found = layers.read_records(None, source, source.sourceCrs(), CONTEXT, "weight")
    assert found.weight.tolist() == [1.0, 0.0, 2.5]
    assert found.skipped == {"with a null weight": 1, "with a negative weight": 1}


def test_bulk_reprojection_equals_the_host_point_by_point():
    rng = np.random.default_rng(5)
    places = np.column_stack([rng.uniform(5, 15, 200), rng.uniform(45, 55, 200)])
    source = QgsCoordinateReferenceSystem("EPSG:4326")
    target = QgsCoordinateReferenceSystem("EPSG:3035")
    moved = reference_system.reproject(places, source, target, CONTEXT)
    one = QgsCoordinateTransform(source, target, CONTEXT)
    for place, there in zip(places, moved):
        point = one.transform(QgsPointXY(*place))
        assert (point.x(), point.y()) == pytest.approx(tuple(there), abs=1e-6)


def test_a_place_without_an_answer_becomes_nan_and_spares_the_others():
    source = QgsCoordinateReferenceSystem("EPSG:4326")
    target = QgsCoordinateReferenceSystem("EPSG:3857")
    places = np.array([[10.0, 50.0], [10.0, 950.0], [11.0, 51.0], [np.nan, 1.0]])
    moved = reference_system.reproject(places, source, target, CONTEXT)
    assert np.isfinite(moved[[0, 2]]).all()
    assert np.isnan(moved[3]).all()


@pytest.mark.parametrize(
    ("crs", "extent", "kept"),
    [
        ("EPSG:3035", (4.0e6, 3.0e6, 4.1e6, 3.1e6), True),
        ("EPSG:25832", (4.0e5, 5.5e6, 4.5e5, 5.6e6), True),
        ("EPSG:3857", (1.0e6, 6.0e6, 1.1e6, 6.1e6), False),
        ("EPSG:4326", (8, 50, 9, 51), False),
        ("EPSG:2264", (1.3e6, 5e5, 1.5e6, 6e5), True),
        # without a code, as a raster of this plugin's own working CRS comes back from its file
        (
            "PROJ:+proj=laea +lat_0=52 +lon_0=10 +ellps=bessel +units=m",
            (-5e4, -5e4, 5e4, 5e4),
            True,
        ),
    ],
)
def test_working_crs_keeps_only_what_keeps_areas(crs, extent, kept):
    system = QgsCoordinateReferenceSystem(crs)
    chosen = reference_system.working_crs(system, QgsRectangle(*extent), CONTEXT)
    assert (chosen.crs == system) == kept
    if not kept:
        assert "laea" in chosen.crs.toProj()
        assert chosen.metres == 1
    if crs == "EPSG:2264":
        # US survey foot: 1200/3937 m by definition (Metric Act of 1866); the host rounds to 0.3048
        assert chosen.metres == pytest.approx(1200 / 3937, rel=1e-5)


def test_a_layer_without_crs_is_refused_in_words():
    with pytest.raises(InputError, match="coordinate reference system"):
        reference_system.working_crs(
            QgsCoordinateReferenceSystem(), QgsRectangle(0, 0, 1, 1), CONTEXT
        )


@pytest.mark.parametrize("others", [[], ["POINT Z (1 2 3)"], ["MULTIPOINT (4 5, 6 7)"]])
def test_places_straight_from_binary_are_those_that_shapely_reads(others):
    rng = np.random.default_rng(3)
    # every mixture of finite, infinite and missing coordinates
    odd = [(a, b) for a in (1.0, np.inf, -np.inf, np.nan) for b in (2.0, np.inf, np.nan)]
    points = np.concatenate([shapely.points(rng.normal(0, 1e6, (50, 2))), shapely.points(odd)])
    stored = shapely.to_wkb(np.concatenate([points, shapely.from_wkt(others)]), flavor="iso")
    wkb = np.insert(stored.astype(object), [0, 7, 30, len(stored)], None)
    places, row = layers._places_of(wkb)
    expected, rows = shapely.get_coordinates(shapely.from_wkb(wkb), return_index=True)
    np.testing.assert_array_equal(places, expected)
    np.testing.assert_array_equal(row, rows)


def test_columns_without_any_place_have_no_places():
    for wkb in (np.empty(0, object), np.array([None, None], object)):
        places, row = layers._places_of(wkb)
        assert places.shape == (0, 2) and len(row) == 0


def test_polygons_of_any_kind_become_multiple_ones_with_the_same_parts():
    square, far = shapely.box(0, 0, 1, 1), shapely.box(5, 5, 6, 7)
    mixed = [square, None, shapely.MultiPolygon([square, far]), shapely.Polygon(), far]
    made = outputs.as_multipolygons(mixed)
    for one, before in zip(made, mixed):
        assert (one is None) == (before is None)
        if one is not None:
            assert one.geom_type == "MultiPolygon" and one.equals(before)
            assert len(one.geoms) == len(shapely.get_parts(before))
