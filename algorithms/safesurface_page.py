"""The report of a disclosure-safe surface: for the custodian's file, not for release."""

import numpy as np
import shapely

from ..plugin.looks import MISSING
from ..plugin.report import Report
from ..plugin.text import number, tr
from .numeric.safe_surface import FAINT
from .plots import colour_ramp, thinned


def write_page(algorithm, job, study, found, density):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    study : safesurface.Study
    found : numeric.safe_surface.SafeSurface
    density : (rows, columns) array
        As released, per km².
    """
    if not job.wanted("REPORT"):
        return
    report = Report(
        algorithm.displayName(),
        tr("Can anyone be picked out, alone or combined with what is already published?"),
        answer_words(found),
        confidential=True,
    )
    report.plot(
        tr("What is released"),
        lambda figure: draw_density(figure, study, density),
        tr("Records per km²; colours follow the square root. Published figures only."),
        size=(8.0, 6.0),
    )
    report.table(
        tr("Figures"),
        [tr("figure"), tr("value"), tr("may be published")],
        figure_rows(study, found, job.working.metres),
    )
    job.write_report(report, method_words(study), CAUTIONS)


def answer_words(found):
    """The answer in a sentence."""
    return tr(
        "At least {} effective contributors stand behind every pixel with a density above 0, "
        "and the attack on the finished raster found {} of {} addresses that lie by "
        "themselves, where chance alone would find {}."
    ).format(
        number(found.least_effective),
        number(found.attack.found),
        number(found.attack.addresses),
        number(found.attack.by_chance),
    )


def figure_rows(study, found, metres):
    """Rows (figure, value, may be published)."""
    yes, no = tr("yes"), tr("no")
    effective = tr("Fewest effective contributors behind a pixel")
    return [
        (tr("Least bandwidth (m)"), number(study.bandwidth * metres), yes),
        (tr("Cell size (m)"), number(study.grid.cell * metres), yes),
        (effective, number(found.least_effective), yes),
        (tr("Pixels refused"), number(found.refused), yes),
        (tr("Groups of contributors"), number(len(found.groups.x)), no),
        (tr("Widest kernel (m)"), number(found.bandwidths.max() * metres), no),
        (tr("Addresses by themselves"), number(found.attack.addresses), no),
        (tr("Found by the attack"), number(found.attack.found), no),
        (tr("Found by chance on average"), number(found.attack.by_chance), no),
    ]


def method_words(study):
    """Method in words, with sources."""
    return [
        tr(
            "Records are divided into groups of neighbours with at least {} effective "
            "contributors each (microaggregation: Domingo-Ferrer & Mateo-Sanz 2002, IEEE "
            "Trans. Knowl. Data Eng. 14:189; effective size: Kish 1965). A Gaussian kernel "
            "stands near the mean place of each group's contributors; its bandwidth is the "
            "least bandwidth or, where that is wider, the group's radius, within which the "
            "least-count-th nearest contributor lies, in steps of the square root of 2. "
            "Places are moved by up to 2 / contributors of the radius, because the mean of a "
            "village and one lonely farm points at the farm."
        ).format(study.least),
        tr(
            "Below {} of the peak the density is set to 0: the error of the surface lies "
            "there. At the boundary kernels are made up for what they lose (Jones 1993)."
        ).format(f"{FAINT:g}"),
        tr(
            "Attack: peaks and holes of the raster and of its Richardson-Lucy deconvolution at "
            "several bandwidths, compared with true addresses that lie by themselves; chance "
            "by moving the peaks about. A bandwidth left to the tool is widened in steps of the "
            "square root of 2, up to three times, until the attack fails."
        ),
    ]


CAUTIONS = (
    tr("Thresholds are set by the data's owner and by law, not by this tool."),
    tr("This page is for the custodian's file. Publish only what is marked “yes”."),
    tr("The surface adds up to the number of records; check whether that may be known."),
    tr(
        "Surfaces of other periods or subsets of the same records can be subtracted; do "
        "not release several whose difference rests on few contributors."
    ),
)


def draw_density(figure, study, density):
    """Plot the released raster."""
    from matplotlib.colors import PowerNorm

    axes = figure.add_subplot()
    grid = study.grid
    drawn = axes.imshow(
        np.ma.masked_invalid(thinned(density)),
        extent=(grid.left, grid.right, grid.bottom, grid.top),
        cmap=colour_ramp(missing=MISSING),
        norm=PowerNorm(0.5),
        interpolation="nearest",
    )
    if study.boundary is not None:
        for one in shapely.get_parts(study.boundary):
            axes.plot(*shapely.get_coordinates(one.exterior).T, color="#3b3f46", linewidth=0.8)
    axes.set_aspect("equal")
    axes.set_axis_off()
    figure.colorbar(drawn, ax=axes, shrink=0.6, label=tr("per km²"))
