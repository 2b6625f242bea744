"""The kinds of bad input, and valid parameters of each algorithm to try them on."""

from dataclasses import dataclass, field

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
    moved_with_crs : set of str
        Outputs that are moved at random by what hangs on the last digits of all coordinates; in
        another CRS only their totals compare.
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
    moved_with_crs: frozenset = frozenset()
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
        moved_with_crs=frozenset({"DENSITY", "LEAST_EFFECTIVE"}),
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
