import base64
import io
import os
import pickle
import signal
import subprocess
import sys
import threading
import time
import zipfile
from concurrent.futures import Executor, Future, ThreadPoolExecutor

import numpy as np
import pytest
from steadfield.algorithms.numeric import workers
from steadfield.algorithms.numeric.allocation import check_budget
from steadfield.algorithms.numeric.batches import plan_batches, run_batches
from steadfield.algorithms.numeric.contiguity import from_pairs
from steadfield.algorithms.numeric.correlation import relation, simulate_correlation
from steadfield.algorithms.numeric.errors import CancelledError, InputError
from steadfield.algorithms.numeric.progress import part, silent
from steadfield.algorithms.numeric.scenarios import problem
from steadfield.algorithms.numeric.zones import recipes, simulate


def a_problem(side=8, budget=0.2):
    index = np.arange(side * side).reshape(side, side)
    pairs = np.r_[
        np.c_[index[:, :-1].ravel(), index[:, 1:].ravel()],
        np.c_[index[:-1].ravel(), index[1:].ravel()],
    ]
    generator = np.random.default_rng(1)
    totals = generator.integers(50, 150, side * side)
    counts = generator.binomial(totals, 0.1)
    graph = from_pairs(side * side, pairs)
    return problem(graph, counts, totals, budget=budget, generator=generator)


def simulated(executor, replicates=9000):
    made = a_problem()
    plan = recipes(made, "grown", [5, 12], np.random.default_rng(2))
    return simulate(made, plan, replicates, 3, executor=executor)


def bits(simulation):
    """Every array of a simulation, as bytes."""
    arrays = [simulation.value_bins.counts, simulation.rank_bins.counts]
    arrays += [simulation.largest.labels, simulation.smallest.labels]
    arrays += [simulation.allocation.scenarios, np.array(simulation.allocation.averaged)]
    for scale in simulation.scales:
        arrays += [scale.moments.mean, scale.moments.squares, scale.counting.mean]
        arrays += [scale.tally.above, scale.tally.evidence, scale.statistics]
    return [array.tobytes() for array in arrays]


@pytest.fixture(scope="module")
def alone():
    return bits(simulated(None))


def test_batches_cover_all_replicates_whatever_their_number():
    batches = plan_batches(100, [10_000, 1, 7], np.random.SeedSequence(0))
    made = [sum(b.replicates for b in batches if b.scale == scale) for scale in range(3)]
    assert made == [10_000, 1, 7]
    assert len({b.seed.spawn_key for b in batches}) == len(batches)


@pytest.mark.parametrize("threads", [1, 4])
def test_threads_give_the_same_bits_as_working_alone(alone, threads):
    with ThreadPoolExecutor(threads) as executor:
        assert bits(simulated(executor)) == alone


@pytest.mark.parametrize("processes", [1, 4])
def test_worker_processes_give_the_same_bits_as_working_alone(alone, processes):
    with workers.PipeExecutor(workers.real_python(), processes) as executor:
        assert bits(simulated(executor)) == alone
    assert all(process.poll() is not None for process in executor.processes)


def test_workers_chosen_on_the_way_give_the_same_bits(alone):
    told = []

    def choose(seconds):
        told.append(seconds)
        return ThreadPoolExecutor(2)

    assert bits(simulated(choose)) == alone
    assert len(told) == 1 and told[0] > 0


def test_killed_worker_processes_lose_nothing(alone):
    executor = workers.PipeExecutor(workers.real_python(), 2)
    seen = []

    class Watched(Executor):
        _max_workers = 2

        def submit(self, function, /, *arguments):
            seen.append(1)
            if len(seen) == 3:
                executor.processes[0].kill()
            if len(seen) == 5:
                executor.processes[1].kill()
            return executor.submit(function, *arguments)

    assert bits(simulated(Watched())) == alone
    executor.shutdown()


class Forgetful(Executor):
    """Loses every second task, as a pool does whose workers die."""

    def __init__(self):
        self.tasks = 0

    def submit(self, function, /, *arguments):
        self.tasks += 1
        future = Future()
        if self.tasks % 2:
            future.set_exception(ConnectionError("gone"))
        else:
            future.set_result(function(*arguments))
        return future


def test_lost_tasks_are_worked_out_here(alone):
    assert bits(simulated(Forgetful())) == alone


def double(shared, batch, progress=silent):
    return shared * batch.replicates


