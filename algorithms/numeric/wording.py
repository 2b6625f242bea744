"""Derivations of an audit in words."""

from .words import Words

LISTED = 8


def interval_words(lower, upper):
    """An interval of whole numbers as a reader says it: 3, 1 to 4, at most 4, none."""
    if upper == 0:
        return Words("none")
    if lower == upper:
        return f"{lower:.0f}"
    if lower == 0:
        return Words("at most {:.0f}", upper)
    return Words("{:.0f} to {:.0f}", lower, upper)


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
        return Words("all published counts together leave {}", words)
    added, subtracted = list(finding.added), list(finding.subtracted)
    low = counts.lower[added].sum() - counts.upper[subtracted].sum()
    high = counts.upper[added].sum() - counts.lower[subtracted].sum()
    plain = (max(low, 0), high) == (finding.lower, finding.upper)
    name = _rows(finding.added, tables, source)
    if subtracted:
        less = _rows(finding.subtracted, tables, source)
        sentence = Words("{} minus {} leaves {}", name, less, words)
    elif len(added) == 1 and plain:
        sentence = Words("{} is published as {}", name, words)
    elif len(added) == 1:
        return Words("{} is left {} by the other published counts", name, words)
    else:
        sentence = Words("{} together hold {}", name, words)
    return sentence if plain else Words("{}, by all published counts together", sentence)


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
            phrases.append(Words("{} {}", table.name, _listed(labels)))
        if len(zones) < len(own):
            phrases.append(Words("the total of {}", table.name))
    words = phrases[0]
    for phrase in phrases[1:]:
        words = Words("{} with {}", words, phrase)
    return words


def _listed(labels):
    if len(labels) > LISTED:
        shown = labels[: LISTED - 1]
        return Words("{} and {} more", ", ".join(shown), len(labels) - len(shown))
    if len(labels) == 1:
        return labels[0]
    return Words("{} and {}", ", ".join(labels[:-1]), labels[-1])
