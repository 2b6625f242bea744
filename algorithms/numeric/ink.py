"""Several layers as inks on one picture.

Each layer lays ink of its own hue where it is dense. What two or more layers lay on one spot
adds up to a darker tone, so that darkness says how much is there and hue says of which.

For strengths s_i (0 to 1) of the layers at a pixel:

- coverage C = 1 - prod(1 - s_i / 2): a layer in full covers half of the paper that is left;
- lightness (Oklab) falls in proportion to C from paper (1) to dark (0.2), so that one layer in
  full has the common lightness of the inks (0.6), two have 0.4, three 0.3;
- the chroma vector is the strength-weighted mean of the inks' chroma vectors, scaled along the
  straight line from paper over the ink to black.
"""

import re
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import combinations

import numpy as np

from .colour import (
    VISIONS,
    difference,
    from_hex,
    into_gamut,
    linear_to_srgb,
    oklab_planes_to_linear,
    oklab_to_linear,
    oklab_to_srgb,
    seen_as,
    srgb_to_cielab,
    srgb_to_oklab,
    to_hex,
)
from .errors import InputError
from .ranks import look_up
from .words import Words

PAPER, DARK = 1.0, 0.2
FULL_COVERAGE = 0.5
INK_LIGHTNESS = PAPER - FULL_COVERAGE * (PAPER - DARK)
MOST_LAYERS = 6

# Chosen by tools/choose_inks.py, which prints them with their colour differences.
DEFAULT_INKS = {
    2: ("#b14fc7", "#219a2c"),
    3: ("#1f82de", "#bf5a7d", "#828721"),
    4: ("#7767ee", "#d53d7b", "#8d813d", "#2d918e"),
    5: ("#6e6af0", "#ad697a", "#d54c25", "#678d56", "#358da5"),
    6: ("#317af2", "#8874ae", "#d53d7b", "#af711f", "#678d56", "#2d918e"),
}

# Below the first, two inks are taken for one another side by side; below the second, at a glance
# and apart (common practice, no source; CIEDE2000 of 1 is just noticeable).
ALIKE, CLOSE = 5.0, 15.0

PIXELS_AT_ONCE = 1 << 16
THREADS = 2
_LEVELS = 1 << 16
_ENCODED = linear_to_srgb(np.linspace(0, 1, _LEVELS)).astype(np.float32)
# Linear light beyond the display's range that still rounds to the same level of 255, nearly.
_TOLERANCE = 2e-4


@dataclass(frozen=True)
class Readability:
    """How well colours of a picture are told apart.

    Attributes
    ----------
    vision : str
        One of `numeric.colour.VISIONS`.
    inks : float
        Smallest CIEDE2000 between two inks in full.
    ink_pair : (int, int)
        The two inks.
    mixtures : float
        Smallest CIEDE2000 between any two of: inks in full, mixtures of two in full, all in
        full.
    mixture_pair : (tuple of int, tuple of int)
        The layers of the two colours.
    """

    vision: str
    inks: float
    ink_pair: tuple
    mixtures: float
    mixture_pair: tuple


def default_inks(count):
    """The chosen inks for 2 to 6 layers (1 layer: the first of two), encoded sRGB, (count, 3).

    Raises
    ------
    InputError
        Another number of layers.
    """
    if not 1 <= count <= MOST_LAYERS:
        raise InputError("Inks are for 1 to {} layers; found {}.", MOST_LAYERS, count)
    return np.array([from_hex(text) for text in DEFAULT_INKS[max(count, 2)][:count]])


def as_inks(srgb):
    """Bring colours to the common lightness of the inks, keeping hue and what chroma fits.

    Parameters
    ----------
    srgb : (n, 3) array
        Encoded sRGB.

    Returns
    -------
    (n, 3) array
        Encoded sRGB.
    """
    oklab = srgb_to_oklab(np.atleast_2d(srgb))
    oklab[:, 0] = INK_LIGHTNESS
    return np.clip(oklab_to_srgb(into_gamut(oklab)), 0, 1)


def own_inks(text, count):
    """A user's own inks, brought to the common lightness.

    Parameters
    ----------
    text : str
        Colours such as ``#1f82de``, apart by commas, semicolons or spaces.
    count : int
        Number of layers.

    Returns
    -------
    (count, 3) array
        Encoded sRGB.

    Raises
    ------
    InputError
        A colour cannot be read, or there is not one for each layer.
    """
    pieces = re.split(r"[;,\s]+", text.strip())
    if len(pieces) != count:
        raise InputError(
            "A colour for each of the {} layers is needed; found {}.", count, len(pieces)
        )
    return as_inks([from_hex(piece) for piece in pieces])


