"""What published counts say about the true ones: statements, bounds, linear programmes."""

from dataclasses import dataclass, replace

import numpy as np
from scipy import sparse
from scipy.optimize import linprog

from .errors import InputError
from .programmes import at_once

WHOLE = 1e-6


@dataclass(frozen=True)
class PublishedCounts:
    """Published counts as statements about unknown whole numbers of records, one per atom.

    Row r says: lower[r] <= sum of the unknowns of its atoms <= upper[r].

    Attributes
    ----------
    membership : (rows, atoms) csr_matrix of 0 and 1
    lower, upper : (rows,) float arrays
        Whole numbers; upper may be infinite.
    """

    membership: sparse.csr_matrix
    lower: np.ndarray
    upper: np.ndarray

    @property
    def rows(self):
        return self.membership.shape[0]

    @property
    def atoms(self):
        return self.membership.shape[1]

    def holds(self, counts):
        """Whether a table of counts, (atoms,), agrees with every statement."""
        sums = self.membership @ counts
        return bool(((sums >= self.lower) & (sums <= self.upper)).all())


@dataclass(frozen=True)
class Extreme:
    """The end of the interval of a union of atoms.

    Attributes
    ----------
    value : float
        Whole number; infinite when nothing limits it, or when a largest one is not known.
    counts : (atoms,) float array or None
        A table that reaches it; None when infinite or not known.
    multipliers : (rows,) float array
        How often each row enters the derivation: the values of the dual programme.
    whole : bool
        Whether ``counts`` are whole numbers, so that the end is proven for whole numbers too.
    decided : bool
        False when the programme was left unsolved: ``value`` then is the widest end there is.
    """

    value: float
    counts: np.ndarray
    multipliers: np.ndarray
    whole: bool
    decided: bool = True


def exact(values):
    """Interval of counts that are published as they are; null (NaN) means withheld.

    Returns
    -------
    lower, upper : float arrays
    """
    values = _whole_or_null(values)
    missing = np.isnan(values)
    return np.where(missing, 0.0, values), np.where(missing, np.inf, values)


def rounded(values, base, at_random=True):
    """Interval of counts rounded to multiples of a base; null means withheld.

    Parameters
    ----------
    values : (n,) array
    base : int
        2 or more.
    at_random : bool
        True: random rounding, the true count is less than one base away. False: to the nearest,
        at most half a base away, the half included because the rule for it is not known.
    """
    if base < 2 or base != int(base):
        raise InputError("A rounding base must be a whole number of 2 or more; found {}.", base)
    values = _whole_or_null(values)
    off = values % base != 0
    off &= ~np.isnan(values)
    if off.any():
        raise InputError(
            "Counts said to be rounded to {} hold {:g}, which is no multiple of {}; give "
            "the base that was used, or call them exact.",
            base,
            values[off][0],
            base,
        )
    reach = base - 1 if at_random else base // 2
    missing = np.isnan(values)
    lower = np.where(missing, 0.0, np.maximum(values - reach, 0))
    return lower, np.where(missing, np.inf, values + reach)


def noisy(values, epsilon, doubt=0.001):
    """Interval that holds a count under two-sided geometric noise but for a given doubt.

    P(noise beyond k) = 2 a^(k+1) / (1 + a) with a = exp(-epsilon) (Ghosh, Roughgarden &
    Sundararajan 2012 SIAM J. Comput. 41:1673), so that what follows is near certain, not certain.
    """
    if not epsilon > 0:
        raise InputError("The privacy budget of a noisy layer must be above 0; found {}.", epsilon)
    values = _whole_or_null(values, negative=True)
    ratio = np.exp(-epsilon)
    reach = max(0.0, np.ceil(np.log(doubt * (1 + ratio) / 2) / np.log(ratio) - 1))
    missing = np.isnan(values)
    lower = np.where(missing, 0.0, np.maximum(values - reach, 0))
    return lower, np.where(missing, np.inf, np.maximum(values + reach, 0))


