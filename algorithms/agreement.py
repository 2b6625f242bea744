"""Zones where layers agree."""

from dataclasses import dataclass
from itertools import combinations

import numpy as np

from ..plugin import alignment, looks
from ..plugin.outputs import Column
from ..plugin.rasters import Band, label_polygons
from ..plugin.text import number, tr
from . import agreement_page
from .base import SteadfieldAlgorithm
from .numeric import agreement, ranks, shifts
from .numeric.cell_size import two_digits
from .numeric.errors import InputError
from .numeric.progress import part

MOST_LAYERS = 12
MOST_MEMORY = 4e9
# Values, ranks, cores of each layer and the sums over them, in bytes a pixel.
BYTES_PER_LAYER, BYTES_PER_PIXEL = 16, 100
LEAST_PIXELS = 4
HELD_STEPS = (0, 25, 50, 75, 95, 100)


@dataclass(frozen=True)
class Findings:
    """What the layers have in common.

    Attributes
    ----------
    names, units : list of str
    values, ranked : (layers, rows, columns) float32 arrays
    inside : (layers, rows, columns) bool array
    known : (rows, columns) bool array
        Where some layer has data.
    weights : (layers,) array
    held : (rows, columns) array
    zones : numeric.agreement.Zones
    outlines : (zones,) array of shapely multipolygons
    areas : (zones,) array
        Square kilometres.
    tests : dict of (int, int) to numeric.shifts.ShiftTest
    """

    names: list
    units: list
    values: np.ndarray
    ranked: np.ndarray
    inside: np.ndarray
    known: np.ndarray
    weights: np.ndarray
    held: np.ndarray
    zones: agreement.Zones
    outlines: np.ndarray
    areas: np.ndarray
    tests: dict


class Agreement(SteadfieldAlgorithm):
    ID = "agreement"
    NAME = tr("Zones where layers agree")
    GROUP = "together"
    QUESTION = "real"
    HELP = tr(
        "Finds where the cores of several layers meet, a core being the densest pixels that hold a "
        "given share of a layer's total. Each zone comes with its area, its layers, and how often "
        "it would stay if the layers were weighted otherwise; each pair of layers with a test "
        "whether their cores meet more than unrelated ones would."
    )
    TAGS = (
        tr("overlap"),
        tr("consensus"),
        tr("multi-criteria"),
        tr("priority"),
        tr("zones"),
        tr("weights"),
        tr("overlay"),
    )

    def define(self):
        self.add_rasters(
            "LAYERS",
            tr("Density layers"),
            tr("Two or more rasters of what is dense where; they may differ in CRS and cell size."),
        )
        self.add_text(
            "WEIGHTS",
            tr("Weights of the layers"),
            tr("A number of 0 or more for each layer, apart by commas. Empty: all alike."),
        )
        self.add_number(
            "SHARE",
            tr("Share of a layer's total in its core (%)"),
            tr("A core is the smallest set of densest pixels that holds this share."),
            default=50,
            least=0.1,
            most=100,
        )
        self.add_number(
            "LEAST_LAYERS",
            tr("Least number of cores that meet"),
            tr("A zone is where at least so many cores meet."),
            default=2,
            least=1,
            whole=True,
        )
        self.add_number(
            "LEAST_AREA",
            tr("Least area of a zone (km²)"),
            tr("Smaller zones are dropped; 0: those of fewer than 4 pixels."),
            default=0,
            least=0,
        )
        self.add_number(
            "DRAWS",
            tr("Number of weightings drawn"),
            tr("Weights are an opinion: so many are drawn, all equally likely, and tried."),
            default=1000,
            least=1,
            most=100_000,
            whole=True,
            advanced=True,
        )
        self.add_seed()
        self.add_raster(
            "AGREEMENT",
            tr("Agreement"),
            tr("Weighted number of cores; share of weightings that hold; composite of the ranks."),
        )
        self.add_polygon_output(
            "ZONES", tr("Zones"), tr("Polygons where enough cores meet, ranked.")
        )
        self.add_report()
        self.add_numbers(
            ZONE_COUNT=tr("Number of zones"),
            ZONE_AREA=tr("Area of all zones (km²)"),
            LEAST_AREA_USED=tr("Least area used (km²)"),
        )

    def work(self, job):
        grid, layers = job.rasters("LAYERS", most=MOST_LAYERS)
        check_memory(job, grid, len(layers))
        share = job.real("SHARE") / 100
        weights = agreement.normalised_weights(job.numbers("WEIGHTS"), len(layers))
        pixel_area = grid.cell_area * job.working.square_kilometres
        least_area = job.real("LEAST_AREA") or LEAST_PIXELS * pixel_area
        values, ranked = read_ranks(job, layers, grid, part(job.progress, 0.0, 0.3))
        inside = agreement.cores(ranked, share)
        generator = np.random.default_rng(job.seed())
        held = agreement.hold_share(
            ranked, share, job.whole("DRAWS"), generator, part(job.progress, 0.3, 0.6)
        )
        zones = agreement.find_zones(
            values, inside, held, job.whole("LEAST_LAYERS"), least_area / pixel_area * (1 - 1e-9)
        )
        tests = shift_tests(inside, values, part(job.progress, 0.6, 0.9))
        findings = Findings(
            [layer.name for layer in layers],
            [layer.unit for layer in layers],
            values,
            ranked,
            inside,
            np.isfinite(values).any(axis=0),
            weights,
            held,
            zones,
            label_polygons(zones.labels, grid),
            zones.pixels * pixel_area,
            tests,
        )
        if len(zones) == 0:
            job.warn(tr("No zone was found; ask for fewer layers, a larger share or less area."))
        write_agreement(job, grid, findings)
        write_zones(job, findings)
        job.give("ZONE_COUNT", len(zones))
        job.give("ZONE_AREA", float(findings.areas.sum()))
        job.give("LEAST_AREA_USED", least_area)
        if job.wanted("REPORT"):
            report = agreement_page.report(grid, findings, pixel_area, job.whole("LEAST_LAYERS"))
            job.write_report(report, agreement_page.METHOD, agreement_page.CAUTIONS)


