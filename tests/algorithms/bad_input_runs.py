"""One run of an algorithm for the table of bad input, and how two results compare."""

import math
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from bad_input_layers import numbers_of
from osgeo import gdal
from qgis.core import QgsProcessingContext, QgsProcessingException, QgsProcessingFeedback

MOST_SECONDS = 15.0  # of the processor; a small run that takes longer counts as one that hangs
RASTER_ENDINGS, VECTOR_ENDINGS = (".tif",), (".gpkg",)


class Watcher(QgsProcessingFeedback):
    """Keeps warnings, and cancels a moment after a share of the work or once a file appears.

    A run that takes too long is cancelled too, and noted in ``hangs``.
    """

    def __init__(self, share=None, moment=0.0, folder=None):
        super().__init__(False)
        self.share, self.moment, self.folder = share, moment, folder
        self.warnings, self.errors = [], []
        self.due = self.cancelled_at = None
        self.began, self.hangs = time.process_time(), False

    def setProgress(self, percent):
        super().setProgress(percent)
        if self.share is not None and self.due is None and percent >= 100 * self.share:
            self.due = time.perf_counter() + self.moment

    def isCanceled(self):
        if self.cancelled_at is None:
            due = self.due is not None and time.perf_counter() >= self.due
            self.hangs = time.process_time() - self.began > MOST_SECONDS
            if due or self.hangs or (self.folder is not None and any(self.folder.iterdir())):
                self.cancelled_at = time.perf_counter(), time.process_time()
                self.cancel()
        return super().isCanceled()

    def pushWarning(self, words):
        self.warnings.append(words)

    def reportError(self, words, fatalError=False):
        self.errors.append(words)


@dataclass
class Outcome:
    """How a run ended.

    Attributes
    ----------
    trouble : str or None
        The message of the host's exception, None after a result.
    numbers : dict of str to float
    arrays : dict of str to (bands, rows, columns) array
    tables : dict of str to (int, dict of str to list)
    files : set of str
        What stands in the folder of the outputs.
    warnings : list of str
    since_cancel : float
        Seconds from the cancellation to the return, the lesser of wall clock and processor time.
    """

    trouble: str = None
    numbers: dict = field(default_factory=dict)
    arrays: dict = field(default_factory=dict)
    tables: dict = field(default_factory=dict)
    files: set = field(default_factory=set)
    warnings: list = field(default_factory=list)
    since_cancel: float = 0.0


def run(algorithm, parameters, targets, watcher=None):
    """Run once; anything but a result or the host's own exception goes on as it is."""
    import processing

    watcher = watcher or Watcher()
    outcome = Outcome(warnings=watcher.warnings)
    given = {**parameters, **{name: str(path) for name, path in targets.items()}}
    results = {}
    try:
        results = processing.run(
            f"steadfield:{algorithm}", given, feedback=watcher, context=QgsProcessingContext()
        )
    except QgsProcessingException as error:
        outcome.trouble = str(error)
    shown = outcome.trouble or ""
    assert "Traceback" not in shown and 'File "' not in shown, shown
    assert not watcher.hangs, f"still at work after {MOST_SECONDS} s of the processor"
    if watcher.cancelled_at is not None:
        wall, processor = watcher.cancelled_at
        outcome.since_cancel = min(time.perf_counter() - wall, time.process_time() - processor)
    for folder in {Path(path).parent for path in targets.values()}:
        if folder.is_dir():
            outcome.files |= {file.name for file in folder.iterdir()}
    for name, value in results.items():
        path = str(value)
        if path.endswith(RASTER_ENDINGS):
            values = gdal.Open(path).ReadAsArray().astype(float)
            outcome.arrays[name] = np.atleast_3d(values.T).T
        elif path.endswith(VECTOR_ENDINGS) and name in targets:
            outcome.tables[name] = numbers_of(path)
        elif isinstance(value, (int, float)):
            outcome.numbers[name] = float(value)
    return outcome


def difference(found, wanted, free=frozenset(), moved=frozenset()):
    """First thing in which two results differ, in words; empty where they are equal.

    Outputs and columns in ``free`` are not compared, numbers in ``moved`` to a tenth and rasters
    in it by their totals.
    """
    assert found.trouble is None, found.trouble
    assert wanted.trouble is None, wanted.trouble
    for name, value in wanted.numbers.items():
        near = 0.1 if name in moved else 1e-5
        if name not in free and not _close(found.numbers.get(name), value, near):
            return f"{name}: {found.numbers.get(name)} in place of {value}"
    for name, values in wanted.arrays.items():
        if name in moved:
            if not _close(_total(found.arrays[name]), _total(values), 0.1):
                return f"{name}: {_total(found.arrays[name])} in place of {_total(values)}"
            continue
        if found.arrays[name].shape != values.shape:
            return f"{name}: {found.arrays[name].shape} pixels in place of {values.shape}"
        reach = 1e-5 * np.abs(values).max()
        if not np.allclose(found.arrays[name], values, rtol=1e-5, atol=reach, equal_nan=True):
            worst = np.abs(found.arrays[name] - values).max()
            return f"{name}: pixels differ by up to {worst}"
    for name, (count, columns) in wanted.tables.items():
        if found.tables[name][0] != count:
            return f"{name}: {found.tables[name][0]} features in place of {count}"
        for column, values in columns.items():
            # a column may carry the name of an input field, which differs
            others = found.tables[name][1].get(column, values)
            if column not in free and not all(map(_close, others, values)):
                return f"{name}.{column}: {others} in place of {values}"
    return ""


def _total(values):
    return float(values[values > 0].sum())


def _close(one, other, near=1e-5):
    if isinstance(one, (int, float)) and isinstance(other, (int, float)):
        if math.isnan(other):
            return math.isnan(one)
        return math.isclose(one, other, rel_tol=near, abs_tol=1e-9)
    return one == other
