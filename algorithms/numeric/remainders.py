"""The search for small remainders, and which of them disclose more than was stated."""

from dataclasses import dataclass, replace

import numpy as np

from .crossings import Network, two_families
from .intervals import PublishedCounts, extreme, reconcile
from .joint import covered_atoms, small_atoms
from .programmes import at_once
from .progress import part, silent

COMBINATIONS = 500
SHRINKABLE = 40


@dataclass(frozen=True)
class Finding:
    """A union of unknowns that cannot hold the least count.

    Attributes
    ----------
    unknowns : frozenset of int
    lower, upper : float
        The interval that the statements leave.
    added, subtracted : tuple of int
        Rows whose sum and difference leave the unknowns; empty where only all statements
        together show it.
    """

    unknowns: frozenset
    lower: float
    upper: float
    added: tuple = ()
    subtracted: tuple = ()

    @property
    def kind(self):
        """``empty``, ``exact``, ``range`` or ``at most``; see `differencing.Risk`."""
        if self.upper == 0:
            return "empty"
        if self.lower == self.upper:
            return "exact"
        return "range" if self.lower >= 1 else "at most"


def search(counts, source, least_count, table, effort, progress=silent, solve=at_once):
    """For every unknown that cannot hold the least count, the remainder that limits it.

    Parameters
    ----------
    counts : PublishedCounts
        Statements that do not contradict each other.
    source : (rows,) int array
        The published table of each row.
    least_count : int
    table : (unknowns,) array of whole numbers or None
        A table that agrees with the statements.
    effort : int
        Most linear programmes, see `joint.small_atoms`.
    progress : callable
    solve : callable
        See `programmes`.

    Returns
    -------
    findings : list of Finding
    undecided : int array
        Unknowns that could not be decided within the effort.
    method : str
        ``network`` or ``programmes``.
    """
    family = two_families(counts.membership)
    if family is not None and table is not None:
        network = Network(counts, family, table)
        return network_findings(counts, network, least_count, progress), np.empty(0, int), "network"
    findings = _pairs(counts, source, least_count, table, part(progress, 0.0, 0.4), solve)
    together, undecided, unsolved = _together(
        counts, least_count, table, effort, findings, part(progress, 0.4, 0.8), solve
    )
    refined = []
    for turn, finding in enumerate(findings):
        progress(0.8 + 0.2 * turn / len(findings))
        narrowed, solved = _refined(counts, finding, solve)
        refined.append(narrowed)
        unsolved |= frozenset() if solved else finding.unknowns
    undecided = np.union1d(undecided, sorted(unsolved)).astype(int)
    return refined + together, undecided, "programmes"


def network_findings(counts, network, least_count, progress=silent):
    """Small remainders of two families of zones, exactly; no limit on the search."""
    findings, small = [], np.zeros(counts.atoms, bool)
    for atom in range(counts.atoms):
        if atom % 50 == 0:
            progress(atom / counts.atoms)
        side, at_goal = network.raise_to(atom, least_count)
        upper = network.flow[atom]
        if upper >= least_count:
            continue
        small[atom] = True
        cut = network.cut_of(side, at_goal)
        lower = network.lower_to_least(atom, set(cut.atoms))
        findings.append(Finding(frozenset(cut.atoms), lower, upper, cut.added, cut.subtracted))
    for row in np.flatnonzero(counts.membership @ ~small == 0):
        arc = counts.atoms + row
        network.raise_to(arc, least_count)
        upper = network.flow[arc]
        if upper < least_count:
            lower = network.lower_to_least(arc, ())
            findings.append(Finding(_unknowns_of(counts, row), lower, upper, (int(row),)))
    return findings


def _pairs(counts, source, least_count, table, progress, solve):
    """What any two tables give away; with more tables in play, true but not all."""
    numbers = np.unique(source)
    pairs = [(a, b) for a in numbers for b in numbers if a < b]
    findings = []
    for turn, pair in enumerate(pairs):
        rows = np.flatnonzero(np.isin(source, pair))
        atoms = np.flatnonzero(counts.membership[rows].sum(axis=0).A1)
        sub = PublishedCounts(
            counts.membership[rows][:, atoms], counts.lower[rows], counts.upper[rows]
        )
        family = two_families(sub.membership)
        start = None if table is None else table[atoms]
        if family is not None and start is None:
            start = np.round(reconcile(sub, solve)[1])
        stretch = part(progress, turn / len(pairs), (turn + 1) / len(pairs))
        if family is None or not sub.holds(start):
            continue
        for found in network_findings(sub, Network(sub, family, start), least_count, stretch):
            findings.append(
                Finding(
                    frozenset(atoms[list(found.unknowns)].tolist()),
                    found.lower,
                    found.upper,
                    tuple(rows[list(found.added)].tolist()),
                    tuple(rows[list(found.subtracted)].tolist()),
                )
            )
    return findings


