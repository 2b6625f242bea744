"""Time and level of the density ratio's relabelling, and the practice district.

python tests/bench/bench_contrast.py            time of 999 relabellings
python tests/bench/bench_contrast.py level      400 null patterns (about 10 minutes)
python tests/bench/bench_contrast.py district   the true areas of the practice district
"""

import sys
import time
from pathlib import Path

import numpy as np
import shapely

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import conftest  # noqa: F401
from steadfield.algorithms.numeric import contrast, practice
from steadfield.algorithms.numeric.edges import boundary_mask
from steadfield.algorithms.numeric.grid import Grid, covering
from steadfield.algorithms.numeric.surface import adaptive_surface

WHICH = ("highest", "lowest", "highest_scaled", "lowest_scaled")


def speed():
    """999 relabellings of 10,000 records on 256 x 256 pixels; under 30 s wanted."""
    generator = np.random.default_rng(0)
    background, records = generator.normal(0, 1000, (2, 8000)), generator.normal(0, 1000, (2, 2000))
    pooled = contrast.pool((*records, None), (*background, None))
    grid = Grid(-3840, 3840, 30, 256, 256)
    found = contrast.density_contrast(pooled, grid, contrast.common_bandwidth(pooled))
    start, cores = time.perf_counter(), time.process_time()
    contrast.relabel(found, 999, generator)
    wall, cores = time.perf_counter() - start, time.process_time() - cores
    start = time.process_time()
    adaptive_surface(*records, 1.0, found.bandwidths[:2000], grid)
    single = time.process_time() - start
    print(f"999 relabellings, 10,000 records, 256 x 256: {wall:.1f} s, {cores:.1f} s of processor")
    print(f"  each {cores / 999 / single:.2f} times one adaptive surface of the 2,000 records")


def level(simulations=400, relabellings=99):
    """Share of random samples that the global tests reject at 5 %; 3 to 7 % wanted."""
    generator = np.random.default_rng(1)
    grid = Grid(-2500, 2500, 5000 / 48, 48, 48)
    mask = boundary_mask(shapely.Point(0, 0).buffer(2200), grid)
    rejected = dict.fromkeys(WHICH, 0)
    for _ in range(simulations):
        x, y = generator.normal(0, 800, (2, 1000))
        inside = np.hypot(x, y) < 2200
        x, y = x[inside], y[inside]
        pooled = contrast.pool((x[:200], y[:200], None), (x[200:], y[200:], None))
        found = contrast.density_contrast(
            pooled, grid, contrast.common_bandwidth(pooled), mask=mask
        )
        result = contrast.relabel(found, relabellings, generator)
        for which in WHICH:
            rejected[which] += result.global_p(which) <= 0.05
    for which in WHICH:
        print(f"{which:16s} rejects {100 * rejected[which] / simulations:.1f} % at the 5 % level")


def district():
    """Areas that hold over the whole map against the two true ones."""
    made = practice.make_district(1)
    pooled = contrast.pool(
        (made.falls.x, made.falls.y, None), (made.residents.x, made.residents.y, None)
    )
    bandwidth = contrast.common_bandwidth(pooled)
    grid = covering(made.boundary.bounds, bandwidth / 6)
    mask = boundary_mask(made.boundary, grid)
    found = contrast.density_contrast(pooled, grid, bandwidth, mask=mask)
    result = contrast.relabel(found, 199, np.random.default_rng(2))
    sure = result.p_raised_anywhere <= 0.05
    x, y = grid.centres()
    areas = made.risk.areas()
    for number, area in enumerate(areas):
        inside = shapely.contains_xy(area, x, y)
        print(f"true area {number + 1}: {100 * sure[inside].mean():.0f} % of it found")
    near = shapely.contains_xy(shapely.union_all(shapely.buffer(areas, bandwidth)), x, y)
    print(f"{int((sure & ~near).sum())} of {int(sure.sum())} pixels found lie away from both")
    for which in WHICH:
        print(f"  {which}: p = {result.global_p(which):.3f}")


if __name__ == "__main__":
    {"level": level, "district": district}.get("".join(sys.argv[1:2]), speed)()
