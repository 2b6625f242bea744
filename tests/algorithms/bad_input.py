"""What each algorithm is fed for the table of bad input, one run of it, and how runs compare."""

import math
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from bad_input_layers import numbers_of
from osgeo import gdal
from qgis.core import QgsProcessingContext, QgsProcessingException, QgsProcessingFeedback

# name in the table: what it stands for
KINDS = {
    "none": "no features",
    "null": "all geometry null",
    "some": "some geometry null",
    "mixed": "single and multiple parts mixed; rasters of different grids",
    "nan": "coordinates, or pixels, that are not a number",
    "inf": "infinite coordinates, or pixels",
    "z": "heights",
    "zm": "heights and measures",
    "deg": "geographic CRS",
    "nocrs": "unknown CRS",
    "feet": "CRS in feet",
    "far": "far from the origin of the CRS",
    "huge": "huge extent, tiny cells",
    "same": "all records on one place; all pixels alike",
    "one": "one record; one pixel",
    "wrong": "polygons for points, points for polygons",
    "w-nul": "null weights or counts",
    "w-neg": "negative weights, counts or pixels",
    "w-0": "weights, counts or pixels of 0",
    "w-all0": "no weight, count or pixel above 0",
    "bound": "boundary without features",
    "names": "spaces and non-ASCII in names and paths",
    "noway": "output in a folder that cannot be",
    "isdir": "output on a folder",
    "c-0": "cancelled before the start",
    "c-20": "cancelled at 20 % of a longer run",
    "c-wr": "cancelled while writing",
    "again": "second run into the same files",
}
CODES = {
    "=": "result equal to that of the same data in good state",
    "w": "the same, with a warning that counts what was left out",
    "ok": "plausible result",
    "m": "refused in a message that names the parameter",
    "c": "cancelled, nothing left behind",
    "-": "no such case",
    "FAIL": "anything else",
}
MOST_SECONDS = 15.0  # of the processor; a small run that takes longer counts as one that hangs
RASTER_ENDINGS, VECTOR_ENDINGS = (".tif",), (".gpkg",)


@dataclass(frozen=True)
class Recipe:
    """Valid parameters of an algorithm, small enough for a table of many runs.

    Attributes
    ----------
    main : str
        Parameter that receives the bad data; empty where there is none.
    feed : str
        Sort of data it takes, see `Feeds`.
    outputs : dict of str to str
        Ending of every output; those in ``optional`` are off in most runs.
    settings : dict
        Values of other parameters; the strings ``good:<feed>`` stand for layers.
    weights : dict of str to str
        Parameter to column of the weights or counts; set in the kinds about weights.
    tiny : dict
        What asks for cells too small for a huge extent.
    longer : dict
        What makes a run of many records last seconds.
    free : set of str
        Outputs and columns that may differ between equal data, such as coordinates.
    on_origin : bool
        Cells are counted from the origin of the CRS, so that a shift cuts the ground otherwise.
    counts_zeros : bool
        A record of weight 0 still counts as a record.
    faults_are_results : bool
        The algorithm reports bad records instead of leaving them out with a warning.
    """

    main: str
    feed: str
    outputs: dict
    optional: tuple = ()
    settings: dict = field(default_factory=dict)
    weights: dict = field(default_factory=dict)
    tiny: dict = field(default_factory=dict)
    longer: dict = field(default_factory=dict)
    free: frozenset = frozenset()
    on_origin: bool = False
    counts_zeros: bool = False
    faults_are_results: bool = False


def _outputs(rasters="", vectors="", report=True, **more):
    endings = dict.fromkeys(rasters.split(), ".tif")
    endings.update(dict.fromkeys(vectors.split(), ".gpkg"))
    endings.update(more)
    return {**endings, "REPORT": ".html"} if report else endings


