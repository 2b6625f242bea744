"""Simulations behind the figures that reports and help pages give of their own reliability.

    python tests/bench/bench_claims.py error      intervals of a density, by place and adaptation
    python tests/bench/bench_claims.py outlines   what outlines hold of new records
    python tests/bench/bench_claims.py verdicts   what is called settled on maps of pure noise
    python tests/bench/bench_claims.py cores      unrelated layers, edges corrected and not

Each takes about a minute or two of processor time; without a word all of them run.
"""

import sys
from pathlib import Path

import numpy as np
import shapely
from scipy.ndimage import gaussian_filter

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import conftest  # noqa: F401
from steadfield.algorithms.numeric import advice, edges, lattice_variance, shifts, variance
from steadfield.algorithms.numeric.adaptation import adapt_bandwidths
from steadfield.algorithms.numeric.agreement import cores
from steadfield.algorithms.numeric.cell_size import sizes_for_zonings
from steadfield.algorithms.numeric.estimate import estimate
from steadfield.algorithms.numeric.grid import Grid, covering
from steadfield.algorithms.numeric.ground import ground
from steadfield.algorithms.numeric.outlines import density_levels
from steadfield.algorithms.numeric.ranks import mass_rank
from steadfield.algorithms.numeric.surface import adaptive_surface

# three quarters of a town 6 km wide: middles and spreads in metres
MIDDLES = np.array([[2000.0, 2000.0], [4200.0, 3800.0], [1500.0, 4800.0]])
SPREADS = np.array([350.0, 600.0, 300.0])
SIDE = 6000.0


def town(count, generator):
    """Places of which six in ten lie in the quarters, (count, 2) array."""
    quarter = generator.integers(0, 3, count)
    clustered = MIDDLES[quarter] + generator.normal(size=(count, 2)) * SPREADS[quarter, None]
    anywhere = generator.uniform(0, SIDE, (count, 2))
    places = np.where(generator.random(count)[:, None] < 0.6, clustered, anywhere)
    return np.clip(places, 0.0, SIDE - 1.0)


def error(runs=200):
    """Error over spread, and how often d exp(±1.96 error) holds the mean of all simulations."""
    grid = Grid(0.0, SIDE, 100.0, 60, 60)
    mask = edges.boundary_mask(shapely.box(0, 0, SIDE, SIDE), grid)
    pixels = {"dense": (39, 20), "skirt": (22, 33), "thin": (50, 50), "border": (30, 59)}
    for adapt in (0.0, 0.5, 1.0):
        generator = np.random.default_rng(1)
        density, relative = [], []
        for _ in range(runs):
            x, y = town(generator.poisson(600), generator).T
            adapted = adapt_bandwidths(x, y, np.ones(x.size), 350.0, adapt, mask=mask, grid=grid)
            widths = np.maximum(adapted.bandwidths, grid.cell)
            found = estimate(
                x, y, 1.0, widths, grid, mask=mask, edge="place", inflation=adapted.inflation
            )
            density.append([found.density[place] for place in pixels.values()])
            relative.append([found.relative_error[place] for place in pixels.values()])
        density, relative = np.array(density), np.array(relative)
        middle = density.mean(axis=0)
        ratio = np.sqrt(np.square(relative * density).mean(axis=0)) / density.std(axis=0)
        held = (np.abs(np.log(density / middle)) <= 1.96 * relative).mean(axis=0)
        for place, name in enumerate(pixels):
            print(
                f"adapt {adapt:.1f} {name:7} error {np.median(relative[:, place]):.2f}, over the "
                f"spread {ratio[place]:.2f}; interval holds {held[place]:.0%}"
            )


def outlines(runs=6):
    """Share of new records inside outlines of 50 and 90 %, with advised and normal-scale widths."""
    generator = np.random.default_rng(2)
    for count in (200, 2000):
        inside = {}
        for _ in range(runs):
            records, later = town(count, generator), town(20_000, generator)
            advised = advice.advise(*records.T)
            grid = covering((-1500.0, -1500.0, SIDE + 1500, SIDE + 1500), 50.0)
            for name in ("advised", "normal_scale"):
                widths = adapt_bandwidths(*records.T, np.ones(count), getattr(advised, name))
                density = adaptive_surface(
                    *records.T, 1.0, np.maximum(widths.bandwidths, 50.0), grid
                )
                for level in density_levels(density, [0.5, 0.9]):
                    kept = density >= level.threshold
                    for whose, places in (("new", later), ("own", records)):
                        row, column, _ = grid.pixels(*places.T)
                        held = kept[row, column].mean()
                        inside.setdefault((name, level.share, whose), []).append(held)
        for (name, share, whose), held in inside.items():
            print(f"{count} records, {name}: {share:.0%} holds {np.mean(held):.1%} of {whose}")


def verdicts(runs=24):
    """Share of the ground called settled, and of maps with any such place, when risk is even."""
    generator = np.random.default_rng(3)
    ways = np.arange(150.0, SIDE, 300.0)
    places = [values.ravel() for values in np.meshgrid(ways, ways)]
    noises = {
        "independent events": lambda count, risk: generator.poisson(risk, count),
        "a tenth with all of them": lambda count, risk: generator.poisson(
            risk * 10 * (generator.random(count) < 0.1)
        ),
    }
    for name, draw in noises.items():
        for risk in (0.05, 0.2):
            settled, plain = [], []
            for run in range(runs):
                x, y = town(8000, generator).T
                events = draw(8000, risk).astype(float)
                own = events > 0
                points = x[own], y[own], events[own]
                least = 5 * 8000 / events.sum()
                study = ground(points, (x, y, np.ones(8000)), places, "rate", None, least)
                sizes = sizes_for_zonings(*points, SIDE**2, generator)
                scales = lattice_variance.run_scales(study, sizes, "hexagon", 30, run)
                _, above, evidence, covered = lattice_variance.decompose_scales(scales)
                code = variance.verdict(above, evidence, covered)
                known = ~np.isnan(code)
                settled.append(np.mean(code[known] != 0))
                plain.append(np.mean((above[known] >= 0.95) | (above[known] <= 0.05)))
            print(
                f"{name}, {risk} a person: settled {np.mean(settled):.2%} of the ground, at most "
                f"{np.max(settled):.1%}; maps with any {np.mean(np.array(settled) > 0):.0%}; by "
                f"p_above alone {np.mean(plain):.0%}"
            )


def cores_of_unrelated_layers(runs=400):
    """How often two even patterns pass as meeting more than chance at 5 %."""
    generator = np.random.default_rng(4)
    reach = gaussian_filter(np.ones((64, 64)), 3, mode="constant")
    for name, share in (("corrected", reach), ("not corrected", 1.0)):
        passed = 0
        for _ in range(runs):
            counts = generator.poisson(0.1, (2, 64, 64)).astype(float)
            surfaces = [gaussian_filter(one, 3, mode="constant") / share for one in counts]
            inside = cores(np.array([mass_rank(one) for one in surfaces]), 0.5)
            passed += shifts.shift_test(*inside).p_value <= 0.05
        print(f"edges {name}: {passed / runs:.1%} at 5 %")


PARTS = {
    "error": error,
    "outlines": outlines,
    "verdicts": verdicts,
    "cores": cores_of_unrelated_layers,
}

if __name__ == "__main__":
    for wanted in sys.argv[1:] or PARTS:
        PARTS[wanted]()