def fails(shared, batch, progress=silent):
    raise InputError("COUNT: not like this")


def test_an_error_of_the_work_is_raised_as_it_is():
    batches = plan_batches(10, [5], np.random.SeedSequence(0))
    with ThreadPoolExecutor(1) as executor, pytest.raises(InputError, match="not like this"):
        list(run_batches(fails, 1, batches, executor))


@pytest.mark.parametrize("threads", [0, 2])
def test_cancelling_stops_within_a_batch(threads):
    batches = plan_batches(10**6, [50], np.random.SeedSequence(0))
    done = []

    def progress(share):
        if len(done) >= 4:
            raise CancelledError

    executor = ThreadPoolExecutor(threads) if threads else None
    with pytest.raises(CancelledError):
        done.extend(run_batches(double, 2, batches, executor, progress))
    assert len(done) == 4
    if executor:
        executor.shutdown()


def waits(shared, batch, progress=silent):
    """A batch of half a minute that looks for cancellation, as the ones that make zones do."""
    for step in range(3000):
        progress(step / 3000)
        time.sleep(0.01)


class Refusing(Executor):
    """Takes nothing any more, as a pool does that was shut down."""

    def submit(self, function, /, *arguments):
        raise RuntimeError("shut down")


class CancelAfter:
    """A progress callable that asks to stop after some seconds and notes how long that takes."""

    def __init__(self, seconds):
        self.shares = []
        self.stop = time.monotonic() + seconds

    def __call__(self, share):
        self.shares.append(share)
        if time.monotonic() > self.stop:
            raise CancelledError

    def delay(self):
        return time.monotonic() - self.stop


@pytest.mark.parametrize("place", ["here", "first batch", "lost"])
def test_cancelling_stops_midway_in_a_batch_that_runs_here(place):
    batches = plan_batches(10**6, [3], np.random.SeedSequence(0))
    cancel = CancelAfter(0.3)
    executor = {"here": None, "first batch": lambda seconds: None, "lost": Refusing()}[place]
    with pytest.raises(CancelledError):
        list(run_batches(waits, 1, batches, executor, cancel))
    assert cancel.delay() < 0.5
    assert max(cancel.shares) > 0 and sorted(cancel.shares) == cancel.shares


def test_cancelling_stops_while_workers_are_chosen_and_sends_them_home():
    batches = plan_batches(10**6, [3], np.random.SeedSequence(0))
    sent_home = threading.Event()

    class Late(ThreadPoolExecutor):
        def shutdown(self, wait=True, *, cancel_futures=False):
            sent_home.set()
            super().shutdown(wait)

    def choose(seconds):
        time.sleep(1.0)
        return Late(1)

    cancel = CancelAfter(0.3)
    with pytest.raises(CancelledError):
        list(run_batches(double, 1, batches, choose, cancel))
    assert cancel.delay() < 0.5
    assert sent_home.wait(5)


class Sleep:
    """Takes a worker half a minute to unpack."""

    def __reduce__(self):
        return time.sleep, (30,)


def test_cancelling_ends_worker_processes_midway_in_a_batch():
    executors = []

    def choose(seconds):
        executors.append(workers.PipeExecutor(workers.real_python(), 1))
        return executors[0]

    batches = plan_batches(10**6, [3], np.random.SeedSequence(0))
    cancel = CancelAfter(1.0)
    with pytest.raises(CancelledError):
        list(run_batches(part, Sleep(), batches, choose, cancel))  # part: a worker can import it
    assert cancel.delay() < 0.5
    assert all(process.poll() is not None for process in executors[0].processes)


def test_few_batches_are_under_way_at_once():
    counted = {"now": 0, "most": 0}
    lock = threading.Lock()

    class Counting(ThreadPoolExecutor):
        def submit(self, function, /, *arguments):
            with lock:
                counted["now"] += 1
                counted["most"] = max(counted["most"], counted["now"])
            return super().submit(function, *arguments)

    batches = plan_batches(10**6, [60], np.random.SeedSequence(0))
    with Counting(2) as executor:
        for _ in run_batches(double, 2, batches, executor):
            counted["now"] -= 1
    assert counted["most"] <= 5