def below_threshold(values, lower, upper, threshold):
    """Narrow withheld counts where the outsider knows that all below a threshold are withheld.

    A layer that publishes zeros gives away that a withheld count is at least 1.
    """
    if threshold < 2 or threshold != int(threshold):
        raise InputError("A withholding threshold must be 2 or more; found {}.", threshold)
    values = np.asarray(values, float)
    missing = np.isnan(values)
    least = 1.0 if (values == 0).any() else 0.0
    return np.where(missing, least, lower), np.where(missing, threshold - 1.0, upper)


def _whole_or_null(values, negative=False):
    values = np.asarray(values, float)
    known = values[~np.isnan(values)]
    if not np.isfinite(known).all() or (np.abs(known - np.round(known)) > WHOLE).any():
        wrong = known[~np.isfinite(known) | (np.abs(known - np.round(known)) > WHOLE)][0]
        raise InputError("Published counts must be whole numbers; found {:g}.", wrong)
    if not negative and (known < 0).any():
        raise InputError("Published counts must be 0 or more; found {:g}.", known.min())
    return np.round(values)


def tighten(counts, rounds=100):
    """Bounds of every atom by repeated arithmetic on single rows.

    An atom holds at most what its row allows once the others have their least, and the reverse.
    Sound, cheap, and not always the narrowest.

    Returns
    -------
    lower, upper : (atoms,) float arrays
    """
    entries = counts.membership.tocsc().tocoo()
    row, atom = entries.row, entries.col
    low, high = np.zeros(counts.atoms), np.full(counts.atoms, np.inf)
    for _ in range(rounds):
        endless = np.isinf(high)
        least = counts.membership @ low
        most = counts.membership @ np.where(endless, 0.0, high)
        open_ended = counts.membership @ endless.astype(float)
        others_endless = open_ended[row] - endless[atom] > 0
        others_most = np.where(others_endless, np.inf, most[row] - np.where(endless, 0, high)[atom])
        new_high, new_low = high.copy(), low.copy()
        np.minimum.at(new_high, atom, counts.upper[row] - (least[row] - low[atom]))
        np.maximum.at(new_low, atom, counts.lower[row] - others_most)
        if (new_high == high).all() and (new_low == low).all():
            break
        low, high = new_low, new_high
    return low, high


def components(membership):
    """Number of each atom's connected component; atoms that share a row are connected."""
    rows, atoms = membership.shape
    graph = sparse.bmat([[None, membership], [membership.T, None]], format="csr")
    label = sparse.csgraph.connected_components(graph, directed=False)[1]
    return np.unique(label[rows:], return_inverse=True)[1].reshape(atoms)


def restricted(counts, atoms, given=None):
    """The statements that remain about some atoms.

    Parameters
    ----------
    counts : PublishedCounts
    atoms : (k,) int array
    given : (all atoms,) array or None
        With it, all other atoms hold these counts; without, rows that reach other atoms keep
        only their upper bound, which is all they say about a part.

    Returns
    -------
    PublishedCounts
        About ``atoms`` alone.
    rows : int array
        The rows kept.
    """
    columns = counts.membership[:, atoms]
    size = np.diff(columns.indptr)
    rows = np.flatnonzero(size > 0)
    lower, upper = counts.lower[rows], counts.upper[rows]
    if given is None:
        partial = np.diff(counts.membership.indptr)[rows] > size[rows]
        lower = np.where(partial, 0.0, lower)
    else:
        elsewhere = np.array(given, float)
        elsewhere[atoms] = 0.0
        held = counts.membership[rows] @ elsewhere
        lower, upper = lower - held, upper - held
    return PublishedCounts(columns[rows], lower, upper), rows


