"""Time, error and memory of the density engine, as ratios.

    python tests/bench/bench_surface.py          a million records on 2048 x 2048 pixels
    python tests/bench/bench_surface.py cost     cost against records and against pixels (minutes)
    python tests/bench/bench_surface.py cost 6   the same with 10^6 records and pixels at the most

The measure is one fixed-bandwidth convolution (scipy.fft forward and back) of the same padded grid
plus one spreading of the records. Processor seconds of all cores together are compared, because
other programs hardly disturb them; wall seconds stand beside them.
"""

import os
import sys
import time
from pathlib import Path

import numpy as np
from scipy import fft

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import conftest  # noqa: F401
from steadfield.algorithms.numeric import spectrum, spreading, surface
from steadfield.algorithms.numeric.grid import Grid


def peak_memory():
    """Most memory that this process has held, GB."""
    import resource

    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6


def seconds(function, times=3):
    """Least processor seconds and least wall seconds of a call."""
    found = []
    for _ in range(times):
        wall, cores = time.perf_counter(), time.process_time()
        function()
        found.append((time.process_time() - cores, time.perf_counter() - wall))
    return np.min(found, axis=0)


def pattern(records, pixels, narrowest, widest, seed=1):
    """Clustered records on a square grid of 1 m pixels, bandwidths even on a logarithmic scale."""
    rng = np.random.default_rng(seed)
    centres = rng.uniform(0.2, 0.8, (40, 2)) * pixels
    places = centres[rng.integers(0, 40, records)] + rng.normal(0, pixels / 16, (records, 2))
    bandwidths = np.exp(rng.uniform(np.log(narrowest), np.log(widest), records))
    return places[:, 0], places[:, 1], 1.0, bandwidths, Grid(0, pixels, 1.0, pixels, pixels)


def convolution(period):
    """Seconds of one real transform of the padded grid, forward and back."""
    lattice = np.random.default_rng(2).random(period)

    def there_and_back():
        fft.irfft2(fft.rfft2(lattice, workers=2), s=period, workers=2)

    return seconds(there_and_back)


def one_spreading(case, period):
    """Seconds of spreading the records once over the padded grid."""
    x, y, _, bandwidths, grid = case
    row, column, _ = surface.in_pixels(x, y, bandwidths, grid)
    ones = np.ones((len(x), 1))
    return seconds(lambda: spreading.spread(row % period[0], column % period[1], ones, period))


def error_of(case, kernel, found):
    """Largest error over the peak at 500 random pixels and the 100 densest.

    At fewer, in that ratio, where the direct sum would take more than 3e8 kernels.
    """
    few = max(2, min(100, 50_000_000 // len(case[0])))
    densest = np.argsort(found.ravel())[-few:]
    others = np.random.default_rng(3).integers(0, found.size, 5 * few)
    pixels = np.unravel_index(np.concatenate([densest, others]), found.shape)
    exact = surface.direct_surface(*case, kernel, pixels=pixels)
    return np.abs(found[pixels] - exact).max() / exact.max()


def measure(records, pixels, narrowest, widest, kernel="gaussian"):
    """Print one line; returns the ratio of processor seconds."""
    case = pattern(records, pixels, narrowest, widest)
    found = surface.adaptive_surface(*case, kernel)
    own = seconds(lambda: surface.adaptive_surface(*case, kernel))
    x, y, _, bandwidths, grid = case
    period = spectrum.plan(*surface.in_pixels(x, y, bandwidths, grid), grid.shape).period
    base = convolution(period) + one_spreading(case, period)
    error = error_of(case, kernel, found)
    print(
        f"{kernel:9} {records:9,} records, {pixels} x {pixels} pixels, bandwidths {narrowest} to "
        f"{widest} pixels: {own[0]:.2f} s processor ({own[1]:.2f} s wall), ratio "
        f"{own[0] / base[0]:.2f} (wall {own[1] / base[1]:.2f}), error {error:.1e} of "
        f"the peak, memory {peak_memory():.2f} GB",
        flush=True,
    )
    return own[0]


def cost(largest):
    """Cost against records and against pixels, as a table and, with matplotlib, a plot.

    largest: power of ten of the most records, and of the most pixels, up to 4096 x 4096.
    """
    by_records = [
        (n, measure(n, min(1024, int(10 ** (largest / 2))), 3, 50))
        for n in (10**k for k in range(3, largest + 1))
    ]
    by_pixels = [
        (p * p, measure(10 ** min(5, largest), p, 3, 50))
        for p in (128, 256, 512, 1024, 2048, 4096)
        if p * p <= 1.8 * 10**largest
    ]
    try:
        import matplotlib
    except ImportError:
        return
    matplotlib.use("Agg")
    from matplotlib import pyplot

    figure, axes = pyplot.subplots(1, 2, figsize=(9, 4), layout="constrained")
    for panel, found, label in zip(axes, (by_records, by_pixels), ("records", "pixels")):
        sizes, times = np.transpose(found)
        panel.loglog(sizes, times, "o-", color="#1d4763")
        panel.loglog(sizes, times[-1] * sizes / sizes[-1], ":", color="#8a5a1c", label="linear")
        panel.set_xlabel(label)
        panel.set_ylabel("processor seconds")
        panel.legend(frameon=False)
    target = Path(__file__).resolve().parents[2] / "build" / "cost_of_a_surface.png"
    os.makedirs(target.parent, exist_ok=True)
    figure.savefig(target, dpi=120)
    print(f"plot in build/{target.name}")


if __name__ == "__main__":
    if "cost" in sys.argv[1:]:
        cost(int(sys.argv[2]) if len(sys.argv) > 2 else 7)
    else:
        for narrowest, widest in ((4, 60), (2, 100), (10, 500)):
            measure(1_000_000, 2048, narrowest, widest)
        measure(1_000_000, 2048, 4, 60, "quartic")