def _together(counts, least_count, table, effort, known, progress, solve):
    """What all tables give away together, beyond what two of them already disclose.

    Returns
    -------
    findings : list of Finding
    undecided : int array
    unsolved : frozenset of int
        Unknowns of findings whose interval is not known to be the narrowest.
    """
    certain = np.zeros(counts.atoms, bool)
    for finding in known:
        if finding.lower >= 1 or finding.upper == 0:
            certain[list(finding.unknowns)] = True
    small, undecided = small_atoms(
        counts, least_count, table, effort, part(progress, 0.0, 0.8), ~certain, solve
    )
    findings, unsolved = [], frozenset()
    for turn, one in enumerate(small):
        progress(0.8 + 0.2 * turn / len(small))
        unknowns = covered_atoms(counts, one.multipliers)
        if one.atom not in unknowns:
            unknowns = np.array([one.atom])
        rows = np.flatnonzero(np.abs(one.multipliers) > 1e-6)
        plain = np.allclose(np.abs(one.multipliers[rows]), 1)
        added = rows[one.multipliers[rows] > 0] if plain else ()
        subtracted = rows[one.multipliers[rows] < 0] if plain else ()
        lower, upper, solved = _interval(counts, unknowns, one.upper, solve)
        findings.append(
            Finding(
                frozenset(unknowns.tolist()), lower, upper,
                tuple(map(int, added)), tuple(map(int, subtracted)),
            )
        )  # fmt: skip
        unsolved |= frozenset() if solved else findings[-1].unknowns
    return findings, undecided, unsolved


def _refined(counts, finding, solve):
    """A finding of two tables with the interval that all tables leave, and if that is known."""
    if finding.lower == finding.upper:
        return finding, True
    lower, upper, solved = _interval(counts, sorted(finding.unknowns), finding.upper, solve)
    return replace(finding, lower=max(lower, finding.lower), upper=upper), solved


def _interval(counts, unknowns, upper, solve):
    """Interval of a union whose largest count is at most ``upper``, and if it is the narrowest."""
    region = np.zeros(counts.atoms, bool)
    region[unknowns] = True
    most = extreme(counts, region, solve=solve)
    least = extreme(counts, region, largest=False, solve=solve)
    return least.value, min(upper, most.value), most.decided and least.decided


def _unknowns_of(counts, row):
    matrix = counts.membership
    return frozenset(matrix.indices[matrix.indptr[row] : matrix.indptr[row + 1]].tolist())


def disclosing(stated, searched, findings, least_count, solve=at_once):
    """Findings that tell more than a published count says of itself.

    A count that is stated to lie in an interval from 0 (a rounded 0), or in the whole of
    1 .. least count - 1 (a cell that is withheld because it is small), discloses nothing as long
    as nothing narrows it; nor does any part of it that may be empty, nor wider ground that is
    left the same whole range. Published counts that themselves are exact and small, or rounded
    too finely, do.

    Parameters
    ----------
    stated, searched : PublishedCounts
        As published, and as searched (loosened where they contradict each other).
    findings : list of Finding
    least_count : int
    solve : callable
        See `programmes`.

    Returns
    -------
    findings : list of Finding
    doubtful : int array
        Unknowns for which combinations of small cells were too many, or too hard, to try.
    """
    empty = frozenset().union(*(f.unknowns for f in findings if f.upper == 0))
    columns = stated.membership.tocsc()
    judged = {}
    for finding in findings:
        if finding.upper > 0:
            finding = _without_empty(stated, finding, empty)
        if finding.unknowns and not _is_stated(stated, columns, finding, least_count, empty):
            _keep_narrowest(judged, finding)
    risks = _without_consequences(list(judged.values()))
    small = frozenset().union(*(f.unknowns for f in findings)) - empty
    quiet = small - frozenset().union(*(f.unknowns for f in risks if f.lower >= 1))
    forced, doubtful = _forced(stated, searched, quiet, least_count, solve)
    for finding in forced:
        if not _is_stated(stated, columns, finding, least_count, empty):
            risks.append(finding)
    return risks, doubtful


def _without_empty(stated, finding, empty):
    """A finding without ground known to be empty, nor rows that are about such ground alone."""
    return replace(
        finding,
        unknowns=finding.unknowns - empty,
        added=tuple(row for row in finding.added if not _unknowns_of(stated, row) <= empty),
        subtracted=tuple(r for r in finding.subtracted if not _unknowns_of(stated, r) <= empty),
    )