def extreme(counts, region, largest=True, whole=False, solve=at_once):
    """Largest or smallest number of records a union of atoms can hold (HiGHS through scipy).

    Parameters
    ----------
    counts : PublishedCounts
        Statements that do not contradict each other.
    region : (atoms,) bool array
    largest : bool
    whole : bool
        Demand whole numbers (branch and bound; needs scipy 1.9, ignored before).
    solve : callable
        See `programmes`.

    Returns
    -------
    Extreme
        None when the statements contradict each other.
    """
    result = _programme(counts, np.where(region, -1.0 if largest else 1.0, 0.0), whole, solve)
    if result.status == 2:
        return None
    if result.status == 3:
        return Extreme(np.inf, None, np.zeros(counts.rows), True)
    if result.status != 0:
        widest = np.inf if largest else 0.0
        return Extreme(widest, None, np.zeros(counts.rows), False, decided=False)
    table = np.round(result.x)
    is_whole = np.abs(result.x - table).max(initial=0.0) < WHOLE and counts.holds(table)
    value = float(result.x[region].sum())
    value = np.floor(value + WHOLE) if largest else np.ceil(value - WHOLE)
    multipliers = np.zeros(counts.rows) if whole else _multipliers(counts, result)
    return Extreme(value, table if is_whole else result.x, multipliers, bool(is_whole))


def interval(counts, region):
    """Smallest and largest number of records in a union of atoms, by two linear programmes."""
    ends = [extreme(counts, region, largest) for largest in (False, True)]
    return tuple(end.value for end in ends)


def reconcile(counts, solve=at_once):
    """A table that agrees with the statements, after the least loosening if none does.

    Loosening is measured as the sum of what is added to the bounds of all rows; it is zero when
    the statements do not contradict each other.

    Parameters
    ----------
    counts : PublishedCounts
    solve : callable
        See `programmes`.

    Returns
    -------
    PublishedCounts
        The statements, loosened where they contradict each other.
    table : (atoms,) float array
        Not always whole.
    loosened : (rows,) float array
        By how much each row was loosened.
    """
    rows, atoms = counts.membership.shape
    both = sparse.hstack([counts.membership, sparse.identity(rows), -sparse.identity(rows)])
    slack = PublishedCounts(sparse.csr_matrix(both), counts.lower, counts.upper)
    cost = np.concatenate([np.zeros(atoms), np.ones(2 * rows)])
    result = _programme(slack, cost, False, solve, must=True)
    under, over = np.split(result.x[atoms:], 2)
    under, over = np.ceil(under - WHOLE), np.ceil(over - WHOLE)
    loosened = replace(counts, lower=np.maximum(counts.lower - under, 0), upper=counts.upper + over)
    return loosened, result.x[:atoms], np.maximum(under, over)


def _programme(counts, cost, whole, solve, must=False):
    fixed, above, below = _kinds(counts)
    matrix = counts.membership.astype(float)
    options = {"integrality": np.ones(matrix.shape[1])} if whole else {}
    return solve(
        linprog,
        must,
        c=cost,
        A_ub=sparse.vstack([matrix[above], -matrix[below]]) if (above | below).any() else None,
        b_ub=np.concatenate([counts.upper[above], -counts.lower[below]])
        if (above | below).any()
        else None,
        A_eq=matrix[fixed] if fixed.any() else None,
        b_eq=counts.upper[fixed] if fixed.any() else None,
        bounds=(0, None),
        method="highs",
        **options,
    )


def _kinds(counts):
    fixed = counts.lower == counts.upper
    above = ~fixed & np.isfinite(counts.upper)
    below = ~fixed & (counts.lower > 0)
    return fixed, above, below


def _multipliers(counts, result):
    """Dual values of the rows, signed so that their combination covers the region."""
    fixed, above, below = _kinds(counts)
    values = np.zeros(counts.rows)
    if fixed.any():
        values[fixed] -= result.eqlin.marginals
    if (above | below).any():
        split = int(above.sum())
        values[above] -= result.ineqlin.marginals[:split]
        values[below] += result.ineqlin.marginals[split:]
    return values
