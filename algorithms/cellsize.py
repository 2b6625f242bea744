"""Cell size sweep: which size of hexagon or square suits a count of records."""

import numpy as np
import shapely

from ..plugin.outputs import Column
from ..plugin.text import number, percent, tr
from .base import SteadfieldAlgorithm
from .cellsize_page import answer_words, write_page
from .gridvariance_study import SHAPES
from .numeric import cell_size, hexagons
from .numeric.errors import InputError
from .numeric.progress import part

STACKED = 0.2


class CellSize(SteadfieldAlgorithm):
    """Try cell sizes and say which one the records support."""

    ID = "cellsize"
    NAME = tr("Cell size sweep")
    GROUP = "zoning"
    QUESTION = "cut"
    TAGS = (tr("cell size"), tr("hexagon"), tr("grid"), tr("histogram"), tr("bin width"))
    HELP = tr(
        "Counts the records in cells of many sizes, each shifted and turned at random, and advises "
        "a size: the one that two published criteria find closest to the true density, or the next "
        "larger one at which few enough records stand in cells that hold too few. Says when the "
        "criteria disagree."
    )

    def define(self):
        self.add_points("RECORDS", tr("Records"), tr("The point records that are to be counted."))
        self.add_field("WEIGHT", tr("Weight"), "RECORDS", tr("Weight of each record. Empty: 1."))
        self.add_boundary(tr("Polygons of the study area; records outside are left out."))
        self.add_text(
            "CELL_SIZES",
            tr("Cell sizes to try (m)"),
            tr(
                "Distances between the centres of neighbouring cells, apart by commas. Empty: 14 "
                "sizes around the reference rule of Scott (1992)."
            ),
        )
        self.add_choice("SHAPE", tr("Cells"), SHAPES, tr("Shape of the cells."))
        self.add_number(
            "LEAST_RECORDS",
            tr("Least records of a cell"),
            tr("A cell with fewer records than this is counted as too thin."),
            default=cell_size.LEAST_RECORDS,
            least=1,
            whole=True,
        )
        self.add_number(
            "MOST_BELOW",
            tr("Tolerated share of records in thin cells (%)"),
            tr("How many of the records may stand in cells that hold fewer than the least."),
            default=100 * cell_size.MOST_BELOW,
            least=0.0,
            most=100.0,
            advanced=True,
        )
        self.add_number(
            "OFFSETS",
            tr("Tilings of each size"),
            tr("Every figure is averaged over so many shifted and turned tilings."),
            default=cell_size.OFFSETS,
            least=1,
            most=1000,
            whole=True,
            advanced=True,
        )
        self.add_seed()
        self.add_working_crs()
        self.add_table("TABLE", tr("Table of sizes"), tr("One row for each size that was tried."))
        self.add_report(optional=False)
        self.add_numbers(
            ADVISED=tr("Advised cell size (m)"),
            BY_CROSS_VALIDATION=tr("Best size by cross-validation (m)"),
            BY_MEAN_VARIANCE=tr("Best size by mean and variance (m)"),
            RECORDS_BELOW=tr("Share of records in thin cells at the advised size"),
        )

    def work(self, job):
        x, y, weight, boundary = self._read(job)
        metres = job.working.metres
        asked = job.numbers("CELL_SIZES")
        if asked and min(asked) <= 0:
            raise InputError(
                tr("{}: every size must be above 0; found {}.").format(
                    job.label("CELL_SIZES"), number(min(asked))
                )
            )
        sizes = np.array(asked) / metres if asked else cell_size.sizes_to_try(x, y)
        # a turned extent takes up to about three times its cells
        across, up = np.ptp(x) / sizes.min() + 2, np.ptp(y) / sizes.min() + 2
        job.check_cells("CELL_SIZES", sizes.min(), 3 * across * up, hexagons.MOST_CELLS)
        found = cell_size.sweep(
            x,
            y,
            sizes,
            job.choice("SHAPE", SHAPES),
            np.random.default_rng(job.seed()),
            weight,
            boundary and _inside(boundary),
            job.whole("LEAST_RECORDS"),
            job.whole("OFFSETS"),
            part(job.progress, 0.05, 0.95),
        )
        advice = cell_size.advise(found, job.real("MOST_BELOW") / 100)
        job.inform(answer_words(found, advice, metres, job.whole("LEAST_RECORDS")))
        job.give("ADVISED", float(found.size[advice.advised] * metres))
        job.give("BY_CROSS_VALIDATION", float(found.size[advice.by_cross_validation] * metres))
        job.give("BY_MEAN_VARIANCE", float(found.size[advice.by_mean_variance] * metres))
        job.give("RECORDS_BELOW", float(found.records_below[advice.advised]))
        job.write_layer("TABLE", table_of(found, advice, metres), None, "none")
        write_page(self, job, found, advice, len(x))

    def _read(self, job):
        """Records inside the boundary, with a warning when many share a spot."""
        records = job.records("RECORDS", weight="WEIGHT")
        boundary = job.boundary()
        kept = records.weight > 0
        if not kept.all():
            job.warn(
                tr("{}: {} records of weight 0 were left out.").format(
                    job.label("RECORDS"), number((~kept).sum())
                )
            )
        if boundary is not None:
            inside = _inside(boundary)(records.x, records.y)
            if not inside.all():
                job.warn(
                    tr("{}: {} records outside the boundary were left out.").format(
                        job.label("RECORDS"), number((~inside).sum())
                    )
                )
            kept &= inside
        x, y, weight = records.x[kept], records.y[kept], records.weight[kept]
        if len(x) < 2:
            raise InputError(
                tr("{}: a sweep needs at least 2 records; found {}.").format(
                    job.label("RECORDS"), len(x)
                )
            )
        _, times = np.unique(np.c_[x, y], axis=0, return_counts=True)
        stacked = times[times > 1].sum() / len(x)
        if stacked > STACKED:
            job.warn(
                tr(
                    "{} of the records share their spot with another. Both criteria take that for "
                    "fine detail and favour small cells; lean on the least count instead."
                ).format(percent(stacked, 0))
            )
        return x, y, weight, boundary


def _inside(boundary):
    shapely.prepare(boundary)
    return lambda x, y: shapely.intersects_xy(boundary, x, y)


def table_of(found, advice, metres):
    """The columns of TABLE; densities per square kilometre."""
    per_area = (metres / 1000) ** 2
    advised = np.zeros(len(found.size), int)
    advised[advice.advised] = 1
    return [
        Column("cell_size", "float", found.size * metres, tr("Cell size (m)")),
        Column("cells", "float", found.cells, tr("Cells that hold records, mean over tilings")),
        Column("share_below", "float", found.share_below, tr("Share of these below the least")),
        Column("records_below", "float", found.records_below, tr("Share of records in these")),
        Column("counting_error", "float", found.counting_error, tr("Median relative error")),
        Column(
            "cross_validation",
            "float",
            found.cross_validation / per_area,
            tr("Cross-validation score (per km²)"),
        ),
        Column(
            "mean_variance",
            "float",
            found.mean_variance / per_area**2,
            tr("Mean-variance cost (per km⁴)"),
        ),
        Column("advised", "int", advised, tr("Advised size")),
    ]
