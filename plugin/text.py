"""Words for people: translation, numbers and units, the same in every locale."""

from qgis.PyQt.QtCore import QCoreApplication


def tr(message):
    """Translate a message of the plugin."""
    return QCoreApplication.translate("Steadfield", message)


def said(words):
    """What the core says, in the user's language.

    Parameters
    ----------
    words : numeric.words.Words or numeric.errors.InputError or object
        Anything else is taken as text that needs no translation.

    Returns
    -------
    str
    """
    words = getattr(words, "words", words)
    return words.said(tr) if hasattr(words, "said") else str(words)


def number(value, digits=3):
    """Write a number with so many significant digits and a narrow no-break space between thousands.

    Parameters
    ----------
    value : float or int or None
    digits : int
        Significant digits of a value below 1000; larger ones are written to the unit.

    Returns
    -------
    str
        A dash for what is missing or not finite.
    """
    if value is None:
        return "–"
    value = float(value)
    if value != value or value in (float("inf"), float("-inf")):
        return "–"
    if value == 0:
        return "0"
    magnitude = abs(value)
    if magnitude >= 1000 or value == int(value):
        return f"{value:,.0f}".replace(",", "\u202f").replace("-", "−")
    if magnitude < 10**-4:
        return f"{value:.{digits - 1}e}".replace("-", "−")
    written = f"{value:#.{digits}g}"
    if "e" in written:
        written = f"{value:.0f}"
    if "." in written:
        written = written.rstrip("0").rstrip(".")
    return written.replace("-", "−")


def percent(share, digits=1):
    """Write a share as a percentage; a dash for what is missing."""
    if share is None or share != share:
        return "–"
    return f"{100 * share:.{digits}f}\u202f%".replace("-", "−")


def listed(items, limit=8):
    """Write a list as words: ``a, b and c``, cut with a count after so many."""
    items = [str(item) for item in items]
    if len(items) > limit:
        return ", ".join(items[:limit]) + tr(" and {} more").format(len(items) - limit)
    if len(items) < 2:
        return "".join(items)
    return ", ".join(items[:-1]) + tr(" and ") + items[-1]
