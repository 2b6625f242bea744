"""Differencing: what several published tables of the same ground give away together.

Zones of one table that lie inside zones of another leave a remainder whose count everyone can
work out (Duke-Williams & Rees 1998 IJGIS 12:579; Costemalle 2019 Stat. J. IAOS 35:559). An atom
lies in a small remainder exactly when the published counts leave it no room for the least
count, so the search asks, for every atom, for the most it can hold and for the reason why.
"""

from dataclasses import dataclass, field

import numpy as np
import shapely
from scipy import sparse

from .errors import InputError
from .intervals import PublishedCounts, reconcile
from .joint import whole_table
from .overlay import atom_of_records, overlay
from .programmes import Watched, at_once
from .progress import Remembered, part, silent
from .remainders import disclosing, search
from .wording import derivation
from .words import Words

EFFORT = 20_000


@dataclass(frozen=True)
class PublishedTable:
    """One published layer.

    Attributes
    ----------
    name : str
    zones : (zones,) object array of polygons
    lower, upper : (zones,) float arrays
        What each published count says; see the statements in ``intervals``.
    labels : (zones,) sequence of str
        What a reader calls each zone.
    total : (float, float) or None
        What is published about the sum over the whole layer.
    release : int
        Releases of the same zoning at several times have increasing numbers; records are
        assumed to be added and never removed between them.
    """

    name: str
    zones: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    labels: tuple
    total: tuple = None
    release: int = 0


@dataclass(frozen=True)
class Risk:
    """Ground about which the tables give away too much.

    Attributes
    ----------
    kind : str
        ``exact``: the count is known and 1 .. least count - 1; ``range``: it is known to lie in
        there; ``at most``: it is known to be less than the least count, perhaps 0;
        ``empty``: it is known to be 0 although no table shows a 0 there.
    polygon : shapely geometry
    lower, upper : float
        What an outsider can work out.
    words : str
        The derivation.
    true_count : float
        By the records; NaN without them.
    added, subtracted : tuple of int
        Rows of the derivation; zones of all layers in order, then published totals.
    unknowns : tuple of int
        Columns of the audit's ``counts``.
    """

    kind: str
    polygon: object
    lower: float
    upper: float
    words: str
    true_count: float
    added: tuple
    subtracted: tuple
    unknowns: tuple


@dataclass(frozen=True)
class Audit:
    """The outcome of a release audit.

    Attributes
    ----------
    risks : list of Risk
        Kinds exact, range and at most; the smallest counts first.
    empty : list of Risk
        Kind empty: information too, of lower severity, and not counted as disclosed.
    contradictions : list of str
        Zones whose counts cannot all be right.
    undecided : int
        Atoms that the search did not decide within its effort.
    undecided_area : float
    clean : bool
        No risk, no contradiction, nothing undecided.
    atoms : int
    unknowns : int
    slivers, sliver_area, tolerance : see `overlay.Overlay`
    method : str
        ``network`` (exact bounds), or ``programmes``.
    counts : PublishedCounts
        The statements as searched, loosened where they contradicted each other.
    overlay : Overlay
    """

    risks: list
    empty: list
    contradictions: list
    undecided: int
    undecided_area: float
    clean: bool
    atoms: int
    unknowns: int
    slivers: int
    sliver_area: float
    tolerance: float
    method: str
    counts: PublishedCounts = field(repr=False)
    overlay: object = field(repr=False)

    @property
    def worst_count(self):
        """The smallest upper end of a disclosed region; 0 when nothing is disclosed."""
        return int(min((risk.upper for risk in self.risks), default=0))


def audit(tables, least_count, tolerance=0.0, records=None, effort=EFFORT, progress=silent):
    """Find all ground whose count several published tables give away together.

    Parameters
    ----------
    tables : sequence of PublishedTable
    least_count : int
        2 or more; fewer records than this must not be recognisable.
    tolerance : float
        See `overlay.overlay`.
    records : (x, y) or None
        Places of the confidential records: each risk is then confirmed by the true count.
    effort : int
        Number of linear programmes after which the search stops and says so; used only where
        zones of three or more tables cross.
    progress : callable

    Returns
    -------
    Audit

    Raises
    ------
    InputError
        A least count below 2, tables without zones, or counts that do not fit their zones.
    """
    _check(tables, least_count)
    if progress is silent:
        return _audit(tables, least_count, tolerance, records, effort, progress, at_once)
    progress = Remembered(progress)
    with Watched(progress.again) as solve:
        return _audit(tables, least_count, tolerance, records, effort, progress, solve)


