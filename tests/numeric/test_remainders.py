import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import sparse
from scipy.optimize import OptimizeResult

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

from differencing_reference import all_tables, disclosed_unions
from steadfield.algorithms.numeric.crossings import Network, two_families
from steadfield.algorithms.numeric.errors import CancelledError
from steadfield.algorithms.numeric.intervals import PublishedCounts, reconcile
from steadfield.algorithms.numeric.joint import small_atoms
from steadfield.algorithms.numeric.remainders import disclosing, search

LIMIT = 100_000


def statement(generator, count, style, least_count):
    """What a table of one of four styles says about a true count."""
    if style == "exact":
        return count, count
    if style == "rounded":
        base = int(generator.integers(2, 5))
        shown = count // base * base
        shown += base if generator.random() < (count % base) / base else 0
        return max(0, shown - base + 1), shown + base - 1
    if style == "withheld":
        return (count, count) if generator.random() < 0.6 else (0, np.inf)
    return (count, count) if count >= least_count or count == 0 else (1, least_count - 1)


def random_publication(seed, tables, gaps=True):
    """Random zonings of a few atoms, published in random styles, often with a grand total."""
    generator = np.random.default_rng(seed)
    atoms, least_count = int(generator.integers(3, 7)), int(generator.integers(2, 6))
    truth = generator.integers(0, generator.integers(2, 6), atoms)
    rows, source, lower, upper = [], [], [], []
    for table in range(tables):
        number = int(generator.integers(2, atoms + 1))
        zone = generator.integers(-1 if gaps and generator.random() < 0.3 else 0, number, atoms)
        style = generator.choice(["exact", "rounded", "withheld", "announced"])
        for one in np.unique(zone[zone >= 0]):
            rows.append(zone == one)
            source.append(table)
            low, high = statement(generator, int(truth[zone == one].sum()), style, least_count)
            lower.append(low)
            upper.append(high)
    if generator.random() < 0.5:
        rows.append(np.ones(atoms, bool))
        source.append(tables)
        lower.append(truth.sum())
        upper.append(truth.sum())
    membership = np.array(rows).astype(np.int64)
    seen = membership.any(axis=0)
    counts = PublishedCounts(
        sparse.csr_matrix(membership[:, seen]), np.array(lower, float), np.array(upper, float)
    )
    return counts, np.array(source), truth[seen], least_count


def enumerable(counts, truth, least_count):
    """All tables, or None where there are too many; endless counts go beyond every threshold."""
    ceiling = int(max(truth.sum() + 2, least_count + 1))
    if (ceiling + 1) ** counts.atoms > LIMIT:
        return None
    return all_tables(counts.membership.toarray(), counts.lower, counts.upper, ceiling)


def compare(counts, source, truth, least_count, table):
    """Audit one publication and hold it against the enumeration; returns what was disclosed."""
    tables = enumerable(counts, truth, least_count)
    if tables is None:
        return None
    certain, at_most, intervals, empty = disclosed_unions(
        counts.membership.toarray(), counts.lower, counts.upper, tables, least_count
    )
    findings, undecided, method = search(counts, source, least_count, table, 10_000)
    risks, doubtful = disclosing(counts, counts, findings, least_count)
    assert not len(undecided) and not len(doubtful)
    known_empty = set().union(*(finding.unknowns for finding in findings if finding.upper == 0))
    assert known_empty == empty if method == "network" else known_empty <= empty
    risks = [risk for risk in risks if risk.upper > 0]
    for risk in risks:
        assert (risk.lower, risk.upper) == intervals[risk.unknowns]
    found = {risk.unknowns - empty for risk in risks if risk.lower >= 1}
    whole_range = (1, least_count - 1)
    assert all(intervals[union] == whole_range for union in found - certain)
    assert found or not certain
    for atom in at_most:
        assert any(atom <= risk.unknowns for risk in risks)
    if not certain and not at_most:
        assert all(intervals[risk.unknowns] == whole_range for risk in risks)
    return bool(certain), bool(at_most), method


@pytest.mark.parametrize("seed", range(6))
def test_two_crossing_tables_are_audited_as_by_enumeration(seed):
    outcomes = set()
    for case in range(40):
        counts, source, truth, least_count = random_publication(1000 * seed + case, 2)
        table = truth.astype(float) if case % 2 else np.round(reconcile(counts)[1])
        outcomes.add(compare(counts, source, truth, least_count, table))
    assert {(True, False, "network"), (False, False, "network")} <= outcomes


def three_crossing_tables():
    for seed in range(2000):
        counts, source, truth, least_count = random_publication(50_000 + seed, 3, gaps=False)
        if two_families(counts.membership) is None:
            yield counts, source, truth, least_count


