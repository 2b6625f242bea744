"""Time of the zoning variance of points: 500 tilings of each of 6 sizes on 96,000 points.

Run by hand: ``python tests/bench/bench_gridvariance.py``. Prints seconds for no workers, one, two
and four threads, and each as a ratio to no workers.
"""

import sys
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
import conftest  # noqa: F401
from steadfield.algorithms.numeric import lattice_variance
from steadfield.algorithms.numeric.grid import Grid
from steadfield.algorithms.numeric.ground import ground

SIZES = (200, 300, 450, 700, 1000, 1500)


def main(replicates=500):
    generator = np.random.default_rng(1)
    residents = generator.uniform(0, 10_000, (2, 90_000))
    records = generator.uniform(0, 10_000, (2, 6_000))
    x, y = Grid(0, 10_000, 10_000 / 300, 300, 300).centres()
    study = ground(
        (*records, np.ones(6_000)), (*residents, np.ones(90_000)), (x.ravel(), y.ravel()), "share"
    )
    first = None
    for workers in (0, 1, 2, 4):
        executor = ThreadPoolExecutor(workers) if workers else None
        start = time.perf_counter()
        scales = lattice_variance.run_scales(
            study, SIZES, "hexagon", replicates, 7, executor=executor
        )
        seconds = time.perf_counter() - start
        means = np.stack([scale.moments.mean for scale in scales])
        first = (seconds, means) if first is None else first
        same = "same to the bit" if np.array_equal(means, first[1]) else "DIFFERENT"
        print(f"{workers} workers: {seconds:.1f} s, ratio {seconds / first[0]:.2f}, {same}")


if __name__ == "__main__":
    main(*(int(argument) for argument in sys.argv[1:]))
