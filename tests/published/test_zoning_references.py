"""Zonings of base units against published numbers."""

import importlib.util
from itertools import combinations
from pathlib import Path

import networkx
import numpy as np
import pytest
import shapely
from steadfield.algorithms.numeric.balancing import balanced
from steadfield.algorithms.numeric.contiguity import contiguity, from_pairs
from steadfield.algorithms.numeric.scenarios import describe, problem
from steadfield.algorithms.numeric.zones import recipes, simulate


def board(side):
    index = np.arange(side * side).reshape(side, side)
    across = np.c_[index[:, :-1].ravel(), index[:, 1:].ravel()]
    down = np.c_[index[:-1].ravel(), index[1:].ravel()]
    return from_pairs(side * side, np.r_[across, down])


def equal_partitions(side):
    """All partitions of a board into as many connected parts of as many cells as its side."""
    network = networkx.Graph(board(side).pairs.tolist())
    network.add_nodes_from(range(side * side))
    parts = [
        frozenset(cells)
        for cells in combinations(range(side * side), side)
        if networkx.is_connected(network.subgraph(cells))
    ]
    by_least = {}
    for part in parts:
        by_least.setdefault(min(part), []).append(part)

    def complete(left):
        if not left:
            return [()]
        return [
            (part, *rest)
            for part in by_least.get(min(left), [])
            if part <= left
            for rest in complete(left - part)
        ]

    return {frozenset(made) for made in complete(frozenset(range(side * side)))}


# OEIS A172477: ways to cut an n x n board into n connected parts of n cells
@pytest.mark.parametrize(
    ("side", "number", "zonings"), [(1, 1, 3), (2, 2, 40), (3, 10, 600), (4, 117, 12_000)]
)
def test_balanced_zonings_reach_every_equal_partition_of_a_board(side, number, zonings):
    every = equal_partitions(side)
    assert len(every) == number
    generator = np.random.default_rng(172477)
    labels = balanced(board(side), np.ones(side * side), side, 0.0, zonings, generator)
    reached = {
        frozenset(frozenset(np.flatnonzero(row == zone).tolist()) for zone in range(side))
        for row in np.unique(labels, axis=0)
    }
    assert reached == every


@pytest.fixture(scope="module")
def counties():
    """North Carolina's 100 counties: polygons, columns, and the neighbours published with them."""
    ogr = pytest.importorskip("osgeo.ogr")
    ogr.UseExceptions()
    if importlib.util.find_spec("libpysal") is None:
        pytest.skip("libpysal carries the data")
    package = Path(importlib.util.find_spec("libpysal").origin).parent
    folder = package / "examples" / "sids2"
    source = ogr.Open(str(folder / "sids2.shp"))
    features = list(source.GetLayer())
    shapes = [shapely.from_wkb(bytes(f.GetGeometryRef().ExportToWkb())) for f in features]
    names = ("FIPSNO", "BIR74", "SID74", "BIR79", "SID79")
    columns = {name: np.array([f[name] for f in features]) for name in names}
    neighbours = set()
    lines = (folder / "sids2.gal").read_text(encoding="utf-8").splitlines()[1:]
    for head, listed in zip(lines[::2], lines[1::2]):
        neighbours |= {tuple(sorted((int(head.split()[0]), int(n)))) for n in listed.split()}
    return np.array(shapes, object), columns, neighbours


def test_counties_have_the_neighbours_published_with_the_data(counties):
    # sids2.gal of the SAL data sets (Cressie 1993, Statistics for Spatial Data, pp. 386-389)
    shapes, columns, neighbours = counties
    found = contiguity(shapes, tolerance=0)
    number = columns["FIPSNO"]
    pairs = {tuple(sorted((int(number[a]), int(number[b])))) for a, b in found.pairs}
    assert pairs == neighbours
    assert found.findings.sentences() == []


@pytest.mark.parametrize("builder", ["grown", "tree-cut", "balanced"])
def test_cases_and_births_of_the_counties_are_the_same_under_every_zoning(counties, builder):
    # Cressie & Chan (1989), J. Am. Stat. Assoc. 84:393: 667 cases among 329 962 births, 1974-78
    shapes, columns, _ = counties
    made = problem(contiguity(shapes), columns["SID74"], columns["BIR74"])
    assert made.kind == "share"
    assert made.counts.sum() == 667 and made.totals.sum() == 329_962
    plan = recipes(made, builder, [6, 12], np.random.default_rng(1), tolerance=0.4)
    run = simulate(made, plan, 30, 2)
    assert made.threshold == 667 / 329_962
    for scale in run.scales:
        # no zoning loses a case: least zone <= overall <= greatest zone, in every row
        assert (scale.statistics[:, 0] >= made.overall).all()
        assert (scale.statistics[:, 1] <= made.overall).all()
    for extreme in (run.largest, run.smallest):
        block = describe(made, extreme.labels[None])
        assert block.counts.sum() == 667 and block.totals.sum() == 329_962
