"""Progress and cancellation as one small callable.

A progress callable takes the share of the work that is done (0 to 1) and raises
``CancelledError`` when the user asked to stop. Long loops call it at least every 0.2 s.
"""


def silent(share):
    """Report nothing and never cancel."""


class Remembered:
    """A progress callable that can be called again with the share it was told last."""

    def __init__(self, progress):
        self._progress = progress
        self._share = 0.0

    def __call__(self, share):
        self._share = share
        self._progress(share)

    def again(self):
        self._progress(self._share)


def part(progress, start, stop):
    """Return a progress callable whose 0 to 1 is the stretch start to stop of another.

    Parameters
    ----------
    progress : callable
        The progress callable of the whole work.
    start, stop : float
        The stretch of the whole, 0 to 1, that the part covers.

    Returns
    -------
    callable
    """

    def report(share):
        progress(start + (stop - start) * share)

    return report
