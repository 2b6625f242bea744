"""The report of an adaptive density surface."""

import numpy as np

from ..plugin.looks import NOISE, SEQUENCE
from ..plugin.report import Report
from ..plugin.text import number, percent, tr
from .numeric import bandwidth
from .numeric.crossvalidation import least_squares_scores
from .numeric.errors import InputError
from .numeric.outlines import density_levels
from .numeric.progress import part
from .plots import colour_ramp, kilometre_extent, name_kilometres, plain_logarithmic, thinned

KERNEL_WORDS = {"gaussian": tr("Gaussian"), "quartic": tr("quartic")}
CURVE_POINTS = 40
# more records than this make the curve of the bandwidth slow and no clearer
CURVE_RECORDS = 200_000


def write_page(algorithm, job, study, found, steady, per_km2):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    study : adaptivedensity_study.Study
    found, steady : numeric.estimate.Estimate
        The surface, and the same with only the pixels whose error is within the limit.
    per_km2 : float
        Densities per unit of the CRS squared times this are per km².
    """
    if not job.wanted("REPORT"):
        return
    limit = job.real("MOST_ERROR")
    report = Report(
        algorithm.displayName(),
        tr("Where are the records dense, and is that more than noise or an edge?"),
        answer_words(study, found, steady, per_km2, limit),
        confidential=True,
    )
    report.plot(
        tr("The surface and its error"),
        lambda figure: draw_surfaces(figure, job, study, found, limit, per_km2),
        tr(
            "Left: records per km²; colours follow the square root, so that low densities can be "
            "told apart. Right: relative standard error; grey where it is above {}."
        ).format(percent(limit, 0)),
        size=(10.0, 5.6),
    )
    figures_table(report, job, study, found, steady, per_km2, limit)
    metres = job.working.metres
    report.plot(
        tr("Bandwidths"),
        lambda figure: draw_bandwidths(figure, study, metres),
        tr(
            "Bandwidths of the records in metres; the line is the overall bandwidth of {} m. "
            "{} records are held at the narrowest and {} at the widest that the trim allows; {} "
            "were raised to reach the least number of other records."
        ).format(
            number(study.pilot * metres),
            number(study.adaptation.narrowest),
            number(study.adaptation.widest),
            number(study.adaptation.raised),
        ),
        size=(8.0, 2.8),
    )
    add_curve(report, job, study, part(job.progress, 0.9, 0.98))
    job.write_report(report, method_words(job, study), caution_words(study))


def shown_density(study, found):
    """Density inside the boundary, 0 elsewhere."""
    return np.where(found.inside, found.density, 0.0)


def peak_of(study, found):
    """Row and column of the densest pixel."""
    density = shown_density(study, found)
    return np.unravel_index(int(np.argmax(density)), density.shape)


def answer_words(study, found, steady, per_km2, limit):
    """The answer in a sentence or two."""
    peak = peak_of(study, found)
    density = shown_density(study, found)
    half = density_levels(np.where(found.inside, density, np.nan), [0.5])[0]
    reached = found.inside & (density > 0)
    share = np.count_nonzero(steady.inside & reached) / max(np.count_nonzero(reached), 1)
    held = density[steady.inside].sum() / density.sum()
    error = float(found.relative_error[peak])
    words = tr(
        "The density is highest at {} per km², give or take {}, and half of the total lies in {} "
        "of the area."
    ).format(
        number(float(density[peak]) * per_km2),
        percent(error, 0),
        percent(half.pixels / max(np.count_nonzero(found.inside), 1)),
    )
    if share > 0.995:
        return words + tr(" The standard error is below {} nearly everywhere.").format(
            percent(limit, 0)
        )
    return words + tr(
        " The standard error is below {} over {} of the area, where {} of the total lies; the "
        "rest is mostly noise."
    ).format(percent(limit, 0), percent(share, 0), percent(held, 0))


def figures_table(report, job, study, found, steady, per_km2, limit):
    """Table of what was read, chosen and found."""
    metres = job.working.metres
    peak = peak_of(study, found)
    density = shown_density(study, found)
    area = np.count_nonzero(found.inside) * study.grid.cell_area / per_km2
    rows = [
        (tr("records"), number(len(study.x))),
        (tr("sum of weights"), number(float(study.weight.sum()))),
        (tr("total held by the surface"), number(found.mass)),
        (tr("area with a value (km²)"), number(area)),
        (tr("mean density (per km²)"), number(float(density[found.inside].mean()) * per_km2)),
        (tr("highest density (per km²)"), number(float(density[peak]) * per_km2)),
        (tr("  its relative standard error"), percent(float(found.relative_error[peak]))),
        (tr("  effective records behind it"), number(float(found.effective[peak]))),
        (tr("  easting of the pixel (m)"), number(round(study.grid.x_centres()[peak[1]] * metres))),
        (
            tr("  northing of the pixel (m)"),
            number(round(study.grid.y_centres()[peak[0]] * metres)),
        ),
        (tr("overall bandwidth (m)"), number(study.pilot * metres)),
        (tr("narrowest bandwidth (m)"), number(float(study.bandwidths.min()) * metres)),
        (tr("widest bandwidth (m)"), number(float(study.bandwidths.max()) * metres)),
        (tr("cell size (m)"), number(study.grid.cell * metres)),
        (tr("rows x columns"), f"{study.grid.rows} x {study.grid.columns}"),
        (
            tr("pixels with an error above {}").format(percent(limit, 0)),
            number(np.count_nonzero(found.inside & ~steady.inside)),
        ),
    ]
    report.table(tr("Figures"), [tr("what"), tr("value")], rows)


def draw_surfaces(figure, job, study, found, limit, per_km2):
    """Plot density and relative standard error side by side."""
    from matplotlib.colors import PowerNorm

    extent = kilometre_extent(study.grid, job.working.metres)
    left, right = figure.subplots(1, 2, sharex=True, sharey=True)
    density = np.where(found.inside, found.density * per_km2, np.nan)
    top = float(np.nanmax(density)) or 1.0
    drawn = left.imshow(
        thinned(density), extent=extent, cmap=colour_ramp(), norm=PowerNorm(0.5, 0, top),
        interpolation="nearest",
    )  # fmt: skip
    bar = figure.colorbar(drawn, ax=left, location="bottom", shrink=0.85, label=tr("per km²"))
    ticks = top * np.linspace(0, 1, 5) ** 2
    bar.set_ticks(ticks, labels=[number(tick, 2) for tick in ticks])
    error = np.where(found.inside, found.relative_error, np.nan)
    ramp = colour_ramp(SEQUENCE[1:5])
    ramp.set_over(NOISE)
    drawn = right.imshow(
        thinned(100 * error), extent=extent, cmap=ramp, vmin=0, vmax=100 * limit,
        interpolation="nearest",
    )  # fmt: skip
    figure.colorbar(
        drawn, ax=right, location="bottom", shrink=0.85, extend="max",
        label=tr("standard error (% of the density)"),
    )  # fmt: skip
    for axes, title in ((left, tr("density")), (right, tr("relative standard error"))):
        axes.set_title(title, fontsize=11)
        name_kilometres(axes)
        axes.label_outer()


def draw_bandwidths(figure, study, metres):
    """Plot the distribution of the bandwidths on a logarithmic axis."""
    axes = figure.subplots()
    values = study.bandwidths * metres
    low, high = float(values.min()) * 0.95, float(values.max()) * 1.05
    axes.hist(values, bins=np.geomspace(low, high, 40), color=SEQUENCE[4])
    axes.axvline(study.pilot * metres, color="#8a5a1c", linewidth=2)
    plain_logarithmic(axes)
    axes.set_xlabel(tr("bandwidth (m)"))
    axes.set_ylabel(tr("records"))


def add_curve(report, job, study, progress):
    """Add the cross-validation curve of a fixed bandwidth, where there are records enough."""
    if not 10 <= len(study.x) <= CURVE_RECORDS:
        return
    try:
        normal = bandwidth.normal_scale(study.x, study.y, study.weight)
        widths = np.geomspace(normal / 8, normal * 2.5, CURVE_POINTS)
        scores = least_squares_scores(study.x, study.y, widths, study.weight, progress=progress)
    except InputError:
        return
    metres = job.working.metres
    report.plot(
        tr("Would another bandwidth fit better?"),
        lambda figure: draw_curve(figure, widths * metres, scores, normal * metres, study, metres),
        tr(
            "Least-squares cross-validation of a fixed bandwidth: an estimate of the squared error "
            "up to a constant; the lower the better. A curve that falls all the way to the left "
            "means stacked or rounded coordinates, and then it says nothing."
        ),
        size=(8.0, 3.0),
    )


def draw_curve(figure, widths, scores, normal, study, metres):
    """Plot the cross-validation score against the bandwidth."""
    axes = figure.subplots()
    axes.plot(widths, scores * 1e6 / metres**2, color=SEQUENCE[5], linewidth=2)
    axes.axvline(study.pilot * metres, color="#8a5a1c", linewidth=2, label=tr("used"))
    if not np.isclose(normal, study.pilot * metres):
        axes.axvline(normal, color="#8a5a1c", linestyle="--", label=tr("normal scale"))
    plain_logarithmic(axes)
    axes.set_xlabel(tr("bandwidth (m)"))
    axes.set_ylabel(tr("score (per km²)"))
    axes.legend(frameon=False)


def method_words(job, study):
    """Method in words, with sources."""
    rule = (
        tr("by the normal-scale rule (Silverman 1986; Scott 1992)")
        if study.chosen
        else tr("as asked for")
    )
    words = [
        tr(
            "Sample-point adaptive kernel estimate: the density at a place is the sum over the "
            "records of their weight times a {} kernel whose bandwidth, the standard deviation "
            "along each axis, belongs to the record (Silverman 1986, section 5.3)."
        ).format(KERNEL_WORDS[study.kernel]),
        tr(
            "The overall bandwidth is {} m, {}. A record's own bandwidth is that times "
            "(p / G)^-{}: p the density at the record by the overall bandwidth, G its geometric "
            "mean over the records; an exponent of 0.5 is the square-root law (Abramson 1982, Ann. "
            "Stat. 10:1217)."
        ).format(number(study.pilot * job.working.metres), rule, number(job.real("ADAPT"))),
        tr(
            "The standard error is that of a Poisson pattern, the root of the sum of squared "
            "weighted kernels, raised by what chance does to the bandwidths themselves where these "
            "follow the density (first order). The effective records are the square of the sum "
            "over the sum of squares (Kish 1965). Kernels are summed within 0.01 % of the peak of "
            "the exact sum by non-uniform Fourier transforms on a ladder of bandwidths (Greengard "
            "& Lee 2004, SIAM Rev. 46:443; Davies & Baddeley 2018, Stat. Comput. 28:937), or "
            "exactly."
        ),
    ]
    corrections = {
        "none": tr("Edges are not corrected: near the border of the area the density is too low."),
        "record": tr(
            "Edges are corrected by record: each weight is divided by the share of its kernel "
            "inside the boundary (Diggle 1985, Appl. Stat. 34:138), so that the total is kept."
        ),
        "place": tr(
            "Edges are corrected by place: the sum is divided by the share inside the boundary of "
            "a kernel at the pixel (Jones 1993, Stat. Comput. 3:135), with the mean bandwidth of "
            "the kernels that reach it."
        ),
    }
    if study.boundary is not None:
        words.append(corrections[study.edge])
    return words


def caution_words(study):
    """What a reader must keep in mind."""
    words = [
        tr(
            "A density shows where records are, not where the risk is high: more people make more "
            "records. Compare with a background before drawing conclusions."
        ),
        tr(
            "The error says what chance does to the smoothed density at this bandwidth. It does "
            "not say that the bandwidth is right, nor that the records are complete. One standard "
            "error holds in two of three cases; for 19 of 20 multiply and divide by exp(2 × error) "
            "instead, which holds a little less often where few records stand behind a place."
        ),
        tr(
            "The surface is not safe for release as it is: a lonely record shows as a hill around "
            "its address."
        ),
    ]
    if study.boundary is None:
        words.append(
            tr(
                "Without a boundary the surface runs out into empty ground, and where the records "
                "end because the data end, the density is too low."
            )
        )
    return words
