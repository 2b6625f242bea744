"""Density ratio: records over a background, and what labels at random would give."""

import math

import numpy as np

from ..plugin import looks
from ..plugin.outputs import Column
from ..plugin.rasters import Band, label_polygons
from ..plugin.text import number, percent, tr
from .base import SteadfieldAlgorithm
from .densityratio_page import write_page
from .densityratio_study import WEIGHTS_MEAN, prepare
from .numeric.contrast import density_contrast, relabel
from .numeric.errors import InputError
from .numeric.progress import part
from .numeric.tolerance import check_levels, tolerance_areas

# factors that the colours of a ratio may reach either way
FACTORS = (1.25, 1.5, 2.0, 3.0, 4.0, 6.0, 10.0, 20.0, 100.0)
# class of an area: side, and twice that where it holds over the whole map; no two shades are alike
# in grey print
CLASSES = (
    (1, "#d8a35c", tr("raised, pixel by pixel")),
    (-1, "#cfe3ef", tr("lowered, pixel by pixel")),
    (2, "#641f10", tr("raised over the whole map")),
    (-2, "#3f78ad", tr("lowered over the whole map")),
)


class DensityRatio(SteadfieldAlgorithm):
    """Where are records denser than the background leads to expect, beyond chance?"""

    ID = "densityratio"
    NAME = tr("Density ratio against a background")
    GROUP = "density"
    QUESTION = "real"
    TAGS = (tr("relative risk"), tr("rate"), tr("cases and controls"), tr("hotspot"))
    HELP = tr(
        "Divides the density of the records by that of the people or things they come from, both "
        "smoothed alike. 1 means as many as the background leads to expect, 2 twice as many. "
        "Records and background are then mixed and relabelled at random, many times, with every "
        "kernel in its place: what random labels do as well is not a finding. P-values are given "
        "pixel by pixel and, what counts for a map, over the whole of it. Where too little "
        "background stands behind a pixel there is no value."
    )

    def define(self):
        self.add_points("RECORDS", tr("Records"), tr("What is to be compared: cases, events."))
        weight = tr("Whole numbers count people or events on a place. Empty: each point is one.")
        self.add_field("WEIGHT", tr("Weight of the records"), "RECORDS", weight)
        self.add_points(
            "BACKGROUND",
            tr("Background"),
            tr("What records come from: residents, or centres of base units with their number."),
        )
        self.add_field("BACKGROUND_WEIGHT", tr("Weight of the background"), "BACKGROUND", weight)
        self.add_boundary()
        self._add_smoothing()
        self._add_relabelling()
        self.add_working_crs()
        self._add_outputs()

    def _add_smoothing(self):
        self.add_length(
            "BANDWIDTH",
            tr("Bandwidth"),
            tr(
                "Standard deviation of the kernel at a point of middling density, for records and "
                "background alike. Empty: the normal-scale rule with a size that follows the "
                "smaller of the two."
            ),
        )
        self.add_adaptation()
        self.add_length(
            "CELL_SIZE",
            tr("Cell size"),
            tr(
                "Side of a pixel. Empty: about a sixth of the bandwidth, some 250,000 pixels at "
                "most."
            ),
        )
        self.add_trim()
        self.add_choice(
            "WEIGHTS_MEAN",
            tr("What weights mean"),
            WEIGHTS_MEAN,
            tr(
                "Each of a number of people could have been a record, so numbers are relabelled "
                "one by one; the importance of a record moves with it."
            ),
            advanced=True,
        )

    def _add_relabelling(self):
        self.add_number(
            "LEAST_BACKGROUND",
            tr("Least background"),
            tr("Effective background points that must stand behind a pixel that gets a value."),
            default=10.0,
            least=1.0,
            advanced=True,
        )
        self.add_number(
            "RELABELLINGS",
            tr("Relabellings"),
            tr("199 find p-values down to 0.005, 999 down to 0.001. 0: no p-values."),
            default=199,
            least=0,
            most=99_999,
            whole=True,
        )
        self.add_text(
            "LEVELS",
            tr("Levels of the outlines (%)"),
            tr("P-values, apart by commas, at which areas are outlined."),
            default="5",
            optional=False,
            advanced=True,
        )
        self.add_seed()

    def _add_outputs(self):
        self.add_raster(
            "RATIO",
            tr("Density ratio"),
            tr("Bands: natural logarithm of the ratio, and the ratio itself."),
        )
        self.add_raster(
            "P_VALUE",
            tr("P-values"),
            tr("Bands: raised and lowered, pixel by pixel, then both over the whole map."),
            optional=True,
        )
        self.add_polygon_output(
            "OUTLINES",
            tr("Areas beyond tolerance"),
            tr("Where the p-value is at most a level; records, expected records and ratio inside."),
            optional=True,
            offered=True,
        )
        self.add_report()
        self.add_numbers(
            BANDWIDTH_USED=tr("Overall bandwidth used (m)"),
            CELL_SIZE_USED=tr("Cell size used (m)"),
            HIGHEST_RATIO=tr("Highest ratio"),
            LOWEST_RATIO=tr("Lowest ratio"),
            P_RAISED=tr("P-value of the highest ratio over the whole map"),
            P_LOWERED=tr("P-value of the lowest ratio over the whole map"),
            AREAS_RAISED=tr("Areas raised over the whole map"),
        )

    def work(self, job):
        count, levels = job.whole("RELABELLINGS"), asked_levels(job)
        study = prepare(job)
        found = density_contrast(
            study.pooled,
            study.grid,
            study.bandwidth,
            job.real("ADAPT"),
            job.real("TRIM"),
            study.mask,
            job.real("LEAST_BACKGROUND"),
            part(job.progress, 0.1, 0.2),
        )
        say_what_was_held(job, study, found)
        relabelling = areas = None
        if count:
            generator = np.random.default_rng(job.seed())
            relabelling = relabel(found, count, generator, part(job.progress, 0.2, 0.9))
            areas = tolerance_areas(found, relabelling, levels)
        give_numbers(job, study, found, relabelling, areas)
        write_ratio(job, study, found)
        write_p_values(job, study, relabelling)
        write_areas(job, study, areas)
        write_page(self, job, study, found, relabelling, areas)


