"""Time of the cross-validation curves, as ratios.

    python tests/bench/bench_bandwidth.py           times
    python tests/bench/bench_bandwidth.py choice    which bandwidth suits an adaptive surface

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
from steadfield.algorithms.numeric.adaptation import adapt_bandwidths
from steadfield.algorithms.numeric.grid import covering
from steadfield.algorithms.numeric.surface import adaptive_surface


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
    diagnosis = advice.diagnose(x, y, weights, bandwidth.normal_scale(x, y, weights))
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


PATTERNS = ("round", "two", "sharp and broad", "clusters", "streets", "far")


def mixture(kind):
    """Shares, centres and widths of round normal parts, kilometres."""
    generator = np.random.default_rng(5)
    if kind == "round":
        return [1.0], [(0, 0)], [1.0]
    if kind == "two":
        return [0.7, 0.3], [(0, 0), (4, 1)], [1.0, 0.4]
    if kind == "sharp and broad":
        return [0.6, 0.4], [(0, 0), (1, 1)], [2.0, 0.15]
    if kind == "far":
        return [0.8, 0.15, 0.05], [(0, 0)] * 3, [1.0, 3.0, 12.0]
    if kind == "clusters":
        return [0.05] * 20, generator.normal(0, 3, (20, 2)), generator.uniform(0.2, 0.8, 20)
    centres = []
    for _ in range(15):
        start, angle = generator.normal(0, 2, 2), generator.integers(0, 2) * np.pi / 2 + 0.1
        along = np.linspace(0, generator.uniform(1, 4), 40)[:, None]
        centres.append(start + along * (np.cos(angle), np.sin(angle)))
    return [1 / 600] * 600, np.vstack(centres), [0.08] * 600


def choice(samples=3):
    """Squared error of a square-root-law surface over the least one, by overall bandwidth."""
    generator = np.random.default_rng(11)
    print("pattern           records  normal  squares  likelihood  geometric mean")
    for kind in PATTERNS:
        shares, centres, widths = (np.asarray(part, float) for part in mixture(kind))
        for count in (200, 2000):
            ratios = []
            for _ in range(samples):
                part = generator.choice(len(shares), count, p=shares)
                places = centres[part] + generator.normal(0, 1, (count, 2)) * widths[part, None]
                ratios.append(_errors(1000 * places, shares, 1000 * centres, 1000 * widths))
            mean = np.nanmean(ratios, axis=0)
            print(f"{kind:17s} {count:7d}" + "".join(f"{value:9.2f}" for value in mean))


def _errors(places, shares, centres, widths):
    x, y = places.T
    found = advice.advise(x, y)
    low, high = np.clip(places, -9000, 9000).min(axis=0), np.clip(places, -9000, 9000).max(axis=0)
    grid = covering((*low, *high), max(20.0, widths.min() / 4), margin=1500)
    truth = sum(
        share * adaptive_surface([own[0]], [own[1]], 1.0, width, grid)
        for share, own, width in zip(shares, centres, widths)
    )

    def error(overall):
        if not np.isfinite(overall):
            return np.nan
        own = adapt_bandwidths(x, y, 1.0, overall).bandwidths
        return ((adaptive_surface(x, y, 1 / x.size, own, grid) - truth) ** 2).sum()

    best = min(map(error, np.geomspace(found.bandwidths[0], found.bandwidths[-1], 14)))
    middle = np.sqrt(found.least_squares * found.likelihood)
    tried = (found.normal_scale, found.least_squares, found.likelihood, middle)
    return [error(value) / best for value in tried]


if __name__ == "__main__":
    choice() if sys.argv[1:] == ["choice"] else main()
