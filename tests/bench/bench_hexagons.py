"""Benchmark: hexagon counts with contributors on a million records against reading them, and a
release with totals on a whole district. Prints ratios; run by hand from the checkout's root."""

import sys
import tempfile
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))
from conftest import import_checkout

import_checkout()

from osgeo import gdal, ogr, osr  # noqa: E402
from steadfield.algorithms.numeric.disclosure import (  # noqa: E402
    Rules,
    contributions,
    contributor_codes,
    unsafe_totals,
)
from steadfield.algorithms.numeric.hexagons import hexagon_cells  # noqa: E402
from steadfield.algorithms.numeric.release import release  # noqa: E402
from steadfield.algorithms.numeric.release_plan import Plan, Records  # noqa: E402

COUNT, SIDE, SIZE = 1_000_000, 60_000.0, 500.0


def write_records(path, x, y, contributor, weight):
    """A GeoPackage of a million points with a contributor and a weight."""
    reference = osr.SpatialReference()
    reference.ImportFromEPSG(3035)
    source = gdal.GetDriverByName("GPKG").Create(str(path), 0, 0, 0, gdal.GDT_Unknown)
    layer = source.CreateLayer("records", reference, ogr.wkbPoint, ["SPATIAL_INDEX=NO"])
    layer.CreateField(ogr.FieldDefn("contributor", ogr.OFTInteger64))
    layer.CreateField(ogr.FieldDefn("weight", ogr.OFTReal))
    definition = layer.GetLayerDefn()
    layer.StartTransaction()
    for values in zip(x.tolist(), y.tolist(), contributor.tolist(), weight.tolist()):
        feature = ogr.Feature(definition)
        point = ogr.Geometry(ogr.wkbPoint)
        point.AddPoint_2D(values[0], values[1])
        feature.SetGeometryDirectly(point)
        feature.SetField(0, values[2])
        feature.SetField(1, values[3])
        layer.CreateFeature(feature)
    layer.CommitTransaction()


def read_records(path):
    """The fastest read that there is: the Arrow stream of the raster library."""
    import shapely

    layer_source = gdal.OpenEx(str(path), gdal.OF_VECTOR)
    layer = layer_source.GetLayer(0)
    parts = [
        (
            shapely.get_coordinates(shapely.from_wkb(np.asarray(batch["geom"], object))),
            np.asarray(batch["contributor"]),
            np.asarray(batch["weight"]),
        )
        for batch in layer.GetArrowStreamAsNumPy()
    ]
    return tuple(np.concatenate(column) for column in zip(*parts))


def count(x, y, contributor, weight):
    """Cells, distinct contributors, totals, dominance and p % of every hexagon."""
    q, r = hexagon_cells(x, y, SIZE)
    wide = int(q.max() - q.min()) + 1
    cells = np.unique((r - r.min()) * wide + q - q.min(), return_inverse=True)[1].reshape(-1)
    rules = Rules(10, 2, 85.0, 10.0)
    behind = contributions(cells, int(cells.max()) + 1, weight, contributor_codes(contributor), 2)
    return unsafe_totals(behind, rules)


def timed(work, *arguments):
    start = time.perf_counter()
    result = work(*arguments)
    return result, time.perf_counter() - start


def main():
    rng = np.random.default_rng(1)
    hearts = rng.uniform(0, SIDE, (300, 2))
    places = np.clip(hearts[rng.integers(0, 300, COUNT)] + rng.normal(0, 2000, (COUNT, 2)), 0, SIDE)
    contributor, weight = rng.integers(0, COUNT // 2, COUNT), rng.exponential(1, COUNT)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "records.gpkg"
        write_records(path, *places.T, contributor, weight)
        (read, owner, value), reading = timed(read_records, path)
    unsafe, counting = timed(count, *read.T, owner, value)
    print(f"{COUNT:,} records, {len(unsafe):,} hexagons, {unsafe.sum():,} unsafe")
    print(f"read {reading:.2f} s, count with all rules {counting:.2f} s: "
          f"{counting / reading:.2f} times the read (3 allowed)")  # fmt: skip

    q, r = np.meshgrid(np.arange(60), np.arange(60))
    q, r = q.ravel(), r.ravel()
    cells = (np.clip(rng.normal(30, 14, (30_000, 2)), 0, 59.9).astype(int) * [60, 1]).sum(1)
    regions = (q[cells] // 16) * 4 + r[cells] // 16
    for totals in (False, True):
        plan = Plan(rules=Rules(10), region_totals=totals, grand_total=totals, seed=1)
        made, spent = timed(release, Records(cells, regions=regions), q, r, 16, plan)
        print(f"3,600 hexagons, 16 regions, totals {'published' if totals else 'kept'}: "
              f"{spent:.2f} s, {made.complementary.sum()} withheld to protect others")  # fmt: skip


if __name__ == "__main__":
    main()