def asked_levels(job):
    """The levels of LEVELS, 0 to 1, checked against the number of relabellings."""
    count = job.whole("RELABELLINGS")
    for output in ("P_VALUE", "OUTLINES"):
        if job.wanted(output) and not count:
            raise InputError(
                tr("{}: {} needs relabellings; ask for 199 or more.").format(
                    job.label("RELABELLINGS"), job.label(output)
                )
            )
    levels = [level / 100 for level in dict.fromkeys(job.numbers("LEVELS"))]
    if not levels:
        raise InputError(
            tr("{}: at least one percentage is expected; found none.").format(job.label("LEVELS"))
        )
    if count:
        with job.naming("LEVELS"):
            check_levels(levels, count)
    return levels


def say_what_was_held(job, study, found):
    """Say how many kernels the pixels widened and how much ground has no value."""
    if found.raised:
        job.inform(
            tr("{} kernels were widened to one and a half pixels ({} m).").format(
                number(found.raised), number(1.5 * study.grid.cell * job.working.metres)
            )
        )
    inside = np.ones(study.grid.shape, bool) if study.mask is None else study.mask >= 0.5
    bare = np.count_nonzero(inside & ~found.shown) / np.count_nonzero(inside)
    if bare > 0:
        job.inform(
            tr("{} of the ground has less than {} effective background points: no value.").format(
                percent(bare), number(job.real("LEAST_BACKGROUND"))
            )
        )