def check_memory(job, grid, count):
    """Refuse what would not fit, and say which cell size would."""
    needed = grid.rows * grid.columns * (count * BYTES_PER_LAYER + BYTES_PER_PIXEL)
    if needed > MOST_MEMORY:
        workable = grid.cell * (needed / MOST_MEMORY) ** 0.5 * job.working.metres
        raise InputError(
            tr("{}: {} x {} pixels would take about {} GB of memory; choose {} m or more.").format(
                job.label("CELL_SIZE"),
                number(grid.rows),
                number(grid.columns),
                number(needed / 1e9),
                number(two_digits(workable * 1.05)),
            )
        )


def read_ranks(job, layers, grid, progress):
    """Values and mass ranks of all layers, (layers, rows, columns) float32."""
    values = np.empty((len(layers), *grid.shape), np.float32)
    ranked = np.empty_like(values)
    windows = alignment.windows(grid)
    for position, layer in enumerate(layers):
        for done, window in enumerate(windows):
            progress((position + 0.7 * done / len(windows)) / len(layers))
            values[position][window.place] = layer.read(window)
        negative = values[position] < 0
        if negative.any():
            job.warn(
                tr("{}: {} values below 0 count as 0.").format(
                    layer.name, number(np.count_nonzero(negative))
                )
            )
        with job.naming("LAYERS", layer.name):
            ranked[position] = ranks.mass_rank(values[position])
    return values, ranked


def shift_tests(inside, values, progress):
    """The shift test of every pair of layers that share ground."""
    pairs = list(combinations(range(len(inside)), 2))
    known = np.isfinite(values)
    tests = {}
    for position, (first, second) in enumerate(pairs):
        progress(position / len(pairs))
        if (known[first] & known[second]).any():
            tests[first, second] = shifts.shift_test(
                inside[first], inside[second], known[first], known[second]
            )
    return tests


def write_agreement(job, grid, findings):
    """AGREEMENT: weighted number of cores, share of weightings that hold, composite."""

    def band(values):
        return np.where(findings.known, values, np.nan).astype(np.float32)

    count = len(findings.names)
    last = len(looks.SEQUENCE) - 1
    stops = [(met, looks.SEQUENCE[round(met * last / count)]) for met in range(count + 1)]
    job.write_raster(
        "AGREEMENT",
        grid,
        [
            Band("agreement", band(agreement.agreement(findings.inside, findings.weights)),
                 tr("cores")),
            Band("held", band(findings.held), tr("share of weightings")),
            Band("composite", band(agreement.composite(findings.ranked, findings.weights)),
                 tr("rank")),
        ],
        looks.ramp(1, stops, tr("of {} cores").format(count), clear_first=True),
    )  # fmt: skip


def write_zones(job, findings):
    """ZONES: polygons with rank, area, layers, how often they hold, and figures of each layer."""
    zones = findings.zones
    columns = [
        Column("rank", "int", np.arange(1, len(zones) + 1), tr("Rank")),
        Column("area_km2", "float", findings.areas, tr("Area (km²)")),
        Column("held", "float", zones.held, tr("Held (share of weightings)")),
        Column("cores", "int", zones.core_count, tr("Cores that meet, at most")),
        Column("mean_cores", "float", zones.mean_cores, tr("Cores that meet, on average")),
        Column(
            "layers",
            "text",
            agreement_page.core_names(findings),
            tr("Layers with their core here"),
        ),
    ]
    for position, (name, unit) in enumerate(zip(findings.names, findings.units)):
        words = f"{name} ({unit})" if unit else name
        columns += [
            Column(
                f"mean_{position + 1}",
                "float",
                zones.mean_value[position],
                tr("Mean of {}").format(words),
            ),
            Column(
                f"share_{position + 1}",
                "float",
                zones.total_share[position],
                tr("Share of the total of {}").format(name),
            ),
        ]
    job.write_layer(
        "ZONES",
        columns,
        findings.outlines,
        "polygon",
        zones_look,
    )


def zones_look(layer):
    """Zones by how often they hold, with the map below showing."""
    looks.steps('100 * "held"', HELD_STEPS, unit=tr("% of weightings"), width=0.3)(layer)
    layer.setOpacity(0.75)
