"""Legends and reports of pictures made of inks."""

import numpy as np

from ..plugin.pictures import drawing_to_png, levels_to_png
from ..plugin.report import Report
from ..plugin.text import listed, number, percent, tr
from .numeric import ink
from .numeric.colour import VISIONS, seen_as, to_hex
from .numeric.legend import draw_legend

PREVIEW_SIDE = 900

VISION_WORDS = {
    "normal": tr("normal vision"),
    "protanopia": tr("without red cones (protanopia)"),
    "deuteranopia": tr("without green cones (deuteranopia)"),
    "tritanopia": tr("without blue cones (tritanopia)"),
}
SCALES = {
    "share": tr(
        "Full: the densest place of the layer. Half: half of the layer's total lies in denser "
        "places."
    ),
    "linear": tr("Full: the largest value of the layer. Half: half of that value."),
    "logarithmic": tr(
        "Full: the largest value of the layer. Half: about one thirtieth of it; faint: less than a "
        "thousandth."
    ),
}
BLEND_CAUTIONS = [
    tr(
        "Colours tell which layers are dense and roughly how much; they are no means to read off "
        "values. Strengths are relative to each layer, so equal ink is not an equal number."
    ),
    tr(
        "Densities smooth their records; a place with ink need not hold a record, and edges of ink "
        "are not borders of anything."
    ),
    tr(
        "Over a coloured base map the inks change their look; use a pale or grey one. "
        "The colour differences given here are for white paper."
    ),
]


