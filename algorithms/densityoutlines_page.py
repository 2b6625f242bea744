"""The report of the density outlines."""

import numpy as np

from ..plugin.looks import SEQUENCE
from ..plugin.report import Report
from ..plugin.text import number, percent, tr
from .plots import kilometre_extent, name_kilometres, thinned


def write_page(algorithm, job, layer, grid, density, levels, regions, inside, kept):
    """Write REPORT.

    Parameters
    ----------
    algorithm : SteadfieldAlgorithm
    job : Job
    layer : plugin.alignment.Aligned
    grid : Grid
    density : (rows, columns) array
    levels : list of numeric.outlines.Level
    regions : numeric.outlines.Regions
    inside : (n,) int array or None
        Records in each region.
    kept : (n,) bool array
        Regions that are written.
    """
    if not job.wanted("REPORT"):
        return
    square = job.working.square_kilometres
    known = np.count_nonzero(~np.isnan(density))
    report = Report(
        algorithm.displayName(),
        tr("Where is the densest ground, and how much of the whole does it hold?"),
        answer_words(levels, regions, known, square * grid.cell_area),
        confidential=inside is not None,
    )
    report.plot(
        tr("The outlines"),
        lambda figure: draw_outlines(figure, grid, density, levels, job.working.metres),
        tr("Each colour is the densest ground that holds a share of the total."),
        size=(8.0, 6.0),
    )
    level_table(report, levels, regions, known, square, grid)
    piece_table(report, layer, levels, regions, inside, kept, square)
    job.write_report(report, METHOD, CAUTIONS)


def answer_words(levels, regions, known, pixel_area):
    """The answer in a sentence: the level nearest to half."""
    position = int(np.argmin([abs(level.share - 0.5) for level in levels]))
    level = levels[position]
    pieces = int((regions.level == position).sum())
    words = tr("{} of the total lie on {} of the ground with a value: {} km² in {}.").format(
        percent(level.held),
        percent(level.pixels / known),
        number(level.pixels * pixel_area),
        tr("one piece") if pieces == 1 else tr("{} pieces").format(number(pieces)),
    )
    largest = regions.share[regions.level == position].max()
    if pieces > 1:
        words += tr(" The largest of them holds {}.").format(percent(largest))
    return words


def level_table(report, levels, regions, known, square, grid):
    """Table of the shares."""
    rows = [
        (
            percent(level.share),
            percent(level.held, 2),
            number(level.threshold),
            number(int((regions.level == position).sum())),
            number(level.pixels * grid.cell_area * square),
            percent(level.pixels / known),
        )
        for position, level in enumerate(levels)
    ]
    report.table(
        tr("Shares"),
        [
            tr("asked"),
            tr("held"),
            tr("density at the edge"),
            tr("pieces"),
            tr("area (km²)"),
            tr("of the ground"),
        ],
        rows,
        note=tr(
            "Held is the smallest share, not below the one asked, that whole pixels can hold; "
            "pixels of equal density are all in or all out."
        ),
    )


def piece_table(report, layer, levels, regions, inside, kept, square):
    """Table of the pieces that hold most, share by share."""
    rows = []
    for position in np.argsort([-level.share for level in levels]):
        for piece in np.flatnonzero(kept & (regions.level == position))[:8]:
            row = [
                percent(levels[position].share),
                number(int(regions.rank[piece])),
                percent(regions.share[piece], 2),
                number(regions.area[piece] * square),
                number(regions.peak[piece]),
            ]
            rows.append(row if inside is None else [*row, number(int(inside[piece]))])
    unit = f" ({layer.unit})" if layer.unit else ""
    head = [tr("share"), tr("rank"), tr("holds"), tr("area (km²)"), tr("peak") + unit]
    report.table(
        tr("Pieces"),
        head if inside is None else [*head, tr("records inside")],
        rows,
        note=tr("The eight pieces of each share that hold most; the layer has all."),
    )


def draw_outlines(figure, grid, density, levels, metres):
    """Plot the levels as filled ground."""
    from matplotlib.colors import ListedColormap
    from matplotlib.patches import Patch

    density = thinned(density)
    order = sorted(levels, key=lambda level: -level.share)
    shades = SEQUENCE[1:]
    colours = [
        shades[round(place * (len(shades) - 1) / max(len(order) - 1, 1))]
        for place in range(len(order))
    ]
    classes = np.zeros(density.shape)
    for place, level in enumerate(order, start=1):
        with np.errstate(invalid="ignore"):
            classes[density >= level.threshold] = place
    classes[np.isnan(density)] = np.nan
    axes = figure.subplots()
    axes.imshow(
        classes,
        extent=kilometre_extent(grid, metres),
        cmap=ListedColormap([SEQUENCE[0], *colours]),
        vmin=-0.5,
        vmax=len(order) + 0.5,
        interpolation="nearest",
    )
    name_kilometres(axes)
    handles = [
        Patch(color=colour, label=percent(level.share, 0)) for colour, level in zip(colours, order)
    ]
    axes.legend(handles=handles, frameon=False, loc="upper left", bbox_to_anchor=(1.0, 1.0))


METHOD = (
    tr(
        "Highest-density regions (Hyndman 1996, The American Statistician 50:120): pixels are "
        "taken from the densest down until they hold the share asked for. No other ground of that "
        "area holds as much. Each share falls into pieces whose pixels share sides; polygons "
        "follow the edges of the pixels."
    ),
)

CAUTIONS = (
    tr(
        "An outline says where the density is high, not that it is higher than chance or than the "
        "people who live there lead to expect."
    ),
    tr("Shares depend on the bandwidth of the surface: a smoother surface has wider outlines."),
    tr(
        "The share is that of the surface, not of the records to come. In simulated towns outlines "
        "of 50 % held 49 to 54 % of new records with an advised bandwidth, and up to 64 %, on 2.5 "
        "times the ground, with the normal-scale one; outlines of 90 % from 200 records held 82 to "
        "94 % of new records. The records that made the surface lie inside more often than new "
        "ones do."
    ),
)