def blend(strengths, inks):
    """Colour of a pixel from the strengths of the layers.

    Parameters
    ----------
    strengths : (layers, ...) array
        0 to 1.
    inks : (layers, 3) array
        Encoded sRGB at the common lightness (`default_inks`, `as_inks`).

    Returns
    -------
    (..., 3) array
        Oklab, within the sRGB gamut.
    """
    strengths = np.asarray(strengths, float)
    flat = strengths.reshape(len(strengths), -1)
    mixed = _mix(flat, srgb_to_oklab(inks)[:, 1:]).T
    return into_gamut(mixed).reshape(*strengths.shape[1:], 3)


def _mix(strengths, chroma):
    """Lightness and chroma vector, (3, pixels), not yet within the gamut."""
    remaining = np.ones_like(strengths[0])
    total = np.zeros_like(strengths[0])
    for strength in strengths:
        remaining *= 1 - FULL_COVERAGE * strength
        total += strength
    mixed = np.empty((3, *total.shape), strengths.dtype)
    lightness = mixed[0]
    np.multiply(remaining, PAPER - DARK, out=lightness)
    lightness += DARK
    # along the line from paper to ink, then along the line from ink to black
    scale = np.minimum((PAPER - lightness) / (PAPER - INK_LIGHTNESS), lightness / INK_LIGHTNESS)
    scale /= np.maximum(total, np.finfo(strengths.dtype).tiny)
    np.matmul(chroma.T.astype(strengths.dtype), strengths, out=mixed[1:])
    mixed[1:] *= scale
    return mixed


def rgba(strengths, inks):
    """Blended picture with real transparency, as 8-bit levels.

    Opacity is the least with which the pixel, laid over white paper, gives exactly the blended
    colour: 0 where no layer has strength, rising with coverage. A base map below shows through.

    Parameters
    ----------
    strengths : (layers, ...) float32 array
        0 to 1.
    inks : (layers, 3) array
        Encoded sRGB at the common lightness.

    Returns
    -------
    (4, ...) uint8 array
        Red, green, blue (not multiplied by opacity) and opacity.
    """
    strengths = np.asarray(strengths, np.float32)
    flat = strengths.reshape(len(strengths), -1)
    levels = _print(flat.shape[1], lambda place: flat[:, place], inks)
    return levels.reshape(4, *strengths.shape[1:])


def rgba_of_values(values, tables, inks):
    """`rgba` of densities, through tables of strengths.

    Parameters
    ----------
    values : sequence of float32 arrays of one shape
        One for each layer; NaN for no data.
    tables : sequence of float32 arrays
        From `ranks.strength_table`.
    inks : (layers, 3) array

    Returns
    -------
    (4, ...) uint8 array
    """
    flat = [np.ascontiguousarray(one, np.float32).ravel() for one in values]

    def strengths_of(place):
        return np.stack([look_up(table, one[place]) for table, one in zip(tables, flat)])

    return _print(len(flat[0]), strengths_of, inks).reshape(4, *np.shape(values[0]))


def _print(pixels, strengths_of, inks):
    """Levels of all pixels, in parts that stay in the processor's cache."""
    chroma = srgb_to_oklab(inks)[:, 1:].astype(np.float32)
    levels = np.empty((4, pixels), np.uint8)

    def print_from(start):
        place = slice(start, start + PIXELS_AT_ONCE)
        _uncover(_encoded(_mix(strengths_of(place), chroma)), levels[:, place])

    # array operations let go of the interpreter, so that threads share the work
    with ThreadPoolExecutor(THREADS) as threads:
        list(threads.map(print_from, range(0, pixels, PIXELS_AT_ONCE)))
    return levels


def _encoded(mixed):
    """Encoded sRGB, (3, pixels) float32, of Oklab that may lie outside the gamut."""
    linear = oklab_planes_to_linear(mixed)
    outside = (linear.min(axis=0) < -_TOLERANCE) | (linear.max(axis=0) > 1 + _TOLERANCE)
    if outside.any():
        linear[:, outside] = oklab_to_linear(into_gamut(mixed[:, outside].T, steps=10)).T
    np.clip(linear, 0, 1, out=linear)
    linear *= _LEVELS - 1
    linear += 0.5
    return np.take(_ENCODED, linear.astype(np.int32), mode="clip")