def test_three_crossing_tables_are_audited_as_by_enumeration():
    outcomes, tried = set(), 0
    for case, (counts, source, truth, least_count) in enumerate(three_crossing_tables()):
        table = truth.astype(float) if case % 2 else None
        outcome = compare(counts, source, truth, least_count, table)
        outcomes.add(outcome)
        tried += outcome is not None
        if tried == 25:
            break
    assert {(True, False, "programmes"), (False, False, "programmes")} <= outcomes


@pytest.mark.parametrize("seed", range(3))
def test_every_bound_of_the_network_is_the_largest_of_all_tables(seed):
    tried = 0
    for case in range(60):
        counts, _, truth, least_count = random_publication(7000 + 100 * seed + case, 2)
        tables = enumerable(counts, truth, least_count)
        if tables is None:
            continue
        tried += 1
        network = Network(counts, two_families(counts.membership), truth.astype(float))
        most = tables.max(axis=0)
        for atom in range(counts.atoms):
            side, at_goal = network.raise_to(atom, least_count)
            assert network.flow[atom] >= least_count or network.flow[atom] == most[atom]
            assert counts.holds(np.array(network.flow[: counts.atoms]))
            if network.flow[atom] < least_count:
                cut = network.cut_of(side, at_goal)
                covered = counts.membership.T @ np.bincount(cut.added, minlength=counts.rows)
                covered -= counts.membership.T @ np.bincount(cut.subtracted, minlength=counts.rows)
                assert sorted(cut.atoms) == np.flatnonzero(covered).tolist()
                assert set(covered) <= {0, 1}
                assert atom in cut.atoms
    assert tried > 20


def test_zones_are_divided_into_two_families_exactly_when_that_is_possible():
    nested = sparse.csr_matrix([[1, 1, 1, 1], [1, 1, 0, 0], [0, 1, 1, 0], [0, 0, 1, 0]])
    family = two_families(nested)
    assert family[1] != family[2]
    triangle = sparse.csr_matrix([[1, 1, 0], [0, 1, 1], [1, 0, 1]])
    assert two_families(triangle) is None


def test_whole_number_reasoning_goes_beyond_the_linear_programme():
    """x1 + x2, x2 + x3 and x1 + x3 at most 1 each: 1.5 in all by halves, 1 in whole numbers."""
    membership = sparse.csr_matrix(
        [[1, 1, 0, 0], [0, 1, 1, 0], [1, 0, 1, 0], [1, 1, 1, 1], [0, 0, 0, 1]]
    )
    counts = PublishedCounts(
        membership, np.array([0, 0, 0, 12, 10.0]), np.array([1, 1, 1, 12.0, 20])
    )
    tables = all_tables(membership.toarray(), counts.lower, counts.upper, 20)
    assert tables[:, 3].min() == 11
    found, undecided = small_atoms(counts, 12, None)
    assert {one.atom: one.upper for one in found if one.atom == 3}.get(3, 12) == tables[:, 3].max()
    assert not len(undecided)


def test_a_search_that_runs_out_of_effort_names_what_it_left_open():
    counts, _, truth, least_count = next(
        case for case in three_crossing_tables() if case[2].max() < case[3]
    )
    found, undecided = small_atoms(counts, least_count, truth.astype(float), effort=0)
    assert len(found) + len(undecided) == counts.atoms and len(undecided)


def test_programmes_left_unsolved_never_make_a_disclosing_publication_clean():
    refusing = np.random.default_rng(12)
    left_out = 0

    def solve(function, must=False, **problem):
        if not must and refusing.random() < share:
            return OptimizeResult(status=1, x=None, fun=None, message="Time limit reached.")
        return function(**problem)

    for number, (counts, source, truth, least_count) in enumerate(three_crossing_tables()):
        share = (0.1, 0.5, 1.0)[number % 3]
        if number == 30:
            break
        table = truth.astype(float) if number % 2 else None
        found, _, _ = search(counts, source, least_count, table, 1000)
        disclosed = disclosing(counts, counts, found, least_count)[0]
        fewer, undecided, _ = search(counts, source, least_count, table, 1000, solve=solve)
        risks, doubtful = disclosing(counts, counts, fewer, least_count, solve)
        known = set(undecided.tolist()) | set(doubtful.tolist())
        known = known.union(*(risk.unknowns for risk in risks))
        for risk in disclosed:
            assert risk.unknowns & known
        left_out += len(undecided) > 0
        tables = enumerable(counts, truth, least_count)
        for risk in risks if tables is not None else ():
            held = tables[:, sorted(risk.unknowns)].sum(axis=1)
            assert risk.lower <= held.min() and held.max() <= risk.upper
    assert left_out > 5


def test_cancelling_stops_the_search():
    def stop(share):
        raise CancelledError

    counts, source, truth, least_count = random_publication(1, 2)
    with pytest.raises(CancelledError):
        search(counts, source, least_count, truth.astype(float), 10, stop)
