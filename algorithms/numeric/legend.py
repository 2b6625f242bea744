"""The legend of a blended picture, as scalable vector graphics.

Lengths are in millimetres of print, so that the file drops into a page layout at its true size.
"""

import re
from itertools import combinations
from textwrap import wrap
from xml.sax.saxutils import escape

import numpy as np

from .colour import oklab_to_srgb, to_hex
from .errors import InputError
from .ink import blend

WIDTH = 96.0
MARGIN = 4.0
LINE = 4.2
STEPS = 24
TILES = 3
RAMP_WIDTH, RAMP_HEIGHT = 40.0, 5.0
LARGEST_SQUARE, GAP = 11.0, 1.2
INK_COLOUR, QUIET_COLOUR = "#23262b", "#5b6068"
FONT = "Source Sans 3, Noto Sans, DejaVu Sans, Helvetica, Arial, sans-serif"
# Width of an average letter over the height of the type, in the widest of these fonts.
LETTER, BOLD_LETTER = 0.58, 0.66


# characters that the format forbids, escaped or not (XML 1.0, section 2.2)
FORBIDDEN = re.compile("[^\\t\\n\\r\\u0020-\\ud7ff\\ue000-\\ufffd\\U00010000-\\U0010ffff]")


def _safe(text):
    """A text as it may stand in the document."""
    return escape(FORBIDDEN.sub("\ufffd", text))


class _Drawing:
    """Shapes and words of one picture, from the top downwards."""

    def __init__(self):
        self.parts = []

    def square(self, left, top, width, height, colour):
        self.parts.append(
            f'<rect x="{left:.3f}" y="{top:.3f}" width="{width:.3f}" height="{height:.3f}" '
            f'fill="{colour}"/>'
        )

    def words(self, left, baseline, text, size=3.2, colour=INK_COLOUR, anchor="start", weight=400):
        self.parts.append(
            f'<text x="{left:.3f}" y="{baseline:.3f}" font-size="{size}" fill="{colour}" '
            f'text-anchor="{anchor}" font-weight="{weight}">{_safe(text)}</text>'
        )

    def document(self, title, height):
        body = "\n".join(self.parts)
        return (
            '<?xml version="1.0" encoding="UTF-8"?>\n'
            f'<svg xmlns="http://www.w3.org/2000/svg" width="{WIDTH:g}mm" height="{height:.3f}mm" '
            f'viewBox="0 0 {WIDTH:g} {height:.3f}" font-family="{FONT}">\n'
            f"<title>{_safe(title)}</title>\n"
            f'<rect width="{WIDTH:g}" height="{height:.3f}" fill="#ffffff"/>\n{body}\n</svg>\n'
        )


def _lines(text, width, size, letter=LETTER):
    """A text in lines of about a width, long words cut."""
    letters = max(int(width / (letter * size)), 8)
    return wrap(text, letters, break_long_words=True, break_on_hyphens=False) or [""]


def _colour(strengths, inks):
    return to_hex(np.clip(oklab_to_srgb(blend(np.asarray(strengths, float), inks)), 0, 1))


def _alone(layer, value, count):
    strengths = np.zeros(count)
    strengths[layer] = value
    return strengths


def draw_legend(inks, names, units, words, strengths=None):
    """Draw the legend of a blended picture.

    Parameters
    ----------
    inks : (layers, 3) array
        Encoded sRGB at the common lightness.
    names : sequence of str
        Names of the layers.
    units : sequence of str
        Unit of each layer, empty where it is not known.
    words : dict of str to str
        ``title``; ``faint``, ``full``: the ends of the ramps; ``scale``: what the ramps mean;
        ``pairs``: head of the mixtures; ``pairs_note``: how to read them; ``all``: all layers
        together.
    strengths : (layers,) array or None
        Strength of each layer in full, 0 to 1; 1 by default.

    Returns
    -------
    str
        A document of width 96 mm: each ink from faint to full, each pair's mixture, all together.

    Raises
    ------
    InputError
        Inks, names and units differ in number.
    """
    count = len(inks)
    if not count == len(names) == len(units):
        raise InputError(
            "A legend needs an ink, a name and a unit for each layer; found {}, {} and {}.",
            count,
            len(names),
            len(units),
        )
    strengths = np.ones(count) if strengths is None else np.asarray(strengths, float)
    drawing = _Drawing()
    top = MARGIN
    for line in _lines(words["title"], WIDTH - 2 * MARGIN, 4.4, BOLD_LETTER):
        top += 5.2
        drawing.words(MARGIN, top, line, 4.4, weight=600)
    top = _draw_ramps(drawing, top + 3.0, inks, names, units, words, strengths)
    if count > 1:
        top = _draw_pairs(drawing, top + 3.0, inks, words, strengths)
    if count > 2:
        top = _draw_all(drawing, top + 3.0, inks, words, strengths)
    return drawing.document(words["title"], top + MARGIN)