def _keep_narrowest(judged, finding):
    known = judged.get(finding.unknowns)
    if known is None:
        judged[finding.unknowns] = finding
        return
    narrowest = known if known.upper - known.lower <= finding.upper - finding.lower else finding
    judged[finding.unknowns] = replace(
        narrowest,
        lower=max(known.lower, finding.lower),
        upper=min(known.upper, finding.upper),
    )


def _is_stated(stated, columns, finding, least_count, empty):
    """Whether published counts say of themselves all that a finding says."""
    around = {}
    for unknown in finding.unknowns:
        rows = columns.indices[columns.indptr[unknown] : columns.indptr[unknown + 1]]
        around[unknown] = rows[stated.upper[rows] < least_count]
    if finding.upper == 0:
        shared = set.intersection(*(set(rows.tolist()) for rows in around.values()))
        return any(stated.upper[row] == 0 for row in shared)
    narrowed = False
    for row in set(np.concatenate(list(around.values())).tolist()):
        if _unknowns_of(stated, row) - empty != finding.unknowns:
            continue
        low, high = stated.lower[row], stated.upper[row]
        if finding.lower > low or finding.upper < high:
            narrowed = True
        elif low == 0 or (low == 1 < high and high >= least_count - 1):
            return True
    return finding.lower == 0 and not narrowed and all(len(rows) for rows in around.values())


def _without_consequences(risks):
    """Drop what only says that a part of a disclosed region holds no more than all of it."""
    kept = [risk for risk in risks if risk.kind != "at most"]
    by_unknown = {}
    for risk in kept:
        for unknown in risk.unknowns:
            by_unknown.setdefault(unknown, []).append(risk)
    for risk in risks:
        if risk.kind == "at most":
            around = by_unknown.get(next(iter(risk.unknowns)), [])
            if not any(r.upper > 0 and risk.unknowns <= r.unknowns for r in around):
                kept.append(risk)
    return kept


def _forced(stated, searched, quiet, least_count, solve):
    """Unions of cells stated to be small that together must hold someone, yet few.

    All unions that must hold someone contain a smallest such union; those are enumerated by
    leaving out one member of each union found (hitting sets: Reiter 1987 Artif. Intell. 32:57).
    """
    if not quiet:
        return [], np.empty(0, int)
    quiet = np.array(sorted(quiet))
    own = (stated.upper < least_count) & (stated.lower == 1) & (stated.upper > 1)
    counts = replace(searched, lower=np.where(own, 0.0, searched.lower))
    findings, seen, waiting, spent = [], set(), [frozenset()], 0
    while waiting:
        left_out = waiting.pop()
        region = np.zeros(counts.atoms, bool)
        region[[unknown for unknown in quiet if unknown not in left_out]] = True
        union, cost, solved = _smallest_forced(counts, region, solve)
        spent += cost
        if not solved:
            return findings, quiet
        if union is None:
            continue
        if spent > COMBINATIONS:
            return findings, quiet
        own_ground = np.isin(np.arange(counts.atoms), union)
        most = extreme(searched, own_ground, solve=solve)
        if not most.decided:
            return findings, quiet
        if most.value < least_count:
            least = extreme(searched, own_ground, largest=False, solve=solve)
            if not least.decided:
                return findings, quiet
            findings.append(Finding(frozenset(union.tolist()), least.value, most.value))
        for unknown in union.tolist():
            fewer = left_out | {unknown}
            if fewer not in seen:
                seen.add(fewer)
                waiting.append(fewer)
    return findings, np.empty(0, int)


def _smallest_forced(counts, region, solve):
    """A union within a region that must hold someone and has no part that must.

    Returns
    -------
    union : int array or None
    spent : int
        Programmes solved.
    solved : bool
        False when a programme was left unsolved, so that nothing follows.
    """
    least = extreme(counts, region, largest=False, solve=solve)
    if least.value < 1:
        return None, 1, least.decided
    union = np.flatnonzero(region & (counts.membership.T @ -least.multipliers > 1e-6))
    spent = 1
    if len(union) > SHRINKABLE:
        return union, spent, True
    for unknown in union.tolist():
        fewer = np.zeros(counts.atoms, bool)
        fewer[union[union != unknown]] = True
        spent += 1
        if not fewer.any():
            continue
        least = extreme(counts, fewer, largest=False, solve=solve)
        if not least.decided:
            return None, spent, False
        if least.value >= 1:
            union = union[union != unknown]
    return union, spent, True
