"""Numbers of records in words."""

import numpy as np

from .words import Words


def of_all(found):
    """``1,234 of 5,678 records``."""
    return Words("{} of {} records", whole(int(np.count_nonzero(found))), whole(len(found)))


def whole(value):
    """A number written to the unit, thousands set apart."""
    return f"{float(value):,.0f}".replace(",", "\u202f")


def share_words(share):
    """A share as a percentage, small ones with a decimal."""
    return f"{100 * share:.{0 if share >= 0.1 else 1}f}\u202f%"


def spots_words(count):
    """``1 spot`` or ``2 spots``."""
    return Words("{} spot", whole(count)) if count == 1 else Words("{} spots", whole(count))
