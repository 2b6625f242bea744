"""Safe surfaces through the host, attacked from the finished raster alone."""

import sys
from pathlib import Path

import numpy as np
import pytest
import shapely
from osgeo import gdal
from qgis.core import QgsProcessingException
from scipy.ndimage import maximum_filter
from scipy.spatial import cKDTree

sys.path.insert(0, str(Path(__file__).parent))
from raster_layers import read_bands

EAST, NORTH, SIDE = 4_000_000.0, 3_000_000.0, 8000.0


def hamlets(seed, lone=60):
    """Households in clusters and by themselves, several records each in some."""
    rng = np.random.default_rng(seed)
    hearts = rng.uniform(1000, SIDE - 1000, (8, 2))
    places = np.concatenate(
        [
            hearts[rng.integers(0, 8, 800)] + rng.normal(0, 220, (800, 2)),
            rng.uniform(300, SIDE - 300, (lone, 2)),
        ]
    )
    copies = 1 + (rng.random(len(places)) < 0.2)
    household = np.repeat(np.arange(len(places)), copies)
    return EAST + places[household, 0], NORTH + places[household, 1], household


def peaks_of(path):
    """Centres of the local maxima of a raster, and its values."""
    values = read_bands(path)[0].astype(float)
    left, cell, _, top, _, _ = gdal.Open(path).GetGeoTransform()
    values[values == -9999] = np.nan
    filled = np.nan_to_num(values)
    rows, columns = np.nonzero((filled == maximum_filter(filled, 3)) & (filled > 0))
    return np.column_stack([left + (columns + 0.5) * cell, top - (rows + 0.5) * cell]), values


def lone_addresses(x, y, household, distance):
    places = np.unique(np.column_stack([x, y]), axis=0)
    crowd = cKDTree(places).query_ball_point(places, distance, return_length=True)
    return places[crowd == 1]


@pytest.fixture
def made(run, point_layer, polygon_layer, tmp_path):
    def runner(seed=0, records=None, boundary=False, cancel_at=None, **parameters):
        x, y, household = records or hamlets(seed)
        given = {
            "RECORDS": point_layer(x, y, household=household.tolist()),
            "CONTRIBUTOR": "household",
            "BANDWIDTH": 150,
            "CELL_SIZE": 50,
            "DENSITY": str(tmp_path / "density.tif"),
            **parameters,
        }
        if boundary:
            given["BOUNDARY"] = polygon_layer([shapely.box(EAST, NORTH, EAST + SIDE, NORTH + SIDE)])
        return run("safesurface", given, cancel_at)

    return runner


@pytest.mark.parametrize("seed", [0, 1])
def test_peaks_of_the_released_raster_do_not_point_at_lone_addresses(made, seed):
    x, y, household = hamlets(seed)
    results, _ = made(records=(x, y, household))
    peaks, _ = peaks_of(results["DENSITY"])
    alone = lone_addresses(x, y, household, 250)
    assert len(alone) > 20
    distance, _ = cKDTree(peaks).query(alone)
    # what a peak meets by chance: discs of 60 m around the peaks in an area of 64 km²
    chance = len(alone) * len(peaks) * np.pi * 60**2 / SIDE**2
    assert (distance < 60).sum() <= chance + 3
    assert results["LEAST_EFFECTIVE"] >= 10 * 0.999


def test_peaks_of_an_ordinary_surface_of_the_same_bandwidth_point_at_most_of_them(
    run, point_layer, tmp_path
):
    x, y, household = hamlets(0)
    results, _ = run(
        "adaptivedensity",
        {
            "RECORDS": point_layer(x, y), "BANDWIDTH": 150, "CELL_SIZE": 50, "ADAPT": 0,
            "DENSITY": str(tmp_path / "plain.tif"),
        },
    )  # fmt: skip
    peaks, _ = peaks_of(results["DENSITY"])
    alone = lone_addresses(x, y, household, 250)
    distance, _ = cKDTree(peaks).query(alone)
    assert (distance < 60).mean() > 0.6


def test_the_surface_holds_all_records_and_stays_near_the_plain_one_where_many_live(
    made, run, point_layer, tmp_path
):
    x, y, household = hamlets(2, lone=0)
    results, _ = made(records=(x, y, household))
    _, safe = peaks_of(results["DENSITY"])
    assert np.nansum(safe) * 0.05**2 == pytest.approx(len(x), rel=0.02)
    plain, _ = run(
        "adaptivedensity",
        {
            "RECORDS": point_layer(x, y), "BANDWIDTH": 150, "CELL_SIZE": 50, "ADAPT": 0,
            "DENSITY": str(tmp_path / "plain.tif"),
        },
    )  # fmt: skip
    _, ordinary = peaks_of(plain["DENSITY"])
    assert np.nanmax(safe) == pytest.approx(np.nanmax(ordinary), rel=0.3)


