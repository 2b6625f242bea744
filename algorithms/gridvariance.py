"""Zoning variance from points: how far a map moves when cells are shifted, turned or resized."""

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from qgis.core import QgsProcessingParameterFeatureSource

from ..plugin import looks
from ..plugin.host import POINTS, POLYGONS
from ..plugin.rasters import Band
from ..plugin.text import number, percent, tr
from .base import SteadfieldAlgorithm
from .gridvariance_page import share_with, write_page
from .gridvariance_study import KINDS, SHAPES, prepare
from .numeric import lattice_variance, variance
from .numeric.errors import InputError
from .numeric.ground import split
from .numeric.progress import part
from .zoning_pages import summaries, table_columns


@dataclass(frozen=True)
class Outcome:
    """What the simulation found: (places,) arrays in the unit shown, NaN without a value."""

    scales: list
    mean: np.ndarray
    deviations: dict
    p_above: np.ndarray
    evidence: np.ndarray
    verdict: np.ndarray
    allocation: object


class GridVariance(SteadfieldAlgorithm):
    """Simulate many regular zonings of the same points and say what stays the same."""

    ID = "gridvariance"
    NAME = tr("Zoning variance from points")
    GROUP = "zoning"
    QUESTION = "cut"
    TAGS = (tr("boundary"), tr("cell size"), tr("scale"), tr("zoning"), tr("hexagon"), tr("MAUP"))
    HELP = tr(
        "Counts the records again and again in hexagons or squares of several sizes, each time "
        "shifted and turned at random, and keeps for every place the value of the cell it fell in. "
        "The result says how much of the map is owed to the grain (cell size), to the cut (where "
        "the cells lie) and to small numbers, and which places stand above or below the threshold "
        "whatever the cut. With a background the value is records per 1000 of it; without, records "
        "per square kilometre."
    )

    def define(self):
        self._add_layers()
        self._add_zonings()
        self.add_seed()
        self.add_working_crs()
        self.add_raster(
            "VARIANCE",
            tr("Zoning variance"),
            tr(
                "Bands: mean, sd_scale, sd_zoning, sd_counting (unit of the value), p_above (share "
                "of zonings above the threshold), verdict (1 holds above, -1 holds below, 0 "
                "neither), evidence (excess over the threshold in units of counting noise)."
            ),
        )
        self.add_table(
            "TABLE",
            tr("Table of statistics"),
            tr("One row for each cell size and statistic: quantiles and extremes over zonings."),
        )
        self.add_report()
        self.add_numbers(
            EVALUATION_CELL_USED=tr("Side of an evaluated pixel (m)"),
            THRESHOLD_USED=tr("Threshold used"),
            SHARE_ABOVE=tr("Share of the total in places that hold above"),
            SHARE_BELOW=tr("Share of the total in places that hold below"),
            EVENTS_REACHED=tr("Events reached by the average over zonings"),
            EVENTS_BETWEEN_ZONINGS=tr("Events between the 5 % and the 95 % zoning"),
        )

    def _add_layers(self):
        self.add(
            QgsProcessingParameterFeatureSource("RECORDS", tr("Records"), [POINTS, POLYGONS]),
            tr("Points, or base polygons with a count, which is spread evenly over the polygon."),
        )
        self.add_field(
            "COUNT",
            tr("Count of the records"),
            "RECORDS",
            tr("Number of records at each point or in each polygon. Empty: each point is one."),
        )
        self.add(
            QgsProcessingParameterFeatureSource(
                "BACKGROUND", tr("Background"), [POINTS, POLYGONS], optional=True
            ),
            tr(
                "What records are compared with, such as residents: points, or polygons with a "
                "total; the same layer as the records where one layer carries both. Empty: area."
            ),
        )
        self.add_field(
            "TOTAL",
            tr("Total of the background"),
            "BACKGROUND",
            tr(
                "Number at each point or in each polygon of the background. Empty: each point is "
                "one."
            ),
        )
        self.add_choice(
            "KIND",
            tr("A record is"),
            KINDS,
            tr("Decides what chance alone would do: Poisson for events, binomial for members."),
            advanced=True,
        )
        self.add_boundary(
            tr("Polygons of the study area; records outside are left out. Cells count only inside.")
        )

    def _add_zonings(self):
        self.add_text(
            "CELL_SIZES",
            tr("Cell sizes (m)"),
            tr(
                "Distances between the centres of neighbouring cells, apart by commas. Empty: six "
                "sizes, from about twenty records a cell up to a thirtieth of the area."
            ),
        )
        self.add_choice("SHAPE", tr("Cells"), SHAPES, tr("Shape of the cells."))
        self.add_number(
            "REPLICATES",
            tr("Zonings of each size"),
            tr("More make the figures steadier; the time grows in proportion."),
            default=200,
            least=2,
            most=100_000,
            whole=True,
        )
        self.add_flag(
            "ROTATE",
            tr("Turn the cells at random too"),
            tr("Otherwise they are only shifted."),
            default=True,
            advanced=True,
        )
        self.add_number(
            "THRESHOLD",
            tr("Threshold"),
            tr(
                "Value that places are judged against, per 1000 of the background, or per square "
                "kilometre without one. Empty: the overall value of the whole area."
            ),
            least=0.0,
            optional=True,
        )
        self.add_number(
            "BUDGET",
            tr("Budget (share of the total)"),
            tr(
                "Share of the background that a service can cover, 0 to 1. The report then says "
                "how many events are reached, or missed, because of where lines run."
            ),
            least=0.0,
            most=1.0,
            optional=True,
        )
        self.add_number(
            "LEAST_TOTAL",
            tr("Least total of a cell"),
            tr(
                "Cells with less of the background (or fewer square kilometres) than this have no "
                "value. Empty: so much that five records are expected; without a background, a "
                "tenth of the cell inside the area."
            ),
            least=0.0,
            optional=True,
            advanced=True,
        )
        self.add_length(
            "EVALUATION_CELL",
            tr("Side of an evaluated pixel"),
            tr("Pixel of the result. Empty: about 300 pixels along the longer side."),
            advanced=True,
        )

    def work(self, job):
        study = prepare(self, job)
        job.inform(
            tr("Cell sizes (m): {}").format(
                ", ".join(number(size * job.working.metres, 6) for size in study.sizes)
            )
        )
        outcome = simulate(job, study)
        give_numbers(job, study, outcome)
        table = table_of(job, study, outcome)
        job.write_raster(
            "VARIANCE",
            study.grid,
            bands_of(study, outcome),
            looks.raster_verdicts(6),
        )
        job.write_layer("TABLE", table, None, "none")
        write_page(self, job, study, outcome, SHAPES[job.choice("SHAPE", SHAPES)])


