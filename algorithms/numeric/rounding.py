"""Round counts at random without bias, each on its own or so that they still add up.

A value is moved to one of its two neighbouring multiples of the base b: up with probability r/b,
r being the remainder, else down, so that its mean error is zero and it never moves by b or more.
"""

import hashlib

import numpy as np

from .errors import InputError
from .progress import silent


def check_base(base, rules):
    """Refuse a base that would let an outsider tell that a cell is below the least count."""
    if base != int(base) or base < 2:
        raise InputError("ROUNDING_BASE must be a whole number of 2 or more; found {}.", base)
    if base < rules.least_count:
        raise InputError(
            "ROUNDING_BASE {} is below LEAST_COUNT {}: a rounded value of {} would tell "
            "that a cell holds 1 to {}. Choose {} or more, or settle a lower LEAST_COUNT "
            "with the data's owner.",
            base,
            rules.least_count,
            base,
            2 * base - 1,
            rules.least_count,
        )


def keyed_uniforms(key, *columns):
    """Uniform numbers that depend on nothing but a secret key and the rows.

    The same cell with the same value is rounded the same way in every release under one key, so
    that nothing is gained by averaging several releases (the cell-key idea of Fraser & Wooton
    2005, UNECE work session on confidentiality).

    Parameters
    ----------
    key : int
        Secret; who knows it can undo the rounding.
    columns : (n,) int arrays
        What names a cell, and its value.

    Returns
    -------
    (n,) float array in [0, 1)
    """
    rows = np.ascontiguousarray(np.stack([np.asarray(c).astype(np.int64) for c in columns], 1))
    secret = int(key).to_bytes(32, "little")
    drawn = np.empty(len(rows), np.uint64)
    for place, row in enumerate(rows):
        digest = hashlib.blake2b(row.tobytes(), digest_size=8, key=secret).digest()
        drawn[place] = int.from_bytes(digest, "little")
    return (drawn >> np.uint64(11)).astype(float) / 2.0**53


def random_rounding(values, base, uniforms):
    """Round every value on its own, unbiased.

    Parameters
    ----------
    values : array of float or int
        0 or more.
    base : int
    uniforms : array of the same shape
        Independent, uniform on [0, 1).

    Returns
    -------
    int64 array of the same shape
    """
    values = np.asarray(values, float)
    down = np.floor(values / base)
    remainder = values - down * base
    return ((down + (np.asarray(uniforms) * base < remainder)) * base).astype(np.int64)


def controlled_rounding(rows, columns, values, base, rng, progress=silent):
    """Round the entries of a two-way table so that all of its totals are rounded with them.

    Entries, row totals, column totals and the grand total all move to a neighbouring multiple of
    the base, without bias, and what is a multiple already stays. The table is completed by one
    slack row and column that bring every total to a multiple; then every entry off a multiple lies
    on an alternating cycle of such entries, and the cycle is shifted until one entry is settled, up
    or down with the probabilities that keep the mean.

    Parameters
    ----------
    rows, columns : (n,) int arrays
        Row and column of each entry, from 0; no pair twice.
    values : (n,) int array
        0 or more.
    base : int
    rng : numpy.random.Generator
    progress : callable

    Returns
    -------
    (n,) int64 array
        Rounded entries; the totals are their sums.

    References
    ----------
    Cox (1987), A constructive procedure for unbiased controlled rounding, JASA 82:520-524.
    """
    values = np.asarray(values)
    if len(values) and not np.array_equal(values, np.rint(values)):
        raise InputError(
            "Controlled rounding needs whole numbers; the weights make totals that are not. "
            "Choose rounding on its own, or leave WEIGHT empty."
        )
    values = np.rint(values).astype(np.int64)
    rows, columns = np.asarray(rows, np.int64), np.asarray(columns, np.int64)
    down = values // base * base
    graph = _remainders(rows, columns, values, base)
    left = sum(len(edges) for edges in graph.values())
    start, settled = max(left, 1), {}
    while graph:
        progress(1.0 - left / start)
        cycle = _cycle(graph)
        for edge, height in _shift(graph, cycle, base, rng):
            settled[edge] = height
            left -= 2
    rounded = down.copy()
    for place, (row, column) in enumerate(zip(rows.tolist(), columns.tolist())):
        rounded[place] += settled.get((row, -1 - column), 0)
    return rounded


def _remainders(rows, columns, values, base):
    """Entries off a multiple, as a graph between rows (0, 1, ...) and columns (-1, -2, ...)."""
    row_count = int(rows.max(initial=-1)) + 1
    column_count = int(columns.max(initial=-1)) + 1
    row_sums = np.bincount(rows, values, row_count).astype(np.int64)
    column_sums = np.bincount(columns, values, column_count).astype(np.int64)
    slack_row, slack_column = row_count, -1 - column_count
    entries = list(zip(rows.tolist(), (-1 - columns).tolist(), (values % base).tolist()))
    entries += [(i, slack_column, int(-s % base)) for i, s in enumerate(row_sums)]
    entries += [(slack_row, -1 - j, int(-s % base)) for j, s in enumerate(column_sums)]
    entries.append((slack_row, slack_column, int(values.sum() % base)))
    graph = {}
    for row, column, remainder in entries:
        if remainder:
            graph.setdefault(row, {})[column] = remainder
            graph.setdefault(column, {})[row] = remainder
    return graph


def _cycle(graph):
    """A cycle of the graph, as its nodes in order; every node has two edges or more."""
    node = next(iter(graph))
    path, position, before = [node], {node: 0}, None
    while True:
        following = next(other for other in graph[node] if other != before)
        if following in position:
            return path[position[following] :]
        position[following] = len(path)
        path.append(following)
        before, node = node, following


def _shift(graph, cycle, base, rng):
    """Shift the entries of a cycle up and down in turn until one is settled; yield those."""
    edges = list(zip(cycle, cycle[1:] + cycle[:1]))
    rising, falling = edges[::2], edges[1::2]
    ahead = min(min(base - graph[a][b] for a, b in rising), min(graph[a][b] for a, b in falling))
    back = min(min(graph[a][b] for a, b in rising), min(base - graph[a][b] for a, b in falling))
    step = ahead if rng.integers(ahead + back) < back else -back
    for signed, some in ((step, rising), (-step, falling)):
        for a, b in some:
            height = graph[a][b] + signed
            if 0 < height < base:
                graph[a][b] = graph[b][a] = height
                continue
            for one, other in ((a, b), (b, a)):
                del graph[one][other]
                if not graph[one]:
                    del graph[one]
            yield (max(a, b), min(a, b)), height
