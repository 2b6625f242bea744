"""Plots and maps of zoning variance from base units."""

from textwrap import fill

import numpy as np
import shapely

from ..plugin.looks import VERDICTS, verdict_words
from ..plugin.text import number, tr
from .plots import colour_ramp
from .zoning_pages import BAND, LINE, MARK, VALUES, statistic_words, summaries

FANNED = ("largest", "smallest", "variation", "morans_i", "dissimilarity", "share_above")


def map_height(study, width, beside, extra):
    """Height in inches of a figure with so many maps beside each other, and what stands below."""
    left, bottom, right, top = shapely.total_bounds(study.units.polygons)
    shape = (top - bottom) / (right - left)
    return float(np.clip(width / beside * shape, 1.6, 9.0) + extra)


def draw_maps(figure, study, metres):
    """Plot the mean and the verdict side by side."""
    from matplotlib.patches import Patch

    grid = figure.add_gridspec(2, 2, height_ratios=[1, 0.05])
    left = figure.add_subplot(grid[0, 0])
    right = figure.add_subplot(grid[0, 1], sharex=left, sharey=left)
    mean = study.shown(study.run.decomposition().mean)
    known = mean[~np.isnan(mean)]
    outlines = _outlines(study, metres)
    low, high = np.quantile(known, [0.005, 0.995])
    drawn = _fill(left, outlines, mean, float(low), float(high))
    figure.colorbar(
        drawn,
        cax=figure.add_subplot(grid[1, 0]),
        orientation="horizontal",
        label=study.rate.unit,
        extend="both",
    )
    left.set_title(tr("mean over all zonings"), fontsize=11)
    colours = [VERDICTS.get(code, "#ffffff") for code in study.verdicts()]
    _paint(right, outlines, colours)
    right.set_title(tr("verdict"), fontsize=11)
    words = verdict_words()
    patches = [
        Patch(facecolor=VERDICTS[code], edgecolor="#7c8188", lw=0.5, label=words[code])
        for code in sorted(VERDICTS, reverse=True)
    ]
    below = figure.add_subplot(grid[1, 1])
    below.set_axis_off()
    below.legend(handles=patches, frameon=False, fontsize=9, loc="upper center")


def draw_source_maps(figure, study, metres):
    """Plot the three standard deviations as maps on one scale of colour."""
    split = study.run.decomposition()
    titles = {"scale": tr("grain"), "zoning": tr("cut"), "counting": tr("small numbers")}
    found = {name: study.shown(np.sqrt(getattr(split, name))) for name in titles}
    every = np.concatenate(list(found.values()))
    top = float(np.nanquantile(every, 0.99)) or 1.0
    outlines = _outlines(study, metres)
    panels = figure.subplots(1, 3, sharex=True, sharey=True)
    for axes, (name, title) in zip(panels, titles.items()):
        drawn = _fill(axes, outlines, found[name], 0.0, top)
        axes.set_title(title, fontsize=11)
    figure.colorbar(drawn, ax=panels, shrink=0.8, label=study.rate.unit, extend="max")


def _fill(axes, outlines, values, low, high):
    """Units in the colours of a ramp; returns what a colour bar needs."""
    from matplotlib.cm import ScalarMappable
    from matplotlib.colors import Normalize

    scale = ScalarMappable(Normalize(low, high if high > low else low + 1), colour_ramp())
    colours = scale.to_rgba(np.nan_to_num(values))
    colours[np.isnan(values)] = 1.0
    _paint(axes, outlines, colours)
    return scale


def _outlines(study, metres):
    """Paths of the units, in kilometres from the lower left corner, and the extent there."""
    from matplotlib.path import Path

    left, bottom, right, top = shapely.total_bounds(study.units.polygons)
    kilometre = metres / 1000
    paths = []
    for polygon in study.units.polygons:
        rings = shapely.get_rings(shapely.get_parts(polygon))
        places, ring = shapely.get_coordinates(rings, return_index=True)
        codes = np.full(len(places), Path.LINETO, Path.code_type)
        begins = np.r_[True, ring[1:] != ring[:-1]]
        codes[begins] = Path.MOVETO
        codes[np.r_[begins[1:], True]] = Path.CLOSEPOLY
        paths.append(Path((places - (left, bottom)) * kilometre, codes))
    return paths, ((right - left) * kilometre, (top - bottom) * kilometre)


def _paint(axes, outlines, colours):
    """Draw the units, each in its colour."""
    from matplotlib.collections import PathCollection

    paths, (width, height) = outlines
    line = 0.25 if len(paths) < 3000 else 0.0
    axes.add_collection(
        PathCollection(paths, facecolors=colours, edgecolors="#7c8188", linewidths=line)
    )
    axes.set_xlim(0, width)
    axes.set_ylim(0, height)
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
        axes.set_title(fill(words[name], 32), fontsize=9)
        if name in VALUES:
            axes.axhline(study.overall, color=MARK, lw=1, ls="--")
            axes.set_ylabel(study.rate.unit, fontsize=9)
        axes.set_xticks(counts, [number(count) for count in counts], fontsize=8)
        axes.minorticks_off()
    for axes in panels[3:]:
        axes.set_xlabel(tr("number of zones"), fontsize=9)
