"""Time and memory of the release audit on a large map: python tests/bench/bench_differencing.py

5,000 hexagons against 300 zones and 100,000 records, as exact, withheld and rounded counts.
"""

import resource
import sys
import time
from pathlib import Path

import numpy as np
import shapely

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))
import conftest  # noqa: F401  makes the checkout importable
from steadfield.algorithms.numeric.differencing import PublishedTable, audit
from steadfield.algorithms.numeric.intervals import exact, rounded

SIDE = 500.0
ACROSS = 71
GOAL_SECONDS, GOAL_MEGABYTES = 60, 2000


def hexagons():
    """A board of 5,041 hexagons."""
    corner = np.radians(60 * np.arange(6) + 30)
    row, column = (part.ravel() for part in np.mgrid[0:ACROSS, 0:ACROSS])
    x = SIDE * np.sqrt(3) * (column + 0.5 * (row % 2))
    y = 1.5 * SIDE * row
    rings = np.stack(
        [x[:, None] + SIDE * np.cos(corner), y[:, None] + SIDE * np.sin(corner)], axis=2
    )
    return shapely.polygons(rings)


def zones_over(board, generator, number=300):
    """A Voronoi cut of the board's ground."""
    ground = shapely.union_all(board)
    left, bottom, right, top = ground.bounds
    seeds = shapely.multipoints(generator.uniform((left, bottom), (right, top), (number, 2)))
    cells = shapely.get_parts(shapely.voronoi_polygons(seeds, extend_to=ground))
    return shapely.intersection(cells, ground)


def counted(zones, x, y):
    record, zone = shapely.STRtree(zones).query(shapely.points(x, y), predicate="intersects")
    first = np.unique(record, return_index=True)[1]
    return np.bincount(zone[first], minlength=len(zones)).astype(float)


def withheld(values):
    return exact(np.where((values > 0) & (values < 10), np.nan, values))


def rounded_to_five(values):
    return rounded(5 * np.round(values / 5), 5)


def main():
    generator = np.random.default_rng(1)
    board = hexagons()
    wards = zones_over(board, generator)
    left, bottom, right, top = shapely.total_bounds(board)
    x, y = generator.uniform((left, bottom), (right, top), (100_000, 2)).T
    for name, statement in (
        ("exact", exact),
        ("withheld", withheld),
        ("rounded", rounded_to_five),
    ):
        tables = [
            PublishedTable(words, zones, *statement(counted(zones, x, y)), range(len(zones)))
            for words, zones in (("Hexagons", board), ("Wards", wards))
        ]
        for records, words in (((x, y), "with records"), (None, "without records")):
            start = time.perf_counter()
            found = audit(tables, 10, records=records)
            seconds = time.perf_counter() - start
            megabytes = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1000
            print(
                f"{name:9s}{words:16s}{found.atoms:6d} atoms {len(found.risks):5d} risks "
                f"{seconds:6.1f} s ({seconds / GOAL_SECONDS:.2f} of the goal) "
                f"{megabytes:6.0f} MB ({megabytes / GOAL_MEGABYTES:.2f} of the goal)"
            )


if __name__ == "__main__":
    main()
