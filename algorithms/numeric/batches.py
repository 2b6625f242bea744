"""Independent seeded batches of zonings over any executor, merged in one fixed order.

The batches, their sizes and their seeds follow from the settings alone, never from the number of
workers, and results are taken in the order of the batches; so one worker or forty give the same
result to the bit.
"""

import math
import time
from collections import deque
from concurrent.futures import TimeoutError as WaitTimeoutError
from dataclasses import dataclass

import numpy as np

from .errors import CancelledError, InputError
from .progress import part, silent
from .workers import call_watched

UNITS_A_BATCH = 400_000  # units times zonings: about a third of a second of one core
LARGEST_BATCH = 4096
WAIT = 0.15  # seconds between two looks at the cancel button


@dataclass(frozen=True)
class Batch:
    """A number of zonings of one scale, with a seed of their own.

    Attributes
    ----------
    index : int
        Place in the order of merging.
    scale : int
        Which recipe.
    replicates : int
    seed : numpy.random.SeedSequence
    """

    index: int
    scale: int
    replicates: int
    seed: np.random.SeedSequence

    def generator(self):
        return np.random.default_rng(self.seed)


def plan_batches(units, replicates, seed, efforts=None):
    """Cut the replicates of every scale into batches of even work.

    Parameters
    ----------
    units : int
    replicates : sequence of int
        Zonings of each scale.
    seed : numpy.random.SeedSequence
        Batch seeds are spawned from it by index.
    efforts : sequence of float, optional
        Work of a zoning of each scale beside that of a grown one; 1 by default.

    Returns
    -------
    list of Batch
    """
    sizes = []
    for scale, many in enumerate(replicates):
        effort = 1 if efforts is None else efforts[scale]
        size = int(max(1, min(LARGEST_BATCH, UNITS_A_BATCH // (units * effort))))
        pieces = math.ceil(many / size)
        sizes += [(scale, int(part)) for part in np.diff(np.arange(pieces + 1) * many // pieces)]
    seeds = seed.spawn(len(sizes))
    return [Batch(i, scale, many, seeds[i]) for i, (scale, many) in enumerate(sizes)]


def run_batches(function, shared, batches, executor=None, progress=silent):
    """Yield ``function(shared, batch, progress)`` of every batch, in order.

    At most a few batches more than there are workers are under way at once, so memory does not
    grow with their number. A batch whose worker was lost is worked out again, here.

    Parameters
    ----------
    function : callable
        Importable by name, so that it can be sent to a worker, which calls it without progress.
    shared : object
        What all batches need; pickled for workers outside this process.
    batches : sequence of Batch
    executor : concurrent.futures.Executor or callable, optional
        Without one the batches run here, one after the other. A callable is told, after the
        first batch, how many seconds the rest would take here, and returns an executor, which
        is shut down at the end, or None.
    progress : callable

    Yields
    ------
    object
    """
    batches = list(batches)
    if executor is None or not batches:
        yield from _run_here(function, shared, batches, progress)
        return
    if hasattr(executor, "submit"):
        yield from _run_elsewhere(function, shared, batches, executor, progress)
        return
    progress(0.0)
    start = time.perf_counter()
    first = function(shared, batches[0], part(progress, 0.0, 1 / len(batches)))
    seconds = time.perf_counter() - start
    yield first
    rest, progress = batches[1:], part(progress, 1 / len(batches), 1.0)
    chosen = call_watched(lambda: executor(seconds * len(rest)), lambda: progress(0.0), _send_home)
    if chosen is None:
        yield from _run_here(function, shared, rest, progress)
        return
    finished = False
    try:
        yield from _run_elsewhere(function, shared, rest, chosen, progress)
        finished = True
    finally:
        chosen.shutdown(wait=finished)


def _send_home(executor):
    if executor is not None:
        executor.shutdown(wait=False)


def _run_here(function, shared, batches, progress):
    for done, batch in enumerate(batches):
        stretch = part(progress, done / len(batches), (done + 1) / len(batches))
        stretch(0.0)
        yield function(shared, batch, stretch)
    progress(1.0)


def _run_elsewhere(function, shared, batches, executor, progress):
    """Yield the results in order with a few batches under way at the executor."""
    under_way = deque()
    coming = iter(batches)
    try:
        for done in range(len(batches)):
            while len(under_way) < _window(executor):
                batch = next(coming, None)
                if batch is None:
                    break
                under_way.append((batch, _submit(executor, function, shared, batch)))
            batch, future = under_way.popleft()
            stretch = part(progress, done / len(batches), (done + 1) / len(batches))
            yield _result(future, function, shared, batch, stretch)
        progress(1.0)
    finally:
        for _, future in under_way:
            if future is not None:
                future.cancel()


def _window(executor):
    """Number of batches to keep under way: two for each worker, where their number is known."""
    return 2 * int(getattr(executor, "_max_workers", 0) or 16)


def _submit(executor, function, shared, batch):
    """The future of a batch, or None when the executor takes nothing any more."""
    try:
        return executor.submit(function, shared, batch)
    except (RuntimeError, OSError):
        return None


def _result(future, function, shared, batch, progress):
    """Wait for a batch and look for cancellation meanwhile; what was lost is done here."""
    while future is not None:
        progress(0.0)
        try:
            return future.result(timeout=WAIT)
        except (InputError, CancelledError):
            raise
        except (WaitTimeoutError, TimeoutError):
            if future.done():
                break
        except (
            Exception
        ):  # the worker, not the work, failed: an error of the work comes again below
            break
    progress(0.0)
    return function(shared, batch, progress)