def _draw_ramp(drawing, left, top, full, inks):
    """Strengths from faint to full in equal steps; the last step shows them in full."""
    width = RAMP_WIDTH / STEPS
    for step in range(STEPS):
        # a little wider, so that no seam shows between the steps
        overlap = 0.05 if step < STEPS - 1 else 0.0
        colour = _colour(full * (step + 1) / STEPS, inks)
        drawing.square(left + step * width, top, width + overlap, RAMP_HEIGHT, colour)


def _draw_ramps(drawing, top, inks, names, units, words, strengths):
    """Each ink from faint to full with number, name and unit; returns the lower edge."""
    left = MARGIN + 5.0
    right = left + RAMP_WIDTH + 3.0
    for end, anchor, place in (("faint", "start", left), ("full", "end", left + RAMP_WIDTH)):
        drawing.words(place, top + 2.2, words[end], 2.8, QUIET_COLOUR, anchor)
    top += 3.4
    for layer, (name, unit) in enumerate(zip(names, units)):
        _draw_ramp(drawing, left, top, _alone(layer, strengths[layer], len(inks)), inks)
        drawing.words(MARGIN, top + 3.7, str(layer + 1), 3.4, weight=600)
        lines = _lines(name, WIDTH - MARGIN - right, 3.4)
        baseline = top + 3.7
        for line in lines:
            drawing.words(right, baseline, line, 3.4)
            baseline += LINE
        for line in _lines(unit, WIDTH - MARGIN - right, 2.8) if unit else ():
            drawing.words(right, baseline - 0.4, line, 2.8, QUIET_COLOUR)
            baseline += LINE - 0.6
        top = max(top + RAMP_HEIGHT, baseline - LINE + 1.0) + 2.0
    for line in _lines(words["scale"], WIDTH - 2 * MARGIN, 2.8):
        drawing.words(MARGIN, top + 2.0, line, 2.8, QUIET_COLOUR)
        top += 3.6
    return top


def _draw_pairs(drawing, top, inks, words, strengths):
    """A triangle of mixtures: a row and a column for each layer; returns the lower edge."""
    count = len(inks)
    drawing.words(MARGIN, top + 3.2, words["pairs"], 3.4, weight=600)
    top += 5.0
    for line in _lines(words["pairs_note"], WIDTH - 2 * MARGIN, 2.8):
        drawing.words(MARGIN, top + 2.2, line, 2.8, QUIET_COLOUR)
        top += 3.6
    top += 1.6
    left = MARGIN + 5.0
    side = min(LARGEST_SQUARE, (WIDTH - MARGIN - left) / count - GAP)
    step = side + GAP
    for layer in range(count):
        colour = _colour(_alone(layer, strengths[layer], count), inks)
        drawing.square(left + layer * step, top + layer * step, side, side, colour)
        middle = top + layer * step + side / 2 + 1.1
        drawing.words(MARGIN, middle, str(layer + 1), 3.4, weight=600)
        drawing.words(
            left + layer * step + side / 2, top + count * step + 2.6, str(layer + 1), 3.4,
            anchor="middle", weight=600,
        )  # fmt: skip
    tile = side / TILES
    for across, down in combinations(range(count), 2):
        for row in range(TILES):
            for column in range(TILES):
                mixed = np.zeros(count)
                mixed[across] = strengths[across] * (column + 1) / TILES
                mixed[down] = strengths[down] * (row + 1) / TILES
                drawing.square(
                    left + across * step + column * tile,
                    top + down * step + row * tile,
                    tile + 0.03,
                    tile + 0.03,
                    _colour(mixed, inks),
                )
    return top + count * step + 4.0


def _draw_all(drawing, top, inks, words, strengths):
    """All layers together from faint to full; returns the lower edge."""
    left = MARGIN + 5.0
    _draw_ramp(drawing, left, top, strengths, inks)
    right = left + RAMP_WIDTH + 3.0
    baseline = top + 3.7
    for line in _lines(words["all"], WIDTH - MARGIN - right, 3.4):
        drawing.words(right, baseline, line, 3.4)
        baseline += LINE
    return max(top + RAMP_HEIGHT, baseline - LINE + 1.0)
