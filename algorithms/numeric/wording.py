"""Derivations of an audit in words."""

LISTED = 8


def interval_words(lower, upper):
    """An interval of whole numbers as a reader says it: 3, 1 to 4, at most 4, none."""
    if upper == 0:
        return "none"
    if lower == upper:
        return f"{lower:.0f}"
    if lower == 0:
        return f"at most {upper:.0f}"
    return f"{lower:.0f} to {upper:.0f}"


def derivation(finding, tables, source, counts):
    """How an outsider gets at the count of a region.

    Parameters
    ----------
    finding : Finding
    tables : sequence of PublishedTable
    source : (rows,) int array
        The table of each row; zones of all tables in order, then published totals.
    counts : PublishedCounts
        As published.

    Returns
    -------
    str
        Such as "Wards A7 minus Hexagons 12, 13 and 14 leaves 3". Where the rows named do not
        give the whole interval, the sentence says that the others narrow it.
    """
    words = interval_words(finding.lower, finding.upper)
    if not finding.added:
        return f"all published counts together leave {words}"
    added, subtracted = list(finding.added), list(finding.subtracted)
    low = counts.lower[added].sum() - counts.upper[subtracted].sum()
    high = counts.upper[added].sum() - counts.lower[subtracted].sum()
    plain = (max(low, 0), high) == (finding.lower, finding.upper)
    name = _rows(finding.added, tables, source)
    if subtracted:
        sentence = f"{name} minus {_rows(finding.subtracted, tables, source)} leaves {words}"
    elif len(added) == 1 and plain:
        sentence = f"{name} is published as {words}"
    elif len(added) == 1:
        return f"{name} is left {words} by the other published counts"
    else:
        sentence = f"{name} together hold {words}"
    return sentence if plain else f"{sentence}, by all published counts together"


def _rows(rows, tables, source):
    """Zones by table: "Wards A7 and B2 and Hexagons 12"."""
    starts, start = [], 0
    for table in tables:
        starts.append(start)
        start += len(table.zones)
    phrases = []
    for number, table in enumerate(tables):
        own = [row for row in rows if source[row] == number]
        zones = [row for row in own if row < start]
        if zones:
            labels = [str(table.labels[row - starts[number]]) for row in zones]
            phrases.append(f"{table.name} {_listed(labels)}")
        if len(zones) < len(own):
            phrases.append(f"the total of {table.name}")
    return " with ".join(phrases)


def _listed(labels):
    if len(labels) > LISTED:
        return f"{', '.join(labels[: LISTED - 1])} and {len(labels) - LISTED + 1} more"
    if len(labels) == 1:
        return labels[0]
    return f"{', '.join(labels[:-1])} and {labels[-1]}"