RECIPES = {
    "adaptivedensity": Recipe(
        "RECORDS",
        "points",
        _outputs("DENSITY ERROR SUPPORT"),
        ("ERROR", "SUPPORT", "REPORT"),
        {"CELL_SIZE": 200, "BANDWIDTH": 500},
        {"WEIGHT": "weight"},
        {"CELL_SIZE": 0.05},
        {"CELL_SIZE": 3, "ERROR": ".tif"},
    ),
    "agreement": Recipe(
        "LAYERS",
        "rasters",
        _outputs("AGREEMENT", "ZONES"),
        ("REPORT",),
        {"SEED": 1, "DRAWS": 50},
        tiny={"CELL_SIZE": 0.01},
        longer={"DRAWS": 5000, "CELL_SIZE": 10},
        free=frozenset({"layers"}),
    ),
    "bandwidthadvice": Recipe(
        "RECORDS",
        "points",
        _outputs(),
        weights={"WEIGHT": "weight"},
        longer={"BOUNDARY": "good:zones"},
    ),
    "cellsize": Recipe(
        "RECORDS",
        "points",
        _outputs("", "TABLE"),
        settings={"SEED": 1, "OFFSETS": 4, "CELL_SIZES": "400, 800"},
        weights={"WEIGHT": "weight"},
        tiny={"CELL_SIZES": "0.05, 0.1"},
        longer={"OFFSETS": 400, "CELL_SIZES": "100, 200, 400"},
        on_origin=True,
    ),
    "centrespread": Recipe(
        "RECORDS",
        "points",
        _outputs("", "CENTRES ELLIPSES PATH"),
        ("PATH", "REPORT"),
        {"SEED": 1, "DRAWS": 99, "GROUP": "kind", "ORDER": "month"},
        {"WEIGHT": "weight"},
        longer={"DRAWS": 9999},
        free=frozenset({"CENTRE_X", "CENTRE_Y", "x", "y"}),
        counts_zeros=True,
    ),
    "correlationspread": Recipe(
        "UNITS",
        "units",
        _outputs("", "TABLE"),
        ("REPORT",),
        {
            "SEED": 1, "REPLICATES": 30, "ZONE_COUNTS": "4, 8",
            "X_COUNT": "cases", "X_TOTAL": "total", "Y_COUNT": "others", "Y_TOTAL": "total",
        },
        {"X_COUNT": "cases"},
        longer={"REPLICATES": 2000, "ZONE_COUNTS": "20, 60, 150"},
    ),
    "densityoutlines": Recipe(
        "DENSITY",
        "raster",
        _outputs("", "OUTLINES"),
        ("REPORT",),
        {"RECORDS": "good:points"},
        free=frozenset({"peak_x", "peak_y"}),
    ),
    "densityratio": Recipe(
        "RECORDS",
        "points",
        _outputs("RATIO P_VALUE", "OUTLINES"),
        ("P_VALUE", "OUTLINES", "REPORT"),
        {
            "BACKGROUND": "good:background", "SEED": 1, "RELABELLINGS": 19,
            "CELL_SIZE": 200, "BANDWIDTH": 600, "P_VALUE": ".tif",
        },
        {"WEIGHT": "weight"},
        {"CELL_SIZE": 0.05},
        {"RELABELLINGS": 999, "CELL_SIZE": 40},
    ),
    "gridvariance": Recipe(
        "RECORDS",
        "points",
        _outputs("VARIANCE", "TABLE"),
        ("REPORT",),
        {
            "BACKGROUND": "good:background", "SEED": 1, "REPLICATES": 12,
            "CELL_SIZES": "500, 1000", "EVALUATION_CELL": 250, "SHAPE": 1, "ROTATE": False,
        },
        {"COUNT": "weight"},
        {"EVALUATION_CELL": 0.05},
        {"REPLICATES": 3000, "EVALUATION_CELL": 40},
    ),
    "inkblend": Recipe(
        "LAYERS",
        "rasters",
        _outputs("PICTURE", LEGEND=".svg"),
        ("REPORT",),
        tiny={"CELL_SIZE": 0.01},
        longer={"CELL_SIZE": 2},
    ),
    "practicedistrict": Recipe("", "", {"FOLDER": ""}, (), {"SEED": 1, "SIZE": 2}),
    "rawink": Recipe(
        "LAYERS",
        "features",
        _outputs("PICTURE", LEGEND=".svg"),
        ("REPORT",),
        {"CELL_SIZE": 50},
        tiny={"CELL_SIZE": 0.05},
        longer={"CELL_SIZE": 2},
    ),
    "recordcheck": Recipe(
        "RECORDS",
        "points",
        _outputs("", "FLAGGED"),
        ("REPORT",),
        {"GROUP": "kind", "BOUNDARY": "good:zones"},
        {"WEIGHT": "weight"},
        counts_zeros=True,
        faults_are_results=True,
    ),
    "releaseaudit": Recipe(
        "RELEASES",
        "releases",
        _outputs("", "RISKS"),
        ("REPORT",),
        {"COUNT_FIELDS": "total; total"},
    ),
    "safehexagons": Recipe(
        "RECORDS",
        "points",
        _outputs("", "RELEASE TOTALS_OUT CUSTODIAN"),
        ("TOTALS_OUT", "CUSTODIAN", "REPORT"),
        {"SEED": 1, "HEXAGON_SIZE": 1200, "LEAST_COUNT": 5},
        {"WEIGHT": "weight"},
        {"HEXAGON_SIZE": 0.05},
        {"HEXAGON_SIZE": 60, "METHOD": 1},
        on_origin=True,
        counts_zeros=True,
    ),
    "safesurface": Recipe(
        "RECORDS",
        "points",
        _outputs("DENSITY"),
        ("REPORT",),
        {"CELL_SIZE": 200, "BANDWIDTH": 900, "LEAST_COUNT": 5},
        {"WEIGHT": "weight"},
        {"CELL_SIZE": 0.05},
        {"CELL_SIZE": 3, "BANDWIDTH": 500},
    ),
    "unitvariance": Recipe(
        "UNITS",
        "units",
        _outputs("", "UNITS_OUT TABLE EXTREMES"),
        ("EXTREMES", "REPORT"),
        {
            "SEED": 1, "REPLICATES": 30, "ZONE_COUNTS": "4, 8",
            "COUNT": "cases", "TOTAL": "total",
        },
        {"COUNT": "cases"},
        longer={"REPLICATES": 2000, "ZONE_COUNTS": "20, 60, 150"},
        # the count as it came
        free=frozenset({"cases"}),
    ),
}  # fmt: skip


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


def difference(found, wanted, free=frozenset()):
    """First thing in which two results differ, in words; empty where they are equal."""
    assert found.trouble is None, found.trouble
    assert wanted.trouble is None, wanted.trouble
    for name, value in wanted.numbers.items():
        if name not in free and not _close(found.numbers.get(name), value):
            return f"{name}: {found.numbers.get(name)} in place of {value}"
    for name, values in wanted.arrays.items():
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


def _close(one, other):
    if isinstance(one, (int, float)) and isinstance(other, (int, float)):
        if math.isnan(other):
            return math.isnan(one)
        return math.isclose(one, other, rel_tol=1e-5, abs_tol=1e-9)
    return one == other
