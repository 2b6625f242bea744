"""Zoning variance against figures and results published elsewhere."""

from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pytest
from steadfield.algorithms.numeric import lattice_variance
from steadfield.algorithms.numeric.ground import ground
from steadfield.algorithms.numeric.lattice_zonings import Tiling, cell_numbers, random_tiling
from steadfield.algorithms.numeric.zone_statistics import zone_statistics

ogr = pytest.importorskip("osgeo.ogr")


@pytest.fixture(scope="module")
def carolina():
    """Centroids, births and sudden infant deaths 1974-78 of the counties of North Carolina."""
    package = find_spec("libpysal")
    if package is None:
        pytest.skip("the package libpysal, which carries the data, is not installed")
    path = Path(package.origin).parent / "examples" / "sids2" / "sids2.shp"
    counties = ogr.Open(str(path))
    rows = [
        (
            feature.GetGeometryRef().Centroid().GetX(),
            feature.GetGeometryRef().Centroid().GetY(),
            feature["BIR74"],
            feature["SID74"],
        )
        for feature in counties.GetLayer()
    ]
    return np.array(rows, float).T


@pytest.mark.parametrize("shape", ["hexagon", "square"])
def test_every_tiling_of_north_carolina_holds_667_cases_among_329962_births(carolina, shape):
    # Totals of 1974-78: 667 cases, 329,962 births (Cressie & Chan 1989, JASA 84:393).
    x, y, births, deaths = carolina
    study = ground((x, y, deaths), (x, y, births), (x, y), "share")
    assert study.threshold == pytest.approx(667 / 329_962, rel=1e-12)
    generator = np.random.default_rng(1)
    for size in (0.4, 1.0, 2.5):
        tiling = random_tiling(shape, size, True, generator)
        table, block, _ = lattice_variance.tiling_values(study, tiling)
        cells = cell_numbers(block, x, y)
        count = np.bincount(cells, weights=deaths, minlength=block.cells)
        total = np.bincount(cells, weights=births, minlength=block.cells)
        assert (count.sum(), total.sum()) == (667, 329_962)
        used = table[:, 0] > 0
        value = table[used, 1] + study.threshold
        assert value @ total[used] == pytest.approx(667, rel=1e-12)
        assert np.average(value, weights=total[used]) == pytest.approx(667 / 329_962, rel=1e-12)


def test_merging_cells_never_raises_the_largest_value_nor_lowers_the_smallest(carolina):
    # A mediant lies between its parts: squares that each hold four of the smaller ones whole.
    x, y, births, deaths = carolina
    study = ground((x, y, deaths), (x, y, births), (x, y), "share")
    found = [
        lattice_variance.tiling_values(study, Tiling("square", size, (-85.0, 33.0), 0.3))[2]
        for size in (0.3, 0.6, 1.2, 2.4)
    ]
    for finer, coarser in zip(found, found[1:]):
        assert coarser["largest"] <= finer["largest"]
        assert coarser["smallest"] >= finer["smallest"]


def test_statistics_of_the_counties_agree_with_the_published_totals(carolina):
    # One zone: the overall value; no spread is left and no case has to move.
    _, _, births, deaths = carolina
    whole = zone_statistics([deaths.sum()], [births.sum()], 0.001, "share")
    assert whole.largest == whole.smallest == pytest.approx(667 / 329_962)
    assert whole.variation == 0 and whole.dissimilarity == pytest.approx(0)
    counties = zone_statistics(deaths, births, 667 / 329_962, "share")
    assert counties.zones == 100
    # The highest county rate is Anson's, the outlier of Cressie & Read (1985), Biom. J. 27:333;
    # 15 cases among 1,570 births by the data themselves.
    assert counties.largest == pytest.approx(15 / 1570)