def test_a_real_python_answers_and_is_never_an_unknown_program(tmp_path, monkeypatch):
    found = workers.real_python()
    assert os.path.basename(found).startswith("python")
    answer = subprocess.run([found, "-c", "print(6 * 7)"], capture_output=True, text=True)
    assert answer.stdout.strip() == "42"
    # a program that hosts this Python is named otherwise and must not be run even to ask
    mark = tmp_path / "was_started"
    host = tmp_path / "desktop"
    host.write_text(f"#!/bin/sh\ntouch {mark}\n")
    host.chmod(0o755)
    monkeypatch.setattr(sys, "executable", str(host))
    for name in ("prefix", "exec_prefix", "base_prefix"):
        monkeypatch.setattr(sys, name, str(tmp_path))
    assert workers.real_python() is None
    assert not mark.exists()
    # and one that is named like a Python but is none answers wrongly and is not used
    (tmp_path / "bin").mkdir()
    fake = tmp_path / "bin" / "python3"
    fake.write_text("#!/bin/sh\necho hello\n")
    fake.chmod(0o755)
    assert workers.real_python() is None


def test_short_work_starts_no_processes(monkeypatch):
    monkeypatch.setattr(workers, "real_python", lambda: pytest.fail("asked for no reason"))
    assert workers.local_workers(1.0) is None


def ask_elsewhere(*archives):
    """Send one question with each archive to a bare Python; returns what it prints."""
    code = "\n".join(
        [
            "import base64, pickle, sys",
            workers.ARRIVAL,
            "for line in sys.stdin:",
            "    archive, payload = map(base64.b64decode, line.split())",
            f"    answer = steadfield_arrival(archive, {workers.CORE!r}, payload)",
            "    print(pickle.loads(answer))",
        ]
    )
    payload = base64.b64encode(pickle.dumps((check_budget, (0.25,)))).decode()
    lines = [f"{base64.b64encode(archive).decode()} {payload}\n" for archive in archives]
    answer = subprocess.run(
        [workers.real_python(), "-c", code],
        input="".join(lines),
        capture_output=True,
        text=True,
        cwd="/",
    )
    return answer.stdout.split() or answer.stderr


def test_the_core_travels_to_a_python_that_does_not_have_it():
    assert ask_elsewhere(workers.core_archive(), workers.core_archive()) == ["0.25", "0.25"]


def test_a_worker_never_computes_with_an_older_core():
    old = workers.core_archive()
    source = zipfile.ZipFile(io.BytesIO(old))
    changed = io.BytesIO()
    with zipfile.ZipFile(changed, "w") as archive:
        for name in source.namelist():
            text = source.read(name)
            if name.endswith("allocation.py"):
                text = text.replace(b"    return budget\n", b"    return budget * 2\n")
            archive.writestr(name, text)
    assert ask_elsewhere(old, changed.getvalue()) == ["0.25", "0.5"]


def test_without_the_scheduler_package_the_message_says_what_to_install(monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(InputError, match=r"pip install\s+distributed"):
        workers.SchedulerExecutor("tcp://127.0.0.1:1")


def test_an_address_where_nothing_answers_is_refused_in_words():
    pytest.importorskip("distributed")
    with pytest.raises(InputError, match="no Dask scheduler answers at"):
        workers.SchedulerExecutor("tcp://127.0.0.1:9", seconds=0.5)


def test_a_scheduler_gives_the_same_bits_even_when_a_worker_is_killed_half_way(alone, tmp_path):
    distributed = pytest.importorskip("distributed")
    with distributed.LocalCluster(
        n_workers=2,
        threads_per_worker=1,
        processes=True,
        dashboard_address=None,
        local_directory=str(tmp_path),
        silence_logs=60,
    ) as cluster:
        executor = workers.SchedulerExecutor(cluster.scheduler_address)
        assert bits(simulated(executor)) == alone
        killed = []

        class Watched(Executor):
            _max_workers = 2

            def submit(self, function, /, *arguments):
                killed.append(1)
                if len(killed) == 3:
                    victim = next(iter(cluster.workers.values())).pid
                    os.kill(victim, signal.SIGKILL)
                return executor.submit(function, *arguments)

        assert bits(simulated(Watched())) == alone
        assert len(killed) > 3
        made = a_problem(budget=None)
        pair = relation(made.graph, made.counts, made.totals, made.counts[::-1], made.totals)
        plan = recipes(made, "tree-cut", [8], np.random.default_rng(2))
        here, there = (
            simulate_correlation(pair, plan, 500, 4, executor=place) for place in (None, executor)
        )
        assert here.scenarios[0].tobytes() == there.scenarios[0].tobytes()
        executor.shutdown()
