"""Plots and maps of zoning variance from base units."""

import numpy as np
import shapely

from ..plugin.looks import SEQUENCE, VERDICTS, verdict_words
from ..plugin.text import number, tr
from .zoning_pages import BAND, LINE, MARK, VALUES, statistic_words, summaries

FANNED = ("largest", "smallest", "variation", "morans_i", "dissimilarity", "share_above")


def draw_maps(figure, study, metres):
    """Plot the mean and the verdict side by side."""
    from matplotlib.patches import Patch

    left, right = figure.subplots(1, 2, sharex=True, sharey=True)
    mean = study.shown(study.run.decomposition().mean)
    known = mean[~np.isnan(mean)]
    drawn = _fill(left, study, mean, metres, 0.0, float(np.quantile(known, 0.995)))
    figure.colorbar(
        drawn, ax=left, location="bottom", shrink=0.8, label=study.rate.unit, extend="max"
    )
    left.set_title(tr("mean over all zonings"), fontsize=11)
    verdicts = study.verdicts()
    colours = [VERDICTS.get(code, "#ffffff") for code in verdicts]
    _paint(right, study, colours, metres)
    right.set_title(tr("verdict"), fontsize=11)
    words = verdict_words()
    patches = [
        Patch(facecolor=VERDICTS[code], edgecolor="#7c8188", lw=0.5, label=words[code])
        for code in sorted(VERDICTS, reverse=True)
    ]
    right.legend(
        handles=patches, frameon=False, fontsize=9, loc="upper center", bbox_to_anchor=(0.5, -0.1)
    )


def draw_source_maps(figure, study, metres):
    """Plot the three standard deviations as maps on one scale of colour."""
    split = study.run.decomposition()
    titles = {"scale": tr("grain"), "zoning": tr("cut"), "counting": tr("small numbers")}
    found = {name: study.shown(np.sqrt(getattr(split, name))) for name in titles}
    every = np.concatenate(list(found.values()))
    top = float(np.nanquantile(every, 0.99)) or 1.0
    panels = figure.subplots(1, 3, sharex=True, sharey=True)
    for axes, (name, title) in zip(panels, titles.items()):
        drawn = _fill(axes, study, found[name], metres, 0.0, top)
        axes.set_title(title, fontsize=11)
    figure.colorbar(drawn, ax=panels, shrink=0.8, label=study.rate.unit, extend="max")


def _fill(axes, study, values, metres, low, high):
    """Units in the colours of a ramp; returns what a colour bar needs."""
    from matplotlib.cm import ScalarMappable
    from matplotlib.colors import LinearSegmentedColormap, Normalize

    ramp = LinearSegmentedColormap.from_list("sequence", SEQUENCE)
    scale = ScalarMappable(Normalize(low, high if high > low else low + 1), ramp)
    colours = scale.to_rgba(np.nan_to_num(values))
    colours[np.isnan(values)] = 1.0
    _paint(axes, study, colours, metres)
    return scale


def _paint(axes, study, colours, metres):
    """Draw the units, their coordinates in kilometres from the lower left corner."""
    from matplotlib.collections import PathCollection
    from matplotlib.path import Path

    polygons = study.units.polygons
    left, bottom = shapely.total_bounds(polygons)[:2]
    kilometre = metres / 1000
    paths = []
    for polygon in polygons:
        rings = shapely.get_rings(polygon)
        parts = [(shapely.get_coordinates(ring) - (left, bottom)) * kilometre for ring in rings]
        paths.append(Path.make_compound_path(*(Path(part, closed=True) for part in parts)))
    many = len(polygons)
    axes.add_collection(
        PathCollection(
            paths,
            facecolors=colours,
            edgecolors="#7c8188",
            linewidths=0.25 if many < 3000 else 0.0,
            transform=axes.transData,
            rasterized=True,
        )
    )
    axes.autoscale_view()
    axes.set_aspect("equal")
    axes.grid(visible=False)
    axes.set_xlabel("km")


def draw_fans(figure, study):
    """Plot the spread of every statistic against the number of zones."""
    run, words = study.run, statistic_words()
    names = run.problem.statistic_names()
    scales = sorted(
        [*run.scales, *([] if run.reference is None else [run.reference])],
        key=lambda scale: scale.recipe.zone_count,
    )
    counts = [scale.recipe.zone_count for scale in scales]
    panels = figure.subplots(2, 3, sharex=True).ravel()
    for axes, name in zip(panels, FANNED):
        column = names.index(name)
        factor = study.rate.factor if name in VALUES else 1.0
        rows = [
            summaries({name: scale.statistics[:, column]}, study.rate.factor)[0][1:]
            for scale in scales
        ]
        lowest, q05, q50, q95, highest = np.array(rows, float).T
        if len(counts) > 1:
            axes.fill_between(counts, q05, q95, color=BAND, alpha=0.75, lw=0)
            axes.set_xscale("log")
        else:
            axes.vlines(counts, q05, q95, color=BAND, lw=8)
        axes.plot(counts, q50, color=LINE, marker="o", ms=4)
        for limit in (lowest, highest):
            axes.plot(counts, limit, color=LINE, lw=0.9, ls=":", marker=".")
        if run.official is not None:
            value = run.official.statistics[column] * factor
            axes.plot(run.official.zone_count, value, "D", color=MARK, ms=7)
        axes.set_title(words[name], fontsize=9, wrap=True)
        if name in VALUES:
            axes.axhline(study.overall, color=MARK, lw=1, ls="--")
            axes.set_ylabel(study.rate.unit, fontsize=9)
        axes.set_xticks(counts, [number(count) for count in counts], fontsize=8)
        axes.minorticks_off()
    for axes in panels[3:]:
        axes.set_xlabel(tr("number of zones"), fontsize=9)
