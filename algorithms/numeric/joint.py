"""Upper bounds from all published tables at once, when zones of three or more tables cross.

Such tables are no network, so every atom asks for a linear programme. Most are spared: a table
of whole numbers that agrees with all statements and puts enough records into an atom proves
that the atom is not small, and programmes over a neighbourhood alone, the rest of the ground
held as it is, find such tables for many atoms at a time.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy import optimize, sparse

from .intervals import WHOLE, PublishedCounts, extreme, restricted, tighten
from .programmes import at_once
from .progress import part, silent

SHORT_ROW = 60
PROGRAMME_SIZE = 1000
NODES = 2000
FILLED_TOGETHER = 60
TRIALS = 100
BRANCHING = 2000
CORRIDOR = 1500


@dataclass(frozen=True)
class Small:
    """An atom that cannot hold the least count.

    Attributes
    ----------
    atom : int
    upper : float
        The most it can hold.
    multipliers : (rows,) float array
        How often each row enters the derivation; all 0 where only whole-number reasoning shows it.
    """

    atom: int
    upper: float
    multipliers: np.ndarray


def small_atoms(
    counts, least_count, table=None, effort=20_000, progress=silent, wanted=None, solve=at_once
):
    """All atoms that no agreeing table fills with the least count.

    Parameters
    ----------
    counts : PublishedCounts
        Statements that do not contradict each other.
    least_count : int
    table : (atoms,) array of whole numbers or None
        A table that agrees with the statements, if one is known.
    effort : int
        Work after which the search stops, in linear programmes over up to a thousand atoms.
    progress : callable
    wanted : (atoms,) bool array or None
        The atoms in question; all by default.
    solve : callable
        See `programmes`.

    Returns
    -------
    found : list of Small
    undecided : int array
        Atoms that the search could not decide within the effort: nothing is known about them.
    """
    enough = np.zeros(counts.atoms, bool) if wanted is None else ~wanted
    telling = np.flatnonzero((counts.lower > 0) | np.isfinite(counts.upper))
    if len(telling) < counts.rows:
        fewer = PublishedCounts(
            counts.membership[telling], counts.lower[telling], counts.upper[telling]
        )
        found, undecided = small_atoms(
            fewer, least_count, table, effort, progress, ~enough, solve
        )  # fmt: skip
        return [_with_all_rows(small, telling, counts.rows) for small in found], undecided
    if table is None:
        table = whole_table(counts, even_guess(counts), solve)
    if table is not None:
        enough |= np.asarray(table) >= least_count
    if table is None:
        return _decided(counts, least_count, enough, effort, progress, solve)
    spent = _fill_all(counts, least_count, table, enough, effort, part(progress, 0.0, 0.5), solve)
    rest = part(progress, 0.5, 1.0)
    return _decided(counts, least_count, enough, effort - spent, rest, solve, table)


def _with_all_rows(small, rows, number):
    """Multipliers of the rows that say something, spread to all rows."""
    multipliers = np.zeros(number)
    multipliers[rows] = small.multipliers
    return replace(small, multipliers=multipliers)


def _fill_all(counts, least_count, table, enough, effort, progress, solve):
    """Mark in ``enough`` what programmes over small neighbourhoods can fill."""
    columns = counts.membership.tocsc()
    short = np.diff(counts.membership.indptr) <= SHORT_ROW
    capped = tighten(counts)[1] < least_count
    spent = 0
    tried = filled = 0
    for atom in range(counts.atoms):
        progress(atom / counts.atoms)
        if enough[atom] or capped[atom]:
            continue
        if spent > effort or (tried >= TRIALS and filled < 0.5 * tried):
            break
        near = _company(counts.membership, columns, atom, short, FILLED_TOGETHER)
        spent += _fill(counts, near, atom, least_count, table, enough, solve)
        tried, filled = tried + 1, filled + enough[atom]
    return spent


def _company(membership, columns, atom, short, size):
    """About so many atoms that can exchange records with one: near by, or thinned out."""
    everything = np.ones(membership.shape[0], bool)
    near = _near(membership, columns, atom, 1, short)
    while len(near) < size:
        wider = _near(membership, columns, atom, 1, short, near)
        if len(wider) == len(near):
            wider = _near(membership, columns, atom, 1, everything, near)
            others = np.setdiff1d(wider, near)
            near = np.union1d(near, others[:: max(1, 2 * len(others) // size)])
            return _near(membership, columns, atom, 1, short, near)
        near = wider
    return near


def _decided(counts, least_count, enough, effort, progress, solve, table=None):
    """Small atoms and undecided ones among those not known to hold enough."""
    columns = counts.membership.tocsc()
    found, undecided, spent = [], [], 0
    for atom in range(counts.atoms):
        progress(atom / counts.atoms)
        if enough[atom]:
            continue
        if spent >= effort:
            undecided.append(atom)
            continue
        verdict = None
        for near in _growing(counts.membership, columns, atom):
            verdict, cost = _bounded(counts, near, atom, least_count, solve)
            spent += cost
            if verdict is not None:
                break
            if table is not None:
                spent += _fill_one(counts, near, atom, least_count, table, enough, solve)
                if enough[atom]:
                    break
        if enough[atom]:
            continue
        if verdict is None:
            verdict, cost = _decide(counts, columns, atom, least_count, table, solve)
            spent += cost
        if isinstance(verdict, Small):
            found.append(verdict)
        elif verdict is None:
            undecided.append(atom)
    return found, np.array(undecided, int)


def whole_table(counts, guess, solve=at_once):
    """The table of whole numbers nearest to a guess that agrees with the statements.

    Near in the sum of absolute differences. None if none was found.
    """
    near_table = _nearest(counts, guess, solve)
    if near_table is None:
        return None
    table = np.round(near_table)
    return table if counts.holds(table) else None


def _nearest(counts, guess, solve):
    """The table nearest to a guess, not always whole; None when no table agrees."""
    atoms = counts.atoms
    matrix = counts.membership.astype(float)
    inner = sparse.hstack([matrix, -matrix]).tocsr()
    held = counts.membership @ guess
    fixed = counts.lower == counts.upper
    above, below = ~fixed & np.isfinite(counts.upper), ~fixed & (counts.lower > 0)
    problem = {
        "c": np.ones(2 * atoms),
        "A_ub": sparse.vstack([inner[above], -inner[below]]),
        "b_ub": np.concatenate([(counts.upper - held)[above], (held - counts.lower)[below]]),
        "A_eq": inner[fixed],
        "b_eq": (counts.upper - held)[fixed],
        "bounds": np.c_[np.zeros(2 * atoms), np.r_[np.full(atoms, np.inf), guess]],
        "method": "highs",
    }
    result = solve(optimize.linprog, **problem)
    if result.status != 0:
        return None
    more, fewer = np.split(result.x, 2)
    return guess + more - fewer


def even_guess(counts):
    """Every atom with its even share of the row that allows it least, as whole numbers."""
    size = np.maximum(np.diff(counts.membership.indptr), 1)
    typical = np.where(np.isfinite(counts.upper), (counts.lower + counts.upper) / 2, np.inf)
    guess = np.full(counts.atoms, np.inf)
    entries = counts.membership.tocoo()
    np.minimum.at(guess, entries.col, (typical / size)[entries.row])
    return np.where(np.isfinite(guess), np.floor(guess), 0.0)


def covered_atoms(counts, multipliers):
    """Atoms that a combination of rows counts at least once: the region it is about."""
    return np.flatnonzero(counts.membership.T @ multipliers >= 1 - WHOLE)


def _near(membership, columns, atom, hops, usable, reached=None):
    """Atoms within so many usable rows of an atom, or of those already reached."""
    reached = np.array([atom]) if reached is None else reached
    for _ in range(hops):
        rows = np.unique(columns[:, reached].indices)
        wider = np.union1d(reached, membership[rows[usable[rows]]].indices)
        if len(wider) == len(reached):
            break
        reached = wider
    return reached


def _growing(membership, columns, atom):
    """Ever wider neighbourhoods of an atom, while they stay small enough for many programmes."""
    reached = np.array([atom])
    everything = np.ones(membership.shape[0], bool)
    while True:
        wider = _near(membership, columns, atom, 1, everything, reached)
        if len(wider) == len(reached) or len(wider) > BRANCHING:
            return
        yield wider
        reached = wider


def _fill(counts, near, atom, least_count, table, enough, solve):
    """Put the least count into as many atoms of a neighbourhood as possible, one above all.

    The rest of the ground stays as in ``table``. Marks in ``enough`` what was reached and returns
    the effort it took.
    """
    local, _ = restricted(counts, near, table)
    number = len(near)
    wish = np.where(enough[near], 0.0, 1.0)
    wish[near == atom] = number
    open_ended = np.isinf(local.upper)
    matrix = local.membership.astype(float)
    cap = sparse.identity(number, format="csr")
    fixed = local.lower == local.upper
    loose = ~fixed & ~open_ended
    blank = sparse.csr_matrix((local.rows, number))
    inequalities = [
        sparse.hstack([matrix[loose], blank[loose]]),
        sparse.hstack([-matrix[~fixed], blank[~fixed]]),
        sparse.hstack([-cap, cap]),
    ]
    result = solve(
        optimize.linprog,
        c=np.concatenate([np.zeros(number), -wish]),
        A_ub=sparse.vstack(inequalities),
        b_ub=np.concatenate([local.upper[loose], -local.lower[~fixed], np.zeros(number)]),
        A_eq=sparse.hstack([matrix, blank]).tocsr()[fixed] if fixed.any() else None,
        b_eq=local.upper[fixed] if fixed.any() else None,
        bounds=np.c_[
            np.zeros(2 * number), np.r_[np.full(number, np.inf), np.full(number, least_count)]
        ],
        method="highs",
    )
    if result.status == 0:
        filled = np.round(result.x[:number])
        if local.holds(filled):
            enough[near] |= filled >= least_count
    return _cost(number)


def _fill_one(counts, near, atom, least_count, table, enough, solve):
    """Put the least count into one atom with as few other changes to ``table`` as possible."""
    local, _ = restricted(counts, near, table)
    if _filled(local, np.flatnonzero(near == atom), least_count, table[near], solve):
        enough[atom] = True
    return _cost(len(near))


def _filled(counts, atom, least_count, table, solve):
    """Whether few changes to a table, in whole numbers, put the least count into one atom."""
    row = sparse.csr_matrix((np.ones(1), (np.zeros(1, int), atom)), (1, counts.atoms))
    demanded = PublishedCounts(
        sparse.vstack([counts.membership, row], format="csr"),
        np.append(counts.lower, least_count),
        np.append(counts.upper, np.inf),
    )
    near_table = _nearest(demanded, table, solve)
    if near_table is None:
        return False
    whole = np.round(near_table)
    return demanded.holds(whole) or _whole_in_corridor(demanded, table, near_table, solve)


def _whole_in_corridor(demanded, table, near_table, solve):
    """Whether whole numbers do where a programme moved records in fractions, and close by."""
    moved = np.flatnonzero(np.abs(near_table - table) > WHOLE)
    short = np.diff(demanded.membership.indptr) <= SHORT_ROW
    columns = demanded.membership.tocsc()
    corridor = _near(demanded.membership, columns, None, 1, short, moved)
    if len(corridor) > CORRIDOR or not hasattr(optimize, "milp"):
        return False
    local, _ = restricted(demanded, corridor, table)
    result = _branch(local, np.zeros(local.atoms), solve)
    return result.x is not None and local.holds(np.round(result.x))


def _bounded(counts, near, atom, least_count, solve):
    """Small, if the rows of a neighbourhood alone show it, and the effort it took."""
    nearby, rows = restricted(counts, near)
    most = extreme(nearby, near == atom, solve=solve)
    if most.value >= least_count:
        return None, _cost(len(near))
    multipliers = np.zeros(counts.rows)
    multipliers[rows] = most.multipliers
    return Small(atom, most.value, multipliers), _cost(len(near))


def _decide(counts, columns, atom, least_count, table, solve):
    """Small, True (not small) or None (undecided) by all that is connected, and the effort."""
    near = _near(counts.membership, columns, atom, counts.rows, np.ones(counts.rows, bool))
    nearby, rows = restricted(counts, near)
    spent = _cost(len(near))
    if table is not None and _filled(
        nearby, np.flatnonzero(near == atom), least_count, table[near], solve
    ):  # fmt: skip
        return True, spent
    most = extreme(nearby, near == atom, solve=solve)
    if not most.decided:
        return None, 2 * spent
    if most.value < least_count:
        multipliers = np.zeros(counts.rows)
        multipliers[rows] = most.multipliers
        return Small(atom, most.value, multipliers), 2 * spent
    if most.counts is None or most.whole:
        return True, 2 * spent
    if len(near) > BRANCHING:
        return None, 2 * spent
    verdict = _by_whole_numbers(nearby, near == atom, least_count, atom, counts.rows, solve)
    return verdict, 10 * spent


def _by_whole_numbers(part, region, least_count, atom, rows, solve):
    """Branch and bound for one atom whose linear programme ends between whole numbers."""
    if not hasattr(optimize, "milp"):
        return None
    result = _branch(part, np.where(region, -1.0, 0.0), solve)
    if result.x is not None:
        table = np.round(result.x)
        if part.holds(table) and table[region].sum() >= least_count:
            return True
    if result.status != 0:
        return None
    return Small(atom, float(np.round(-result.fun)), np.zeros(rows))


def _branch(counts, cost, solve):
    return solve(
        optimize.milp,
        c=cost,
        integrality=np.ones(counts.atoms),
        constraints=optimize.LinearConstraint(
            counts.membership.astype(float), counts.lower, counts.upper
        ),
        options={"node_limit": NODES},
    )


def _cost(atoms):
    return max(1.0, atoms / PROGRAMME_SIZE) ** 1.3
