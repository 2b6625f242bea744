import time

import numpy as np
import pytest
from scipy import optimize, sparse
from steadfield.algorithms.numeric import programmes
from steadfield.algorithms.numeric.errors import CancelledError
from steadfield.algorithms.numeric.intervals import PublishedCounts, extreme, reconcile
from steadfield.algorithms.numeric.programmes import Watched, at_once


def programme(columns, rows):
    """A dense linear programme; 3000 by 1500 takes the solver several seconds."""
    generator = np.random.default_rng(1)
    matrix = sparse.random(rows, columns, 0.01, random_state=1, format="csr")
    feasible = generator.random(columns)
    return {
        "c": -generator.random(columns),
        "A_ub": matrix,
        "b_ub": matrix @ feasible,
        "bounds": (0, 10),
        "method": "highs",
    }


def silent_look():
    pass


@pytest.fixture
def hurried(monkeypatch):
    """No programme is solved in its moment, for no step of the solver fits in."""

    def limited(problem, seconds):
        return {**problem, "options": {"presolve": False, "maxiter": 0}}

    monkeypatch.setattr(programmes, "MOMENT", 0.0)
    monkeypatch.setattr(programmes, "_limited", limited)


def test_a_programme_that_moves_to_another_python_has_the_same_solution(hurried):
    problem = programme(300, 100)
    with Watched(silent_look) as solve:
        elsewhere = [solve(optimize.linprog, **problem) for _ in range(2)]
        processes = solve._executor.processes
        assert len(processes) == 1
    here = at_once(optimize.linprog, **problem)
    for result in elsewhere:
        assert result.status == 0
        assert result.x.tobytes() == here.x.tobytes()
        assert np.array_equal(result.ineqlin.marginals, here.ineqlin.marginals)
    assert all(process.poll() is not None for process in processes)


@pytest.mark.parametrize("after", [0.0, 0.6, 2.0])
def test_cancelling_stops_a_long_programme(after):
    problem = programme(3000, 1500)
    stop = time.monotonic() + after

    def look():
        if time.monotonic() > stop:
            raise CancelledError

    with pytest.raises(CancelledError), Watched(look) as solve:
        solve(optimize.linprog, **problem)
    assert time.monotonic() - stop < 0.9  # a moment, and what the machine adds
    assert solve._executor is None or solve._executor.processes[0].poll() is not None


def test_a_lost_python_gives_way_to_this_one(hurried):
    problem = programme(300, 100)
    with Watched(silent_look) as solve:
        solve(optimize.linprog, **problem)
        solve._executor.processes[0].kill()
        assert solve(optimize.linprog, must=True, **problem).status == 0


@pytest.fixture
def alone(hurried, monkeypatch):
    """No other Python can be had, and this one gives up at once."""
    monkeypatch.setattr(programmes, "real_python", lambda: None)


def test_without_another_python_a_long_programme_is_undecided_and_never_narrow(alone):
    counts = PublishedCounts(
        sparse.csr_matrix([[1, 1, 0], [0, 1, 1]]), np.array([2.0, 5.0]), np.array([2.0, 5.0])
    )
    region = np.array([False, True, False])
    with Watched(silent_look) as solve:
        most = extreme(counts, region, solve=solve)
        least = extreme(counts, region, largest=False, solve=solve)
        assert (most.value, least.value) == (np.inf, 0.0)
        assert not most.decided and not least.decided
        # what the audit cannot go on without is solved however long it takes
        assert np.array_equal(reconcile(counts, solve)[2], [0, 0])
    assert extreme(counts, region).value == 2
