"""Linear and whole-number programmes that can be stopped.

The solver holds Python's lock until it is done, so nothing sees a cancel button meanwhile. Here
a programme gets a moment only; one that needs longer is begun again in another Python, which can
be waited for and ended. The solution is the same wherever it is found.
"""

import math
import time
from concurrent.futures import TimeoutError as WaitTimeoutError

from .workers import PipeExecutor, call_watched, real_python

MOMENT = 0.25  # seconds that the solver may hold the lock
LONGEST_HERE = 5.0  # where no other Python can be had; then the programme stays undecided
BETWEEN_LOOKS = 0.1


def at_once(function, must=False, **problem):
    """Solve a programme here, however long it takes."""
    return function(**problem)


class Watched:
    """Solves programmes as :func:`at_once` does, and looks for cancellation meanwhile.

    To be used in a ``with`` statement, whose end sends the other Python home.

    Parameters
    ----------
    look : callable
        Takes nothing; raises ``CancelledError`` when the user asked to stop.
    """

    def __init__(self, look):
        self._look = look
        self._seen = 0.0
        self._executor = None
        self._alone = False
        self._long = math.inf  # unknowns of the smallest programme that took longer than a moment

    def __enter__(self):
        return self

    def __exit__(self, *error):
        if self._executor is not None:
            self._executor.shutdown(wait=False)

    def __call__(self, function, must=False, **problem):
        """Solve a programme.

        Parameters
        ----------
        function : callable
            ``scipy.optimize.linprog`` or ``scipy.optimize.milp``.
        must : bool
            Never give up; otherwise a programme that takes long where no other Python can be
            had comes back unsolved, with status 1.
        **problem
            Its arguments.

        Returns
        -------
        scipy.optimize.OptimizeResult
        """
        if time.monotonic() - self._seen > BETWEEN_LOOKS:
            self.look()
        size = len(problem["c"])
        if self._executor is None or size < self._long:
            start = time.monotonic()
            result = function(**_limited(problem, MOMENT))
            if result.status != 1 or time.monotonic() - start < 0.9 * MOMENT:
                return result
            self._long = min(self._long, size)
            self.look()
        try:
            return self._elsewhere(function, problem)
        except (OSError, RuntimeError):
            self._alone = True
        return function(**(problem if must else _limited(problem, LONGEST_HERE)))

    def look(self):
        self._look()
        self._seen = time.monotonic()

    def _elsewhere(self, function, problem):
        if self._alone:
            raise OSError("no other Python can be had")
        if self._executor is None:
            self._executor = call_watched(_start, self.look, _send_home)
        solved = self._executor.submit(solve, function, problem)
        while True:
            self.look()
            try:
                return solved.result(timeout=BETWEEN_LOOKS)
            except (WaitTimeoutError, TimeoutError):
                if solved.done():
                    raise


def solve(function, problem):
    """Runs in the other Python."""
    return function(**problem)


def _limited(problem, seconds):
    return {**problem, "options": {**problem.get("options", {}), "time_limit": seconds}}


def _start():
    python = real_python()
    if python is None:
        raise OSError("no other Python can be had")
    return PipeExecutor(python, 1)


def _send_home(executor):
    executor.shutdown(wait=False)