def give_numbers(job, study, found, relabelling, areas):
    """Number outputs; p-values only where labels were drawn."""
    job.give("BANDWIDTH_USED", study.bandwidth * job.working.metres)
    job.give("CELL_SIZE_USED", study.grid.cell * job.working.metres)
    highest, lowest = (math.exp(value) for value in extremes(found))
    job.give("HIGHEST_RATIO", highest)
    job.give("LOWEST_RATIO", lowest)
    job.inform(tr("Ratio from {} to {}.").format(number(lowest), number(highest)))
    if relabelling is None:
        return
    job.give("P_RAISED", relabelling.global_p("highest_scaled"))
    job.give("P_LOWERED", relabelling.global_p("lowest_scaled"))
    raised = areas.everywhere & (areas.side > 0) & (areas.level == areas.level.max(initial=0))
    job.give("AREAS_RAISED", int(np.count_nonzero(raised)))


def extremes(found):
    """Highest and lowest log ratio that is shown."""
    shown = found.log_ratio[found.shown]
    return float(shown.max()), float(shown.min())


def write_ratio(job, study, found):
    """Write RATIO with colours even in the logarithm and labels in times."""
    bands = [
        Band("log_ratio", found.log_ratio, tr("natural logarithm")),
        Band("ratio", np.exp(found.log_ratio), tr("times as expected")),
    ]
    job.write_raster("RATIO", study.grid, bands, looks.ramp(2, ratio_stops(found), tr("×")))


def ratio_stops(found):
    """Ratios and their colours, as far below 1 as above it."""
    reach = math.exp(float(np.quantile(np.abs(found.log_ratio[found.shown]), 0.995)))
    factor = next((one for one in FACTORS if one >= reach), FACTORS[-1])
    steps = np.linspace(-1, 1, len(looks.DIVERGING))
    return [(factor ** float(step), colour) for step, colour in zip(steps, looks.DIVERGING)]


def write_p_values(job, study, relabelling):
    """Write P_VALUE where it is wanted."""
    if not job.wanted("P_VALUE"):
        return
    bands = [
        Band(name, getattr(relabelling, name))
        for name in ("p_raised", "p_lowered", "p_raised_anywhere", "p_lowered_anywhere")
    ]
    dark = looks.SEQUENCE
    stops = [(0.0, dark[6]), (0.01, dark[5]), (0.05, dark[3]), (0.1, dark[2]), (0.2, dark[1])]
    look = looks.ramp(1, [*stops, (1.0, dark[0])], "")
    job.write_raster("P_VALUE", study.grid, bands, look)


def write_areas(job, study, areas):
    """Write OUTLINES where they are wanted."""
    if not job.wanted("OUTLINES"):
        return
    polygons = np.empty(areas.side.size, object)
    for labels in areas.labels:
        own = np.unique(labels[labels > 0]) - 1
        polygons[own] = label_polygons(np.where(labels > 0, labels - own[0], 0), study.grid)
    words = {code: text for code, _, text in CLASSES}
    codes = areas.side * np.where(areas.everywhere, 2, 1)
    square = job.working.square_kilometres
    columns = [
        Column("class", "int", codes, tr("Class")),
        Column("finding", "text", [words[code] for code in codes], tr("Finding")),
        Column("level", "float", 100 * areas.level, tr("Level (%)")),
        Column("rank", "int", areas.rank, tr("Rank by records beyond expected")),
        Column("area_km2", "float", areas.area * square, tr("Area (km²)")),
        Column("ratio", "float", areas.ratio, tr("Ratio farthest from 1")),
        Column("least_p", "float", areas.least_p, tr("Smallest p-value inside")),
        Column("records", "float", areas.records, tr("Records inside (weight)")),
        Column("expected", "float", areas.expected, tr("Records expected by the background")),
        Column("background", "float", areas.background, tr("Background inside (weight)")),
    ]
    present = [entry for entry in CLASSES if entry[0] in codes] or CLASSES
    job.write_layer("OUTLINES", columns, polygons, "polygon", looks.categories("class", present))
