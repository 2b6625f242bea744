"""How fast zonings of base units are: cost, memory, workers, and a plain networkx version.

Run by hand: python tests/bench/bench_zones.py [part ...]; parts: targets, workers, memory, cost,
plain. The plot of cost goes to build/bench_zones.png.
"""

import os
import sys
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import shapely

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))
import conftest  # noqa: F401
from steadfield.algorithms.numeric import workers
from steadfield.algorithms.numeric.builders import Recipe, build
from steadfield.algorithms.numeric.contiguity import contiguity
from steadfield.algorithms.numeric.correlation import relation, simulate_correlation
from steadfield.algorithms.numeric.growth import grown
from steadfield.algorithms.numeric.scenarios import problem
from steadfield.algorithms.numeric.zones import recipes, simulate


def world(units, seed=1):
    """A map of Voronoi cells with counts over totals."""
    generator = np.random.default_rng(seed)
    places = generator.random((units, 2)) * 1e5
    cells = shapely.voronoi_polygons(shapely.multipoints(places))
    cells = shapely.intersection(np.array([*cells.geoms]), shapely.box(0, 0, 1e5, 1e5))
    start = time.perf_counter()
    graph = contiguity(cells)
    print(f"  contiguity of {units} polygons: {time.perf_counter() - start:.2f} s")
    totals = generator.integers(200, 800, units)
    return graph, generator.binomial(totals, 0.05), totals, generator


def pair_of_rates(units):
    graph, counts, totals, generator = world(units)
    return relation(graph, counts, totals, generator.binomial(totals, 0.1), totals)


def processes():
    return workers.PipeExecutor(workers.real_python(), os.cpu_count())


def processor_seconds():
    """Of this process and of workers that have gone home."""
    used = os.times()
    return used.user + used.system + used.children_user + used.children_system


def timed(label, target, function):
    start, busy = time.perf_counter(), processor_seconds()
    function()
    wall = time.perf_counter() - start
    print(
        f"{label}: {wall:.1f} s ({target}); {processor_seconds() - busy:.1f} s of processor with "
        f"workers; machine load {os.getloadavg()[0]:.1f} on {os.cpu_count()} cores"
    )
    return wall


def targets():
    """The three targets, each with worker processes as the plugin would choose."""
    pair = pair_of_rates(100)
    timed(
        "1 000 000 zonings of 100 units, two rates, r and slope",
        "target 60 s",
        lambda: simulate_correlation(
            pair, [Recipe("grown", 10)], 1_000_000, 1, workers.local_workers
        ),
    )
    for units, zones, many, target in ((10_000, 200, 1000, 8), (100_000, 1000, 200, 30)):
        pair = pair_of_rates(units)
        timed(
            f"{many} zonings of {units} units, two rates, r and slope",
            f"target {target} s",
            lambda pair=pair, zones=zones, many=many: simulate_correlation(
                pair, [Recipe("grown", zones)], many, 1, workers.local_workers
            ),
        )
        graph, counts, totals, generator = world(units)
        made = problem(graph, counts, totals)
        plan = recipes(made, "grown", [zones], generator)
        timed(
            f"{many} zonings of {units} units, everything that is kept of a unit",
            f"target {target} s",
            lambda made=made, plan=plan, many=many: simulate(
                made, plan, many, 1, executor=workers.local_workers
            ),
        )


def compare_workers():
    """One thread, two threads, two processes, on the same work."""
    for units, zones, many in ((100, 10, 100_000), (10_000, 200, 400)):
        graph, counts, totals, generator = world(units)
        made = problem(graph, counts, totals)
        plan = recipes(made, "grown", [zones], generator)

        def run(executor, made=made, plan=plan, many=many):
            simulate(made, plan, many, 1, executor=executor)

        alone = timed(f"{many} zonings of {units} units, alone", "1", lambda: run(None))
        with ThreadPoolExecutor(2) as executor:
            threads = timed("  two threads", "", lambda executor=executor: run(executor))
        with processes() as executor:
            run_2 = timed("  two processes", "", lambda executor=executor: run(executor))
        print(f"  gain of threads {alone / threads:.2f}, of processes {alone / run_2:.2f}")


