"""The report of zones where layers agree."""

import numpy as np

from ..plugin.looks import SEQUENCE
from ..plugin.report import Report
from ..plugin.text import listed, number, percent, tr

ROWS = 20
FIRM = 0.95
SIGNIFICANT = 0.05
MAP_SIDE = 700
ZONE_COLOUR = "#8a1f3d"

METHOD = [
    tr(
        "A layer's core is the smallest set of densest pixels that holds the given share of its "
        "total. Zones are connected pixels in which at least the given number of cores meet; a "
        "layer is named for a zone when its core takes at least half of it."
    ),
    tr(
        "How often a place holds: the layers' mass ranks (share of the total in pixels no denser) "
        "are put together as a weighted geometric mean, with weights drawn from the flat Dirichlet "
        "distribution; a pixel holds when the mean exceeds one minus the share of a core. Zones "
        "are ranked by that."
    ),
    tr(
        "Chance: one core is shifted against the other over the grid with opposite edges joined "
        "(Lotwick & Silverman 1982), by every possible shift. The p-value is the share of shifts "
        "under which the cores meet at least as closely. Where layers lack data, shifts compare "
        "what is known in both and are set against each other with the variance correction of "
        "Mrkvička, Dvořák, González & Mateu (2021)."
    ),
]
CAUTIONS = [
    tr(
        "Layers that both follow where people live meet for that reason alone; the shift test then "
        "says that they meet, not that one has to do with the other. Use densities relative to a "
        "background where that is the question."
    ),
    tr(
        "Shares of a core and least numbers are choices. A zone that holds under most weightings "
        "may still go if the share of a core is changed."
    ),
    tr(
        "Surfaces without an edge correction all fade towards the border of their area, and meet "
        "in its middle for that reason: of unrelated even patterns one pair in four then passes as "
        "meeting more than chance. Make densities with a boundary and corrected edges."
    ),
    tr(
        "The p-values are for one pair at a time; among many pairs some are small by chance. On "
        "layers that vary very slowly across the area the test rejects a little too often."
    ),
]


def report(grid, findings, pixel_area, least_layers):
    """Report of `algorithms.agreement`.

    Parameters
    ----------
    grid : numeric.grid.Grid
    findings : algorithms.agreement.Findings
    pixel_area : float
        Square kilometres.
    least_layers : int

    Returns
    -------
    plugin.report.Report
    """
    page = Report(
        tr("Where {} layers agree").format(len(findings.names)),
        tr("Which zones, how sure, and do the layers meet more than chance would make them?"),
        answer(findings, least_layers),
    )
    _add_map(page, grid, findings)
    _add_zones(page, findings)
    _add_tests(page, findings, pixel_area)
    page.table(
        tr("Layers"),
        [tr("no."), tr("layer"), tr("unit"), tr("weight"), tr("area of the core (km²)")],
        [
            (
                position + 1,
                name,
                findings.units[position] or tr("not noted"),
                number(findings.weights[position]),
                number(np.count_nonzero(findings.inside[position]) * pixel_area),
            )
            for position, name in enumerate(findings.names)
        ],
        tr(
            "Weights have a mean of 1 and make the agreement raster; zones count cores as they are."
        ),
    )
    return page


def answer(findings, least_layers):
    """The answer in two sentences."""
    zones = findings.zones
    if len(zones) == 0:
        first = tr("Nowhere do the cores of {} or more layers meet.").format(least_layers)
    else:
        firm = int(np.count_nonzero(zones.held >= FIRM))
        first = tr(
            "The cores of at least {} of {} layers meet in {} zones of {} km² together; {} of them "
            "hold under 95 % or more of all weightings."
        ).format(
            least_layers,
            len(findings.names),
            len(zones),
            number(float(findings.areas.sum())),
            firm or tr("none"),
        )
    together = [pair for pair, test in findings.tests.items() if test.p_value <= SIGNIFICANT]
    if not findings.tests:
        return first
    if not together:
        return f"{first} " + tr("No two layers meet more than chance would make them.")
    words = listed(f"{findings.names[one]} – {findings.names[other]}" for one, other in together)
    return f"{first} " + tr("More than chance would make them meet: {}.").format(words)