def _uncover(srgb, levels):
    """Write the levels whose composite over white is the given colour."""
    darkest = srgb.min(axis=0)
    opacity = np.ceil(255 * (1 - darkest) - 1e-3)
    share = np.maximum(opacity, 1) / np.float32(255)
    uncovered = 1 - (1 - srgb) / share
    levels[:3] = np.clip(uncovered, 0, 1) * np.float32(255) + np.float32(0.5)
    levels[3] = opacity


def over(levels, background=(1.0, 1.0, 1.0)):
    """A picture laid over a background, as encoded sRGB.

    Parameters
    ----------
    levels : (4, ...) uint8 array
        From `rgba`.
    background : (3,) or (..., 3) array
        Encoded sRGB.

    Returns
    -------
    (..., 3) array
    """
    colours = np.moveaxis(np.asarray(levels, float) / 255, 0, -1)
    opacity = colours[..., 3:]
    return opacity * colours[..., :3] + (1 - opacity) * np.asarray(background, float)


def swatches(inks):
    """Named colours of a picture: inks in full, mixtures of two in full, all in full.

    Parameters
    ----------
    inks : (layers, 3) array

    Returns
    -------
    layers : list of tuple of int
        Which layers are in full.
    srgb : (swatches, 3) array
    """
    count = len(inks)
    sets = [(index,) for index in range(count)] + list(combinations(range(count), 2))
    if count > 2:
        sets.append(tuple(range(count)))
    strengths = np.zeros((count, len(sets)))
    for column, members in enumerate(sets):
        strengths[list(members), column] = 1.0
    return sets, np.clip(oklab_to_srgb(blend(strengths, inks)), 0, 1)


def readability(inks):
    """Smallest colour differences between inks and mixtures, for each kind of vision.

    Parameters
    ----------
    inks : (layers, 3) array
        At least two.

    Returns
    -------
    list of Readability
        Normal vision first, then the simulated deficiencies.
    """
    sets, srgb = swatches(inks)
    found = []
    for vision in VISIONS:
        lab = srgb_to_cielab(seen_as(srgb, vision))
        apart = difference(lab[:, None], lab[None, :])
        np.fill_diagonal(apart, np.inf)
        among_inks = apart[: len(inks), : len(inks)]
        first, second = np.unravel_index(np.argmin(among_inks), among_inks.shape)
        one, other = np.unravel_index(np.argmin(apart), apart.shape)
        found.append(
            Readability(
                vision,
                float(among_inks[first, second]),
                (int(first), int(second)),
                float(apart[one, other]),
                (sets[one], sets[other]),
            )
        )
    return found


def differences(inks, vision="normal"):
    """CIEDE2000 between every two inks, (layers, layers)."""
    lab = srgb_to_cielab(seen_as(inks, vision))
    return difference(lab[:, None], lab[None, :])


def smallest_difference(inks, vision="normal"):
    """Smallest CIEDE2000 between two inks; infinite for one ink."""
    apart = differences(inks, vision)
    return float(apart[np.triu_indices(len(inks), 1)].min(initial=np.inf))


def warnings_in_words(inks, names):
    """What a reader of the picture must know when inks are hard to tell apart.

    Parameters
    ----------
    inks : (layers, 3) array
    names : sequence of str
        Names of the layers.

    Returns
    -------
    list of str
        Empty when all is well.
    """
    words = []
    normal = differences(inks)
    for first, second in combinations(range(len(inks)), 2):
        apart = normal[first, second]
        pair = [f"“{names[one]}” ({to_hex(inks[one])})" for one in (first, second)]
        if apart < ALIKE:
            words.append(
                Words(
                    "The inks of {} and {} cannot be told apart (CIEDE2000 {:.1f}); choose other "
                    "inks for one of them.",
                    *pair,
                    apart,
                )
            )
        elif apart < CLOSE:
            words.append(
                Words(
                    "The inks of {} and {} are close (CIEDE2000 {:.1f}, below {:.0f}); a reader "
                    "may mistake one for the other.",
                    *pair,
                    apart,
                    CLOSE,
                )
            )
    for vision in VISIONS[1:]:
        apart = differences(inks, vision)
        for first, second in combinations(range(len(inks)), 2):
            if apart[first, second] < ALIKE <= normal[first, second]:
                words.append(
                    Words(
                        "Readers with {} cannot tell “{}” from “{}” (CIEDE2000 {:.1f}).",
                        vision,
                        names[first],
                        names[second],
                        apart[first, second],
                    )
                )
    return words