def memory():
    """Peak memory against the number of replicates, each in a Python of its own."""
    import subprocess

    code = (
        "import sys; sys.argv = ['']; sys.path.insert(0, {folder!r})\n"
        "import resource, bench_zones as b\n"
        "graph, counts, totals, generator = b.world({units})\n"
        "made = b.problem(graph, counts, totals)\n"
        "plan = b.recipes(made, 'grown', [{zones}], generator)\n"
        "b.simulate(made, plan, {many}, 1)\n"
        "print('PEAK', resource.getrusage(resource.RUSAGE_SELF).ru_maxrss // 1024)\n"
    )
    for units, zones, counts in ((100, 10, (2000, 20_000, 200_000)), (5000, 100, (50, 200, 800))):
        for many in counts:
            script = code.format(
                folder=str(Path(__file__).parent), units=units, zones=zones, many=many
            )
            done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True)
            print(f"{units} units, {many} zonings: peak {done.stdout.split()[-1]} MB")


def cost():
    """Cost of making a zoning against units, for each builder, and of replicates; a picture."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9, 4), layout="constrained")
    left, right = figure.subplots(1, 2)
    every = (100, 300, 1000, 3000, 10_000, 30_000)
    for builder, sizes in (("grown", every), ("tree-cut", every), ("balanced", every[:-1])):
        times = []
        for units in sizes:
            graph, counts, totals, generator = world(units)
            made = problem(graph, counts, totals)
            plan = recipes(made, builder, [max(5, units // 50)], generator, tolerance=0.3)
            many = max(3, min(500, 100_000 // units))
            start = time.process_time()
            build(graph, totals, plan[0], many, generator)
            times.append((time.process_time() - start) / many * 1e3)
            print(f"{builder}, {units} units: {times[-1]:.3f} ms a zoning")
        left.loglog(sizes, times, marker="o", label=builder)
    graph, counts, totals, generator = world(300)
    made = problem(graph, counts, totals)
    plan = recipes(made, "grown", [15], generator)
    many, times = (200, 1000, 5000, 25_000), []
    for replicates in many:
        start = time.process_time()
        simulate(made, plan, replicates, 1)
        times.append(time.process_time() - start)
    right.loglog(many, times, marker="o", color="#2e7179")
    left.set(xlabel="units", ylabel="milliseconds a zoning, one core")
    right.set(xlabel="zonings of 300 units", ylabel="seconds, one core")
    left.legend(frameon=False)
    folder = Path(__file__).resolve().parents[2] / "build"
    folder.mkdir(exist_ok=True)
    figure.savefig(folder / "bench_zones.png", dpi=110)


def plain():
    """The same grown zones by networkx, one zoning at a time."""
    import networkx

    for units, zones, many in ((100, 10, 2000), (10_000, 200, 10)):
        graph, _, _, generator = world(units)
        network = networkx.Graph(graph.pairs.tolist())

        def one(network=network, units=units, zones=zones, generator=generator):
            for edge in network.edges.values():
                edge["time"] = generator.exponential()
            seeds = set(generator.choice(units, zones, replace=False).tolist())
            return networkx.multi_source_dijkstra(network, seeds, weight="time")[1]

        repeats = max(3, many // 40)
        start = time.process_time()
        for _ in range(repeats):
            one()
        slow = (time.process_time() - start) / repeats
        start = time.process_time()
        grown(graph, zones, many, generator)
        fast = (time.process_time() - start) / many
        print(
            f"{units} units: networkx {slow * 1e3:.2f} ms, here {fast * 1e3:.3f} ms a zoning, "
            f"ratio {slow / fast:.0f}"
        )


PARTS = {
    "targets": targets,
    "workers": compare_workers,
    "memory": memory,
    "cost": cost,
    "plain": plain,
}

if __name__ == "__main__":
    for name in sys.argv[1:] or PARTS:
        print(f"--- {name}: {PARTS[name].__doc__}")
        PARTS[name]()