def _audit(tables, least_count, tolerance, records, effort, progress, solve):
    laid = overlay([table.zones for table in tables], tolerance, part(progress, 0.0, 0.3))
    counts, atom_of, step_of = _statements(tables, laid)
    true_counts = _true_counts(tables, laid, atom_of, records)
    searched, table, contradictions = _consistent(counts, tables, true_counts, solve)
    progress(0.4)
    source = _sources(tables)
    findings, undecided, method = search(
        searched, source, least_count, table, effort, part(progress, 0.4, 0.9), solve
    )
    findings, doubtful = disclosing(counts, searched, findings, least_count, solve)
    risks = [
        _risk(finding, tables, laid, counts, atom_of, step_of, true_counts) for finding in findings
    ]
    progress(1.0)
    disclosed = sorted(
        (risk for risk in risks if risk.kind != "empty"), key=lambda risk: (risk.upper, risk.lower)
    )
    undecided = np.union1d(undecided, doubtful).astype(int)
    return Audit(
        risks=disclosed,
        empty=[risk for risk in risks if risk.kind == "empty"],
        contradictions=contradictions,
        undecided=len(undecided),
        undecided_area=float(shapely.area(laid.atoms[np.unique(atom_of[undecided])]).sum()),
        clean=not (disclosed or contradictions or len(undecided)),
        atoms=len(laid.atoms),
        unknowns=counts.atoms,
        slivers=laid.slivers,
        sliver_area=laid.sliver_area,
        tolerance=laid.tolerance,
        method=method,
        counts=searched,
        overlay=laid,
    )


def _check(tables, least_count):
    if least_count < 2 or least_count != int(least_count):
        raise InputError(
            "The least count must be a whole number of 2 or more, since a count of 1 is "
            "always a person; found {}.",
            least_count,
        )
    if not len(tables):
        raise InputError("The audit needs at least one published layer; found none.")
    for table in tables:
        for values in (table.lower, table.upper, table.labels):
            if len(values) != len(table.zones):
                raise InputError(
                    "{}: {} zones but {} counts or labels.",
                    table.name,
                    len(table.zones),
                    len(values),
                )


def _sources(tables):
    """The table behind every row: zones of all tables in order, then published totals."""
    numbers = np.arange(len(tables))
    zones = np.repeat(numbers, [len(table.zones) for table in tables])
    return np.concatenate([zones, [n for n in numbers if tables[n].total is not None]]).astype(int)


def _statements(tables, laid):
    """Published counts over unknowns: one for each atom and each release that adds records.

    A release counts the records of all releases up to its own, so that the difference of two
    releases is a remainder like any other.

    Returns
    -------
    PublishedCounts
    atom_of, step_of : (unknowns,) int arrays
        The ground of each unknown, and how many releases came before it.
    """
    releases = np.unique([table.release for table in tables])
    step = np.searchsorted(releases, [table.release for table in tables])
    totals = [n for n, table in enumerate(tables) if table.total is not None]
    whole = [
        (np.asarray(laid.membership[laid.layer == n].sum(axis=0)) > 0).astype(np.int64)
        for n in totals
    ]
    membership = sparse.vstack([laid.membership, *map(sparse.csr_matrix, whole)], format="csr")
    source = _sources(tables)
    blocks = [
        sparse.diags((step[source] >= block).astype(np.int64), dtype=np.int64) @ membership
        for block in range(len(releases))
    ]
    membership = sparse.hstack(blocks, format="csr", dtype=np.int64)
    membership.eliminate_zeros()
    used = np.flatnonzero(np.diff(membership.tocsc().indptr))
    bounds = [tables[n].total for n in totals]
    lower = np.concatenate([*(t.lower for t in tables), [low for low, _ in bounds]])
    upper = np.concatenate([*(t.upper for t in tables), [high for _, high in bounds]])
    counts = PublishedCounts(membership[:, used], lower.astype(float), upper.astype(float))
    return counts, used % len(laid.atoms), used // len(laid.atoms)


def _true_counts(tables, laid, atom_of, records):
    """True count of every unknown; None without records or with several releases."""
    if records is None or len({table.release for table in tables}) > 1:
        return None
    atom = atom_of_records(laid.atoms, *records)
    per_atom = np.bincount(atom[atom >= 0], minlength=len(laid.atoms))
    return per_atom[atom_of].astype(float)


def _consistent(counts, tables, true_counts, solve):
    """Statements without contradiction, a whole table that agrees with them, and the quarrels."""
    if true_counts is not None and counts.holds(true_counts):
        return counts, true_counts, []
    searched, table, loosened = reconcile(counts, solve)
    names = row_names(tables)
    words = [
        Words("{} would have to differ by {:.0f}", names[row], loosened[row])
        for row in np.argsort(-loosened, kind="stable")
        if loosened[row] > 0
    ]
    whole = np.round(table)
    if true_counts is not None:
        nearest = whole_table(searched, true_counts, solve)
        whole = whole if nearest is None else nearest
    return searched, whole if searched.holds(whole) else None, words


def row_names(tables):
    """What a reader calls every row of the published counts."""
    zones = [f"{table.name} {label}" for table in tables for label in table.labels]
    return zones + [
        Words("the total of {}", table.name) for table in tables if table.total is not None
    ]


def _risk(finding, tables, laid, counts, atom_of, step_of, true_counts):
    unknowns = np.array(sorted(finding.unknowns))
    shapes = laid.atoms[np.unique(atom_of[unknowns])]
    true = np.nan if true_counts is None else float(true_counts[unknowns].sum())
    words = derivation(finding, tables, _sources(tables), counts)
    if step_of[unknowns].min() > 0:
        words = Words("{}, added between the releases", words)
    return Risk(
        kind=finding.kind,
        polygon=shapes[0] if len(shapes) == 1 else shapely.union_all(shapes),
        lower=finding.lower,
        upper=finding.upper,
        words=words,
        true_count=true,
        added=finding.added,
        subtracted=finding.subtracted,
        unknowns=tuple(unknowns.tolist()),
    )
