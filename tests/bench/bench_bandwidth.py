"""Time of the cross-validation curves, as ratios.

    python tests/bench/bench_bandwidth.py

Least-squares cross-validation over 60 bandwidths on 100,000 records against three Fourier
transforms of its lattice, and both curves against the number of records.
"""

import sys
import time
from pathlib import Path

import numpy as np
from scipy import fft

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import conftest  # noqa: F401
from steadfield.algorithms.numeric import advice, bandwidth, crossvalidation, pairsums


def town(count, generator):
    """Records in 200 groups, as in a town of many quarters, metres."""
    centres = generator.normal(0, 3000, (2, 200))
    return centres[:, generator.integers(0, 200, count)] + generator.normal(0, 200, (2, count))


def processor_seconds(function, times=5):
    """Least time that all cores together spend on a call; other programs hardly disturb it."""
    seconds = []
    for _ in range(times):
        start = time.process_time()
        function()
        seconds.append(time.process_time() - start)
    return min(seconds)


def main():
    generator = np.random.default_rng(1)
    x, y = town(100_000, generator)
    weights = np.ones(x.size)
    diagnosis = advice.diagnose(x, y, weights)
    normal, widest = bandwidth.normal_scale(x, y), bandwidth.oversmoothed(x, y)
    bandwidths = advice.search_range(x, y, normal, widest, diagnosis)
    seconds = processor_seconds(lambda: crossvalidation.least_squares_scores(x, y, bandwidths))
    spectrum = pairsums.record_spectrum(x, y, weights, bandwidths[0], bandwidths[-1])
    lattice = generator.random((spectrum.rows, spectrum.columns))
    one = processor_seconds(lambda: fft.rfft2(lattice, workers=-1))
    print(f"least squares, 60 bandwidths from {bandwidths[0]:.3g} to {bandwidths[-1]:.4g} m")
    print(f"  lattice {spectrum.rows} x {spectrum.columns}; one transform {one:.2f} s")
    print(f"  whole curve {seconds:.2f} s = {seconds / one:.2f} transforms (at most 3 wanted)")
    print("records  processor seconds  microseconds per record")
    for count in (1000, 10_000, 100_000, 1_000_000):
        x, y = town(count, generator)
        seconds = processor_seconds(lambda x=x, y=y: advice.advise(x, y), 1)
        print(f"{count:8d} {seconds:10.2f} {1e6 * seconds / count:12.1f}")


if __name__ == "__main__":
    main()
