"""The report of the bandwidth advice."""

import math

import numpy as np

from ..plugin.looks import SEQUENCE
from ..plugin.report import Report
from ..plugin.text import number, percent, said, tr
from .numeric.grid import covering
from .numeric.surface import adaptive_surface
from .plots import colour_ramp, kilometre_extent, plain_logarithmic

# pixels of a small surface along its longer side
SMALL = 260
ACCENT = "#8a5a1c"
SHADES = {
    "normal_scale": "#5b6068",
    "oversmoothed": "#9aa0a8",
    "least_squares": SEQUENCE[5],
    "likelihood": "#7d1f1f",
}


def write_page(algorithm, job, records, advice):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    records : plugin.layers.Records
    advice : numeric.advice.Advice
    """
    if not job.wanted("REPORT"):
        return
    report = Report(
        algorithm.displayName(),
        tr("How far should each record be spread, so that the surface shows the pattern?"),
        tr("Use about {} m. {}").format(number(advice.advised, 2), said(advice.reason)),
        confidential=True,
    )
    values_table(report, advice)
    report.plot(
        tr("The curves"),
        lambda figure: draw_curves(figure, advice),
        tr(
            "Both cross-validations against the bandwidth, best at the top. Above: least squares, "
            "the estimated gain in squared error over an empty map. Below: likelihood, the mean "
            "log density of each record by all others, over that of the best bandwidth. Dots: "
            "best values; solid line: advised."
        ),
        size=(8.0, 5.0),
    )
    report.plot(
        tr("What the surface would look like"),
        lambda figure: draw_surfaces(figure, job, records, advice),
        tr(
            "Density with one bandwidth everywhere: half the advised one, the advised one, and "
            "twice. What shows in all three does not hang on the choice."
        ),
        size=(10.0, 4.0),
    )
    diagnosis_table(report, advice)
    job.write_report(report, METHOD, CAUTIONS)


def values_table(report, advice):
    """Table of the four rules and the advice."""

    def metres(value):
        return tr("no best value") if math.isnan(value) else number(value)

    report.table(
        tr("Bandwidths"),
        [tr("rule"), tr("bandwidth (m)"), tr("what it is")],
        [
            (tr("advised"), metres(advice.advised), tr("see the sentence above")),
            (
                tr("normal scale"),
                metres(advice.normal_scale),
                tr("best if the records formed one round normal cloud; too wide for several"),
            ),
            (
                tr("oversmoothed"),
                metres(advice.oversmoothed),
                tr("the most that any density of this spread asks for"),
            ),
            (
                tr("least-squares cross-validation"),
                metres(advice.least_squares),
                tr("least estimated squared error; varies from sample to sample"),
            ),
            (
                tr("likelihood cross-validation"),
                metres(advice.likelihood),
                tr("predicts each record best from the others; lonely records pull it wide"),
            ),
        ],
    )


def diagnosis_table(report, advice):
    """Table of what the records are like."""
    found = advice.diagnosis
    rows = [
        (tr("records with weight"), number(found.records)),
        (tr("effective records, by their weights"), number(found.effective)),
        (tr("different places"), number(found.places)),
        (tr("records that share their place with another"), percent(found.stacked)),
        (tr("distance within which a quarter has its nearest place (m)"), number(found.nearest)),
        (
            tr("spacing of rounded coordinates (m)"),
            number(found.rounding) if found.rounding else tr("none seen"),
        ),
    ]
    if not math.isnan(advice.near_boundary):
        rows.append((tr("records outside the boundary, left out"), number(found.outside)))
        rows.append(
            (
                tr("records within one advised bandwidth of the boundary"),
                percent(advice.near_boundary),
            )
        )
    report.table(tr("The records"), [tr("what"), tr("value")], rows)


def draw_curves(figure, advice):
    """Plot both cross-validation curves over one logarithmic axis of bandwidths."""
    above, below = figure.subplots(2, 1, sharex=True)
    gain = -advice.least_squares_curve * 1e6
    above.plot(advice.bandwidths, gain, color=SHADES["least_squares"], linewidth=2)
    above.set_ylabel(tr("gain (per km²)"))
    likelihood = advice.likelihood_curve - advice.likelihood_curve.max()
    below.plot(advice.likelihood_bandwidths, likelihood, color=SHADES["likelihood"], linewidth=2)
    below.set_ylabel(tr("mean log density"))
    below.set_xlabel(tr("bandwidth (m)"))
    for axes, best, bandwidths, curve, name in (
        (above, advice.least_squares, advice.bandwidths, gain, "least_squares"),
        (below, advice.likelihood, advice.likelihood_bandwidths, likelihood, "likelihood"),
    ):
        # narrow bandwidths can be worse by so much that the best would look flat
        top = curve.max()
        reach = max(top - curve[len(curve) // 2 :].min(), 1e-12)
        axes.set_ylim(top - 1.6 * reach, top + 0.15 * reach)
        axes.axvline(advice.advised, color=ACCENT, linewidth=2, label=tr("advised"))
        for rule, words, dash in (
            ("normal_scale", tr("normal scale"), "--"),
            ("oversmoothed", tr("oversmoothed"), ":"),
        ):
            axes.axvline(getattr(advice, rule), color=SHADES[rule], linestyle=dash, label=words)
        if not math.isnan(best):
            height = np.interp(math.log(best), np.log(bandwidths), curve)
            axes.plot([best], [height], "o", color=SHADES[name], markersize=7)
        plain_logarithmic(axes)
    above.legend(frameon=False, ncol=3, loc="lower center", bbox_to_anchor=(0.5, 1.0))


def draw_surfaces(figure, job, records, advice):
    """Plot small surfaces at half, once and twice the advised bandwidth."""
    from matplotlib.colors import PowerNorm

    metres = job.working.metres
    x, y = records.x * metres, records.y * metres
    margin = 2 * advice.advised
    bounds = x.min() - margin, y.min() - margin, x.max() + margin, y.max() + margin
    cell = max(bounds[2] - bounds[0], bounds[3] - bounds[1]) / SMALL
    grid = covering(bounds, cell)
    for axes, factor in zip(figure.subplots(1, 3, sharex=True, sharey=True), (0.5, 1.0, 2.0)):
        density = 1e6 * adaptive_surface(x, y, records.weight, factor * advice.advised, grid)
        axes.imshow(
            density,
            extent=kilometre_extent(grid, 1.0),
            cmap=colour_ramp(),
            norm=PowerNorm(0.5, 0, float(density.max()) or 1.0),
            interpolation="nearest",
        )
        axes.set_title(
            tr("{} m, up to {} per km²").format(
                number(factor * advice.advised), number(float(density.max()))
            ),
            fontsize=10,
        )
        axes.set_xlabel("km")
        axes.grid(False)


METHOD = (
    tr(
        "Normal scale: the spread of the records times n^(-1/6), the spread being the smaller of "
        "the standard deviation and the interquartile range over 1.349 (Silverman 1986, Density "
        "Estimation; Scott 1992, Multivariate Density Estimation). Oversmoothed: 1.085 times the "
        "standard deviation times n^(-1/6) (Terrell 1990, JASA 85:470). With weights n is the "
        "effective number (sum w)² / sum w² (Kish 1965)."
    ),
    tr(
        "Least-squares cross-validation (Rudemo 1982, Scand. J. Stat. 9:65; Bowman 1984, "
        "Biometrika 71:353) estimates the integrated squared error up to a constant; all "
        "bandwidths are read from one Fourier transform of the records. Likelihood "
        "cross-validation (Habbema et al. 1974; Duin 1976, IEEE Trans. Comput. C-25:1175) takes "
        "the mean log density of each record by all others."
    ),
    tr(
        "Advised is the geometric mean of the two cross-validations, never more than the "
        "oversmoothed value. With fewer than 30 effective records it is the oversmoothed value; "
        "where a fifth of the records or more are stacked it is the normal-scale value. These "
        "limits are common practice and have no single source."
    ),
)

CAUTIONS = (
    tr(
        "The four rules seek the bandwidth that brings a surface with one bandwidth everywhere "
        "closest to the density behind the records. A question about large districts may call for "
        "a wider one, a question about streets for a narrower one."
    ),
    tr(
        "The advised value is meant as the overall bandwidth of an adaptive surface (adaptation "
        "0.5), which then narrows where records crowd: in simulated patterns of one to four "
        "clusters its squared error was 1.04 to 1.6 times the least possible. A surface with one "
        "bandwidth everywhere should take the least-squares value: the advised one is too wide for "
        "it where some clusters are much tighter than others (1.02 to 5.3 times)."
    ),
    tr(
        "Cross-validation takes records as independent. Several records of one person or one "
        "household draw it towards narrow bandwidths."
    ),
)