def simulate(job, study):
    """Run all zonings and put the figures into the unit shown.

    Returns
    -------
    Outcome
    """
    halves = None
    if job.given("BUDGET"):
        generator = np.random.default_rng(np.random.SeedSequence(job.seed(), spawn_key=(1,)))
        halves = split(
            study.ground, study.event_places, study.total_places, job.real("BUDGET"), generator
        )
    with ThreadPoolExecutor(min(4, os.cpu_count() or 1)) as executor:
        scales = lattice_variance.run_scales(
            study.ground,
            study.sizes,
            job.choice("SHAPE", SHAPES),
            job.whole("REPLICATES"),
            job.seed(),
            job.flag("ROTATE"),
            halves,
            executor,
            part(job.progress, 0.05, 0.95),
        )
    check_values(job, study, scales)
    parts, p_above, evidence, covered = lattice_variance.decompose_scales(scales)
    deviations = {
        name: study.factor * np.sqrt(getattr(parts, name))
        for name in ("scale", "zoning", "counting")
    }
    return Outcome(
        scales,
        study.factor * parts.mean,
        deviations,
        p_above,
        evidence,
        variance.verdict(p_above, evidence, covered),
        None if halves is None else lattice_variance.allocate(scales, halves),
    )


def check_values(job, study, scales):
    """Say at which sizes no cell had a value; refuse when there is none at all."""
    bare = [scale for scale in scales if not scale.moments.count.any()]
    if len(bare) == len(scales):
        raise InputError(
            tr(
                "{}: no cell of any size holds as much; choose larger cells or a lower least."
            ).format(job.label("LEAST_TOTAL"))
        )
    for scale in bare:
        job.warn(
            tr("Cells of {} m: none holds the least total, so this size has no value.").format(
                number(scale.size * job.working.metres)
            )
        )


def bands_of(study, outcome):
    """The bands of VARIANCE."""
    found = {
        "mean": (outcome.mean, study.unit),
        "sd_scale": (outcome.deviations["scale"], study.unit),
        "sd_zoning": (outcome.deviations["zoning"], study.unit),
        "sd_counting": (outcome.deviations["counting"], study.unit),
        "p_above": (outcome.p_above, ""),
        "verdict": (outcome.verdict, ""),
        "evidence": (outcome.evidence, ""),
    }
    bands = []
    for name, (values, unit) in found.items():
        image = np.full(study.grid.shape, np.nan)
        image[study.rows, study.columns] = values
        bands.append(Band(name, image, unit))
    return bands


def table_of(job, study, outcome):
    """The columns of TABLE."""
    rows = [
        (scale.size * job.working.metres, scale.replicates, *row)
        for scale in outcome.scales
        for row in summaries(scale.statistics, study.factor)
    ]
    return table_columns(("cell_size", "float", tr("Cell size (m)")), rows, study.unit)


def give_numbers(job, study, outcome):
    """Number outputs, and the main ones in the log."""
    above, below = share_with(study, outcome, 1), share_with(study, outcome, -1)
    job.give("EVALUATION_CELL_USED", study.grid.cell * job.working.metres)
    job.give("THRESHOLD_USED", study.ground.threshold * study.factor)
    job.give("SHARE_ABOVE", above)
    job.give("SHARE_BELOW", below)
    job.inform(
        tr("Threshold: {} {}. Holds above: {} of the total, holds below: {}.").format(
            number(study.ground.threshold * study.factor, 6),
            study.unit,
            percent(above),
            percent(below),
        )
    )
    found = outcome.allocation
    if found is not None:
        low, _, high = found.quantiles()
        job.give("EVENTS_REACHED", float(found.averaged))
        job.give("EVENTS_BETWEEN_ZONINGS", float(high - low))