def core_names(findings):
    """For each zone the layers whose core takes at least half of it, in words."""
    return [
        listed(name for name, inside in zip(findings.names, parts) if inside >= 0.5)
        for parts in findings.zones.core_share.T
    ]


def _add_map(page, grid, findings):
    """A map of the number of cores with zones numbered by rank."""
    step = max(1, -(-max(grid.shape) // MAP_SIDE))
    count = findings.inside.sum(axis=0)[::step, ::step].astype(float)
    count[~findings.known[::step, ::step]] = np.nan
    layers = len(findings.names)

    def draw(figure):
        from matplotlib.colors import BoundaryNorm, LinearSegmentedColormap

        colours = LinearSegmentedColormap.from_list("cores", SEQUENCE, N=layers + 1)
        axes = figure.subplots()
        left, bottom, right, top = grid.bounds
        picture = axes.imshow(
            count,
            cmap=colours,
            norm=BoundaryNorm(np.arange(layers + 2) - 0.5, layers + 1),
            extent=(left, right, bottom, top),
            interpolation="nearest",
        )
        for rank, outline in enumerate(findings.outlines[:ROWS], start=1):
            for polygon in outline.geoms:
                axes.plot(*polygon.exterior.xy, color=ZONE_COLOUR, linewidth=0.9)
            place = outline.representative_point()
            axes.annotate(
                str(rank),
                (place.x, place.y),
                color="white",
                ha="center",
                va="center",
                fontsize=8,
                bbox={"boxstyle": "round,pad=0.2", "facecolor": ZONE_COLOUR, "edgecolor": "none"},
            )
        axes.set_axis_off()
        figure.colorbar(picture, ax=axes, ticks=range(layers + 1), label=tr("cores"), shrink=0.7)

    page.plot(
        tr("Map"),
        draw,
        tr("Number of cores that meet; zones outlined and numbered by rank, the first {}.").format(
            ROWS
        ),
        size=(8.0, float(np.clip(7.0 * grid.rows / grid.columns, 3.0, 9.0))),
    )


def _add_zones(page, findings):
    zones = findings.zones
    if len(zones) == 0:
        return
    names = core_names(findings)
    rows = [
        (
            rank + 1,
            number(findings.areas[rank]),
            percent(zones.held[rank], 0),
            number(zones.mean_cores[rank]),
            names[rank] or "–",
            " · ".join(percent(share) for share in zones.total_share[:, rank]),
        )
        for rank in range(min(len(zones), ROWS))
    ]
    note = tr(
        "Held: share of weightings under which the zone's pixels stay in, on average. The last "
        "column gives the share of each layer's total that lies in the zone, layer by layer."
    )
    if len(zones) > ROWS:
        note += " " + tr("{} further zones are in the layer.").format(len(zones) - ROWS)
    page.table(
        tr("Zones"),
        [
            tr("rank"),
            tr("area (km²)"),
            tr("held"),
            tr("mean cores"),
            tr("layers"),
            tr("shares of the totals"),
        ],
        rows,
        note,
    )


def _add_tests(page, findings, pixel_area):
    rows = [
        (
            f"{findings.names[one]} – {findings.names[other]}",
            number(test.shared * pixel_area),
            number(test.expected * pixel_area),
            tr("{} to {}").format(number(test.low * pixel_area), number(test.high * pixel_area)),
            number(test.p_value),
            tr("more than chance") if test.p_value <= SIGNIFICANT else tr("no more than chance"),
        )
        for (one, other), test in findings.tests.items()
    ]
    page.table(
        tr("Do the layers meet more than chance would make them?"),
        [
            tr("pair"),
            tr("shared core (km²)"),
            tr("expected"),
            tr("95 % of shifts"),
            tr("p-value"),
            tr("at 5 %"),
        ],
        rows,
        tr(
            "Shared area of two cores, against the same when one layer is shifted over the area. "
            "Expected and range are over all shifts."
        ),
    )
