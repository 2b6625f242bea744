"""Bandwidth advice: how wide a kernel the records ask for, by four rules."""

import math

import shapely

from ..plugin.text import number, said, tr
from .bandwidthadvice_page import write_page
from .base import SteadfieldAlgorithm
from .numeric.advice import advise
from .numeric.progress import part


class BandwidthAdvice(SteadfieldAlgorithm):
    """Advise one bandwidth for a density surface, and say why."""

    ID = "bandwidthadvice"
    NAME = tr("Bandwidth advice")
    GROUP = "density"
    QUESTION = "real"
    TAGS = (tr("kernel"), tr("smoothing"), tr("cross-validation"), tr("search radius"))
    HELP = tr(
        "How far should each record be spread? Too far, and concentrations vanish; not far enough, "
        "and single records look like concentrations. Four rules answer from the records "
        "themselves: two rules of thumb and two cross-validations, whose curves the report shows. "
        "Records stacked on one place, rounded coordinates and small samples are found and named, "
        "and one value is advised with the reason in a sentence. The bandwidth is the standard "
        "deviation of a Gaussian kernel, in metres, and chains into the density surface."
    )

    def define(self):
        self.add_weighted_records()
        self.add_boundary(tr("Polygons of the study area; records outside are left out."))
        self.add_working_crs()
        self.add_report(optional=False)
        self.add_numbers(
            NORMAL_SCALE=tr("Normal-scale bandwidth (m)"),
            OVERSMOOTHED=tr("Oversmoothed bandwidth (m)"),
            LEAST_SQUARES_CV=tr("Bandwidth by least-squares cross-validation (m)"),
            LIKELIHOOD_CV=tr("Bandwidth by likelihood cross-validation (m)"),
            ADVISED=tr("Advised bandwidth (m)"),
        )

    def work(self, job):
        records = job.records("RECORDS", weight="WEIGHT")
        boundary = job.boundary()
        metres = job.working.metres
        if boundary is not None and metres != 1.0:
            boundary = shapely.transform(boundary, lambda places: places * metres)
        with job.naming("RECORDS"):
            advice = advise(
                records.x * metres,
                records.y * metres,
                records.weight,
                boundary,
                part(job.progress, 0.1, 0.9),
            )
        for words in advice.warnings:
            job.warn(words)
        give_numbers(job, advice)
        write_page(self, job, records, advice)


def give_numbers(job, advice):
    """Number outputs in metres, and the advice in the log; no value where a curve has no best."""
    values = {
        "NORMAL_SCALE": advice.normal_scale,
        "OVERSMOOTHED": advice.oversmoothed,
        "LEAST_SQUARES_CV": advice.least_squares,
        "LIKELIHOOD_CV": advice.likelihood,
        "ADVISED": advice.advised,
    }
    for name, value in values.items():
        job.give(name, None if math.isnan(value) else value)
    job.inform(
        tr("Advised bandwidth: {} m. {}").format(number(advice.advised), said(advice.reason))
    )
