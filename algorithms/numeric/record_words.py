"""Numbers of records in words."""

import numpy as np


def of_all(found):
    """``1,234 of 5,678 records``."""
    return f"{whole(int(np.count_nonzero(found)))} of {whole(len(found))} records"


def whole(value):
    """A number written to the unit, thousands set apart."""
    return f"{float(value):,.0f}".replace(",", "\u2009")


def share_words(share):
    """A share as a percentage, small ones with a decimal."""
    return f"{100 * share:.{0 if share >= 0.1 else 1}f}\u2009%"


def plural(count, noun):
    return noun if count == 1 else noun + "s"