def test_outside_the_boundary_there_is_no_value_and_inside_no_hole(made):
    results, _ = made(boundary=True)
    _, values = peaks_of(results["DENSITY"])
    assert values.shape == (160, 160)
    assert np.isfinite(values).all()


def test_the_file_carries_no_statistics_or_names_of_the_records(made, tmp_path):
    results, _ = made(REPORT=str(tmp_path / "report.html"))
    source = gdal.Open(results["DENSITY"])
    band = source.GetRasterBand(1)
    notes = str([source.GetMetadata(), band.GetMetadata(), source.GetFileList()])
    assert "STATISTICS" not in notes and "household" not in notes
    assert not list(tmp_path.glob("*.aux.xml"))
    page = Path(results["REPORT"]).read_text(encoding="utf-8")
    assert "not for release" in page and str(tmp_path) not in page


def test_bandwidth_and_cell_size_are_chosen_and_said(made):
    results, watcher = made(BANDWIDTH=0, CELL_SIZE=0)
    assert results["BANDWIDTH_USED"] > results["CELL_SIZE_USED"] > 0
    # two digits: a bandwidth in full would carry the spread of the records
    assert float(f"{results['BANDWIDTH_USED']:.1e}") == results["BANDWIDTH_USED"]
    assert any("chosen" in words for words in watcher.informed)


@pytest.mark.parametrize(
    ("words", "parameters"),
    [
        ("LEAST_COUNT must be", {"LEAST_COUNT": 1}),
        ("effective contributors", {"LEAST_COUNT": 5000}),
        ("smaller pixels", {"CELL_SIZE": 400}),
        ("would not fit", {"CELL_SIZE": 0.5}),
    ],
)
def test_settings_that_cannot_be_kept_are_refused_in_words(made, words, parameters):
    with pytest.raises(QgsProcessingException, match=words):
        made(**parameters)


def test_records_without_a_contributor_are_left_out_and_counted(run, point_layer, tmp_path):
    x, y, household = hamlets(3)
    names = [None, *[str(k) for k in household[1:]]]
    results, watcher = run(
        "safesurface",
        {
            "RECORDS": point_layer(x, y, household=names), "CONTRIBUTOR": "household",
            "BANDWIDTH": 150, "CELL_SIZE": 50, "DENSITY": str(tmp_path / "density.tif"),
        },
    )  # fmt: skip
    assert any("1 records name no contributor" in words for words in watcher.warnings)
    _, values = peaks_of(results["DENSITY"])
    assert np.nansum(values) * 0.05**2 == pytest.approx(len(x) - 1, rel=0.02)


def test_a_cancelled_run_leaves_nothing(made, tmp_path):
    with pytest.raises(QgsProcessingException):
        made(cancel_at=0.3)
    assert not list(tmp_path.iterdir())


@pytest.fixture
def attack_succeeds_below(monkeypatch):
    """Let the attack succeed on every surface of a narrower bandwidth than given."""
    from steadfield.algorithms import safesurface
    from steadfield.algorithms.numeric.safe_surface import PointsAtAddressesError

    made_of = safesurface.safe_surface

    def set_limit(limit):
        def guarded(x, y, least, bandwidth, *rest):
            if bandwidth < limit:
                raise PointsAtAddressesError("points at single addresses")
            return made_of(x, y, least, bandwidth, *rest)

        monkeypatch.setattr(safesurface, "safe_surface", guarded)

    return set_limit


def test_a_bandwidth_left_to_the_tool_is_widened_until_the_attack_fails(
    made, attack_succeeds_below
):
    plain, _ = made(BANDWIDTH=None, CELL_SIZE=None)
    attack_succeeds_below(1.9 * plain["BANDWIDTH_USED"])
    wider, watcher = made(BANDWIDTH=None, CELL_SIZE=None)
    # two steps of the square root of 2, each rounded to two digits
    assert wider["BANDWIDTH_USED"] == pytest.approx(2 * plain["BANDWIDTH_USED"], rel=0.05)
    assert wider["CELL_SIZE_USED"] == pytest.approx(wider["BANDWIDTH_USED"] / 3, rel=0.05)
    assert sum("points at single addresses" in words for words in watcher.informed) == 2
    assert watcher.shares == sorted(watcher.shares)


def test_a_surface_that_no_widening_saves_is_refused(made, attack_succeeds_below):
    attack_succeeds_below(np.inf)
    with pytest.raises(QgsProcessingException, match="points at single addresses"):
        made(BANDWIDTH=None, CELL_SIZE=None)


def test_a_bandwidth_that_was_asked_for_is_never_widened(made, attack_succeeds_below):
    attack_succeeds_below(200)
    with pytest.raises(QgsProcessingException, match="points at single addresses"):
        made(BANDWIDTH=150)