class Preview:
    """A small copy of a picture, taken while the picture is written.

    Parameters
    ----------
    grid : numeric.grid.Grid
        Of the picture.
    """

    def __init__(self, grid):
        self.step = max(1, -(-max(grid.shape) // PREVIEW_SIDE))
        rows, columns = (-(-size // self.step) for size in grid.shape)
        self.levels = np.zeros((4, rows, columns), np.uint8)

    def take(self, window, levels):
        """Keep the pixels of a window that fall on the preview's coarser lattice."""
        first_row, first_column = -window.row % self.step, -window.column % self.step
        kept = levels[:, first_row :: self.step, first_column :: self.step]
        row = (window.row + first_row) // self.step
        column = (window.column + first_column) // self.step
        self.levels[:, row : row + kept.shape[1], column : column + kept.shape[2]] = kept


def legend_of(inks, names, units, title, scale, strengths=None):
    """The legend with the plugin's words."""
    words = {
        "title": title,
        "faint": tr("faint"),
        "full": tr("full"),
        "scale": scale,
        "pairs": tr("Where two layers meet"),
        "pairs_note": tr(
            "On the diagonal one layer alone in full. Below it two layers: the column's layer "
            "grows to the right, the row's downwards."
        ),
        "all": tr("All layers together, from faint to full"),
    }
    return draw_legend(inks, names, units, words, strengths)


def blend_report(preview, svg, inks, layers, strengths, steps):
    """Report of a blended picture.

    Parameters
    ----------
    preview : Preview
    svg : str
        The legend.
    inks : (layers, 3) array
    layers : sequence of plugin.alignment.Aligned
    strengths : sequence of float
    steps : sequence of float
        How finely ranks are told in each layer.

    Returns
    -------
    plugin.report.Report
    """
    names = [layer.name for layer in layers]
    found = ink.readability(inks)
    report = Report(
        tr("{} layers in one picture").format(len(layers)),
        tr("Where are these layers dense, alone and together?"),
        _readability_answer(found, names),
    )
    add_pictures(report, preview, svg)
    add_readability(report, inks, names, found)
    rows = [
        (
            position + 1,
            layer.name,
            layer.unit or tr("not noted"),
            number(strength),
            layer.how,
            percent(step, 2),
        )
        for position, (layer, strength, step) in enumerate(zip(layers, strengths, steps))
    ]
    report.table(
        tr("Layers"),
        [
            tr("no."),
            tr("layer"),
            tr("unit"),
            tr("strength"),
            tr("read"),
            tr("ranks told within"),
        ],
        rows,
        tr(
            "Ranks are those of values rounded by less than 0.05 %; the last column is the largest "
            "share of a layer's total that shares one rounded value."
        ),
    )
    return report


def raw_report(preview, svg, inks, names, counts, full):
    """Report of raw layers as ink.

    Parameters
    ----------
    preview, svg, inks
        As for `blend_report`.
    names : sequence of str
    counts : sequence of (rows, columns) arrays
    full : sequence of int
        Number of features that nearly fill a pixel.
    """
    report = Report(
        tr("The records of {} layers as they lie").format(len(names)),
        tr("What do the data look like before anything is smoothed?"),
        tr("The darker a pixel, the more features overlap on it; its hue says of which layer."),
        confidential=True,
    )
    add_pictures(report, preview, svg)
    if len(inks) > 1:
        add_readability(report, inks, names, ink.readability(inks))
    report.table(
        tr("Layers"),
        [
            tr("no."),
            tr("layer"),
            tr("pixels with ink"),
            tr("most on one pixel"),
            tr("nearly full at"),
        ],
        [
            (
                position + 1,
                name,
                number(np.count_nonzero(count)),
                number(float(count.max())),
                number(most),
            )
            for position, (name, count, most) in enumerate(zip(names, counts, full))
        ],
    )
    return report


def _readability_answer(found, names):
    worst = min(found[1:], key=lambda one: one.inks)
    first, second = (f"“{names[index]}”" for index in found[0].ink_pair)
    if found[0].inks < ink.ALIKE:
        return tr("{} and {} cannot be told apart in this picture; choose other inks.").format(
            first, second
        )
    if found[0].inks < ink.CLOSE:
        return tr("{} and {} are hard to tell apart in this picture.").format(first, second)
    if worst.inks < ink.ALIKE:
        blurred = listed(f"“{names[index]}”" for index in worst.ink_pair)
        return tr("All inks are told apart in normal vision, but {} look alike {}.").format(
            blurred, VISION_WORDS[worst.vision]
        )
    return tr(
        "The darker a place, the more is there; its hue says of which layer. All inks are told "
        "apart in normal vision and under the three simulated deficiencies."
    )


def add_pictures(report, preview, svg):
    """Add the picture, its legend, and how it looks to readers with other colour vision."""
    report.picture(
        tr("The picture"),
        levels_to_png(preview.levels),
        tr("On white paper, reduced to fit this page; the legend is below."),
    )
    try:
        png = drawing_to_png(svg, 110)
    except ImportError:
        png = None
    if png:
        report.picture(tr("Legend"), png, tr("Each ink, each mixture of two, and all together."))
    halved = preview.levels[:, ::2, ::2] if max(preview.levels.shape) > 400 else preview.levels
    shown = ink.over(halved)
    rows, columns = shown.shape[:2]

    def draw(figure):
        for position, axes in enumerate(figure.subplots(2, 2).ravel()):
            vision = VISIONS[position]
            axes.imshow(np.clip(seen_as(shown, vision), 0, 1), interpolation="antialiased")
            axes.set_title(VISION_WORDS[vision], fontsize=10)
            axes.set_axis_off()

    report.plot(
        tr("As others see it"),
        draw,
        tr(
            "The picture in normal vision and as simulated for the three kinds of missing cones "
            "(Machado, Oliveira & Fernandes 2009)."
        ),
        size=(8.0, max(2.0, min(8.0 * rows / columns, 12.0))),
    )


def add_readability(report, inks, names, found):
    """Add the smallest colour differences and, in words, what they mean."""
    warnings = ink.warnings_in_words(inks, names)
    if warnings:
        report.text(tr("Inks that are hard to tell apart"), *warnings, kind="caution")
    report.table(
        tr("Can the colours be told apart?"),
        [
            tr("vision"),
            tr("inks"),
            tr("closest two inks"),
            tr("inks and mixtures"),
            tr("closest two of them"),
        ],
        [
            (
                VISION_WORDS[one.vision],
                number(one.inks),
                " / ".join(str(index + 1) for index in one.ink_pair),
                number(one.mixtures),
                " / ".join("+".join(str(index + 1) for index in members)
                           for members in one.mixture_pair),
            )
            for one in found
        ],
        tr(
            "Smallest colour difference (CIEDE2000) between inks in full, and between inks, "
            "mixtures of two and all together; 1 is just noticeable side by side, 15 and more is "
            "told apart at a glance. Layers by number. Mixtures of different pairs may look alike: "
            "hue alone does not name every pair."
        ),
    )  # fmt: skip
    report.table(
        tr("Inks"),
        [tr("no."), tr("layer"), tr("ink")],
        [
            (index + 1, name, colour)
            for index, (name, colour) in enumerate(zip(names, to_hex(inks)))
        ],
    )


def blend_method(stretch):
    """Paragraphs of the method of a blend."""
    strengths = {
        "share": tr(
            "Each layer becomes a strength from 0 to 1: the share of its total that lies in pixels "
            "no denser than the pixel (its mass rank)."
        ),
        "linear": tr(
            "Each layer becomes a strength from 0 to 1: its value over its largest value."
        ),
        "logarithmic": tr(
            "Each layer becomes a strength from 0 to 1: log(1 + 1000 v) / log 1001, v its value "
            "over its largest value."
        ),
    }
    return [strengths[stretch], *MIXING]


RAW_METHOD = tr(
    "Features are counted on square pixels: points on the pixel that holds them, lines on every "
    "pixel they cross, polygons on those whose middle they hold. Each lays one coat of see-through "
    "ink, so that n features have the strength 1 − (1 − ink)ⁿ."
)
MIXING = [
    tr(
        "Inks have one lightness in the colour space Oklab (Ottosson 2020). At a pixel with "
        "strengths s the coverage is 1 − ∏(1 − s/2): a layer in full covers half of the paper "
        "that is left. Lightness falls in proportion to coverage; hue and chroma follow the "
        "strength-weighted mean of the inks' chroma vectors."
    ),
    tr(
        "Opacity is the least that gives the blended colour over white paper. Colour differences "
        "are CIEDE2000 (Sharma, Wu & Dalal 2005); deficiencies are simulated after Machado, "
        "Oliveira & Fernandes (2009) at full severity. The default inks were found by a search for "
        "the largest smallest difference over all four kinds of vision."
    ),
]
