"""Blend density layers into one picture."""

import numpy as np
from qgis.core import QgsProcessingParameterFileDestination

from ..plugin import alignment, looks
from ..plugin.text import listed, number, tr
from . import ink_pages
from .base import SteadfieldAlgorithm
from .numeric import ink, ranks
from .numeric.colour import to_hex
from .numeric.errors import InputError
from .numeric.progress import part

# a picture of more pixels takes hours and tens of gigabytes
MOST_PIXELS = 4_000_000_000

STRETCHES = {
    "share": tr("by share of the layer's total that lies in no denser places"),
    "linear": tr("in proportion to the value"),
    "logarithmic": tr("in proportion to the logarithm of the value"),
}


class InkBlend(SteadfieldAlgorithm):
    ID = "inkblend"
    NAME = tr("Blend density layers into one picture")
    GROUP = "together"
    QUESTION = "real"
    HELP = tr(
        "Prints 2 to 6 layers on one map as inks. Hue says which layers are dense at a place, "
        "darkness how much is there of all of them. The picture is see-through where little is, so "
        "that a base map shows; the legend shows every ink from faint to full and every mixture, "
        "and drops into a print layout. The layers may differ in CRS, cell size, extent and type."
    )
    TAGS = (
        tr("bivariate"),
        tr("multivariate"),
        tr("blend"),
        tr("mix"),
        tr("colour"),
        tr("overlay"),
        tr("composite"),
        tr("legend"),
    )

    def define(self):
        self.add_rasters(
            "LAYERS",
            tr("Density layers"),
            tr("2 to 6 rasters of what is dense where; values above 0, no data left out."),
        )
        self.add_choice(
            "STRETCH",
            tr("Strength of the ink"),
            STRETCHES,
            tr(
                "How a value becomes ink. By share: half strength where as much of the layer's "
                "total lies in denser places as in others, so that layers with different units "
                "compare."
            ),
        )
        add_inks(self)
        self.add_text(
            "STRENGTHS",
            tr("Strength of each layer"),
            tr("A number from 0 to 1 for each layer, apart by commas. Empty: all 1."),
            advanced=True,
        )
        self.add_text("TITLE", tr("Title of the legend"), tr("Empty: the names of the layers."))
        self.add_raster(
            "PICTURE",
            tr("Picture"),
            tr("Red, green, blue and opacity; laid over white paper it shows the blended colours."),
        )
        add_legend(self)
        self.add_report()
        self.add_numbers(SMALLEST_DIFFERENCE=tr("Smallest colour difference of two inks"))

    def work(self, job):
        grid, layers = job.rasters("LAYERS", most=ink.MOST_LAYERS)
        job.check_cells("CELL_SIZE", grid.cell, grid.rows * grid.columns, MOST_PIXELS)
        names = [layer.name for layer in layers]
        inks = chosen_inks(job, names)
        strengths = chosen_strengths(job, len(layers))
        stretch = job.choice("STRETCH", STRETCHES)
        windows = alignment.windows(grid)
        reading = part(job.progress, 0.0, 0.4)
        with alignment.bounded_cache():
            tables, steps = strength_tables(job, layers, windows, stretch, strengths, reading)
        preview = ink_pages.Preview(grid)

        def levels_of(window):
            values = [layer.read(window) for layer in layers]
            levels = ink.rgba_of_values(values, tables, inks)
            preview.take(window, levels)
            return levels

        writing = part(job.progress, 0.4, 0.95)
        with alignment.bounded_cache():
            job.write_picture("PICTURE", grid, windows, levels_of, looks.picture, writing)
        svg = ink_pages.legend_of(
            inks,
            names,
            [layer.unit for layer in layers],
            job.words("TITLE") or listed(names),
            ink_pages.SCALES[stretch],
            strengths,
        )
        job.write_drawing("LEGEND", svg)
        job.give("SMALLEST_DIFFERENCE", ink.smallest_difference(inks))
        if job.wanted("REPORT"):
            report = ink_pages.blend_report(preview, svg, inks, layers, strengths, steps)
            job.write_report(report, ink_pages.blend_method(stretch), ink_pages.BLEND_CAUTIONS)


def add_inks(algorithm):
    """Add INKS, the user's own colours."""
    algorithm.add_text(
        "INKS",
        tr("Inks"),
        tr(
            "A colour such as #1f82de for each layer, apart by commas; each is brought to one "
            "lightness so that no layer outshines another. Empty: inks chosen to be told apart."
        ),
        advanced=True,
    )


def add_legend(algorithm):
    """Add LEGEND, a drawing with a PNG beside it."""
    algorithm.add(
        QgsProcessingParameterFileDestination(
            "LEGEND", tr("Legend"), tr("Drawings (*.svg)"), None, False, True
        ),
        tr("A drawing for the print layout; a PNG of the same name is written beside it."),
    )


def chosen_inks(job, names):
    """The inks of a run: the user's own at the common lightness, or the default ones."""
    text = job.words("INKS")
    if not text:
        return ink.default_inks(len(names))
    with job.naming("INKS"):
        inks = ink.own_inks(text, len(names))
    job.inform(tr("Inks at one lightness: {}").format(", ".join(to_hex(inks))))
    for words in ink.warnings_in_words(inks, names):
        job.warn(words)
    return inks


def chosen_strengths(job, count):
    """Strength of each layer in full, (count,)."""
    strengths = job.numbers("STRENGTHS") or [1.0] * count
    if len(strengths) != count:
        raise InputError(
            tr("{}: a number for each of the {} layers is needed; found {}.").format(
                job.label("STRENGTHS"), count, len(strengths)
            )
        )
    if not all(0 <= strength <= 1 for strength in strengths):
        raise InputError(
            tr("{}: strengths run from 0 to 1; found {}.").format(
                job.label("STRENGTHS"), listed(f"{strength:g}" for strength in strengths)
            )
        )
    return strengths


def strength_tables(job, layers, windows, stretch, strengths, progress):
    """First reading of the layers: what strength each value gets, and how finely ranks are told.

    Returns
    -------
    tables : list of (ranks.BINS,) float32 array
    steps : list of float
        `ranks.coarsest_rank_step` of each layer.
    """
    tables, steps = [], []
    for position, (layer, strength) in enumerate(zip(layers, strengths)):
        masses = ranks.new_masses()
        for done, window in enumerate(windows):
            progress((position + done / len(windows)) / len(layers))
            ranks.add_to_masses(masses, layer.read(window))
        if ranks.negative_mass(masses) < 0:
            job.warn(
                tr("{}: values below 0 (sum {}) count as 0.").format(
                    layer.name, number(ranks.negative_mass(masses))
                )
            )
        with job.naming("LAYERS", layer.name):
            table = ranks.strength_table(masses, stretch)
        tables.append(table * np.float32(strength))
        steps.append(ranks.coarsest_rank_step(masses))
    return tables, steps
