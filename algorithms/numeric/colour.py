"""Colour spaces, colour differences and simulated colour vision deficiencies.

Colours are arrays whose last axis has length 3. sRGB is encoded and runs from 0 to 1 (IEC
61966-2-1); linear RGB is proportional to light. Every conversion is for the white point D65.
"""

import re

import numpy as np

from .errors import InputError
from .words import Words

# Ottosson (2020), A perceptual color space for image processing: linear sRGB to cone responses,
# and cube roots of cone responses to L, a, b.
_CONES = np.array(
    [
        [0.4122214708, 0.5363325363, 0.0514459929],
        [0.2119034982, 0.6806995451, 0.1073969566],
        [0.0883024619, 0.2817188376, 0.6299787005],
    ]
)
_OKLAB = np.array(
    [
        [0.2104542553, 0.7936177850, -0.0040720468],
        [1.9779984951, -2.4285922050, 0.4505937099],
        [0.0259040371, 0.7827717662, -0.8086757660],
    ]
)
_CONES_BACK = np.linalg.inv(_CONES)
_OKLAB_BACK = np.linalg.inv(_OKLAB)

# Chromaticities of the sRGB primaries and of D65 (IEC 61966-2-1).
_PRIMARIES = np.array([[0.64, 0.33], [0.30, 0.60], [0.15, 0.06]])
_WHITE = np.array([0.3127, 0.3290])


def _to_tristimulus(chromaticity):
    x, y = np.moveaxis(np.asarray(chromaticity, float), -1, 0)
    return np.stack([x / y, np.ones_like(x), (1 - x - y) / y], axis=-1)


_WHITE_XYZ = _to_tristimulus(_WHITE)
_XYZ = _to_tristimulus(_PRIMARIES).T
_XYZ = _XYZ * np.linalg.solve(_XYZ, _WHITE_XYZ)

# Machado, Oliveira & Fernandes (2009), IEEE Trans. Vis. Comput. Graph. 15:1291, severity 1.0;
# they apply to linear RGB.
DEFICIENCIES = {
    Words("protanopia"): np.array(
        [
            [0.152286, 1.052583, -0.204868],
            [0.114503, 0.786281, 0.099216],
            [-0.003882, -0.048116, 1.051998],
        ]
    ),
    Words("deuteranopia"): np.array(
        [
            [0.367322, 0.860646, -0.227968],
            [0.280085, 0.672501, 0.047413],
            [-0.011820, 0.042940, 0.968881],
        ]
    ),
    Words("tritanopia"): np.array(
        [
            [1.255528, -0.076749, -0.178779],
            [-0.078411, 0.930809, 0.147602],
            [0.004733, 0.691367, 0.303900],
        ]
    ),
}

VISIONS = ("normal", *DEFICIENCIES)


def srgb_to_linear(srgb):
    """Linear RGB of encoded sRGB values (IEC 61966-2-1)."""
    srgb = np.asarray(srgb, float)
    return np.where(
        srgb <= 0.04045, srgb / 12.92, ((np.maximum(srgb, 0.04045) + 0.055) / 1.055) ** 2.4
    )


def linear_to_srgb(linear):
    """Encoded sRGB of linear RGB values (IEC 61966-2-1)."""
    linear = np.asarray(linear, float)
    return np.where(
        linear <= 0.0031308,
        12.92 * linear,
        1.055 * np.maximum(linear, 0.0031308) ** (1 / 2.4) - 0.055,
    )


def linear_to_oklab(linear):
    """Oklab of linear RGB (Ottosson 2020): lightness L 0 to 1, and a, b about -0.4 to 0.4."""
    return np.cbrt(np.asarray(linear, float) @ _CONES.T) @ _OKLAB.T


def oklab_to_linear(oklab):
    """Linear RGB of Oklab; outside 0 to 1 where the display cannot show the colour."""
    return (np.asarray(oklab, float) @ _OKLAB_BACK.T) ** 3 @ _CONES_BACK.T


def oklab_planes_to_linear(planes):
    """`oklab_to_linear` for (3, pixels) planes, in their own precision."""
    roots = np.matmul(_OKLAB_BACK.astype(planes.dtype), planes)
    return np.matmul(_CONES_BACK.astype(planes.dtype), roots * roots * roots)


def srgb_to_oklab(srgb):
    """Oklab of encoded sRGB."""
    return linear_to_oklab(srgb_to_linear(srgb))


def oklab_to_srgb(oklab):
    """Encoded sRGB of Oklab, not clipped."""
    return linear_to_srgb(oklab_to_linear(oklab))


def oklab_to_oklch(oklab):
    """Lightness, chroma and hue in degrees (0 to 360) of Oklab."""
    oklab = np.asarray(oklab, float)
    lightness, a, b = np.moveaxis(oklab, -1, 0)
    hue = np.degrees(np.arctan2(b, a)) % 360.0
    return np.stack([lightness, np.hypot(a, b), hue], axis=-1)


def oklch_to_oklab(oklch):
    """Oklab of lightness, chroma and hue in degrees."""
    lightness, chroma, hue = np.moveaxis(np.asarray(oklch, float), -1, 0)
    angle = np.radians(hue)
    return np.stack([lightness, chroma * np.cos(angle), chroma * np.sin(angle)], axis=-1)


def linear_to_cielab(linear):
    """CIE 1976 L*a*b* of linear RGB for the white point D65 (CIE 15)."""
    ratio = np.asarray(linear, float) @ _XYZ.T / _WHITE_XYZ
    linear_part = ratio * (29 / 6) ** 2 / 3 + 4 / 29
    x, y, z = np.moveaxis(np.where(ratio > (6 / 29) ** 3, np.cbrt(ratio), linear_part), -1, 0)
    return np.stack([116 * y - 16, 500 * (x - y), 200 * (y - z)], axis=-1)


def srgb_to_cielab(srgb):
    """CIE 1976 L*a*b* of encoded sRGB."""
    return linear_to_cielab(srgb_to_linear(srgb))


def difference(first, second):
    """CIEDE2000 colour difference between CIELAB colours.

    Parameters
    ----------
    first, second : (..., 3) arrays
        CIELAB; broadcast against each other.

    Returns
    -------
    (...) array
        Dimensionless; about 1 is just noticeable side by side.

    References
    ----------
    Sharma, Wu & Dalal (2005), Color Res. Appl. 30:21; the numbers of the equations are theirs.
    """
    lightness_1, a_1, b_1 = np.moveaxis(np.asarray(first, float), -1, 0)
    lightness_2, a_2, b_2 = np.moveaxis(np.asarray(second, float), -1, 0)
    mean_chroma = (np.hypot(a_1, b_1) + np.hypot(a_2, b_2)) / 2
    stretch = 1.5 - 0.5 * np.sqrt(mean_chroma**7 / (mean_chroma**7 + 25.0**7))  # (4), (5)
    a_1, a_2 = a_1 * stretch, a_2 * stretch
    chroma_1, chroma_2 = np.hypot(a_1, b_1), np.hypot(a_2, b_2)  # (6)
    hue_1 = np.degrees(np.arctan2(b_1, a_1)) % 360.0  # (7)
    hue_2 = np.degrees(np.arctan2(b_2, a_2)) % 360.0
    turn, mean_hue = _hue_turn_and_mean(hue_1, hue_2, chroma_1 * chroma_2 == 0)
    hue_step = 2 * np.sqrt(chroma_1 * chroma_2) * np.sin(np.radians(turn) / 2)  # (11)
    mean_lightness = (lightness_1 + lightness_2) / 2
    mean_chroma = (chroma_1 + chroma_2) / 2
    weight = (  # (15)
        1
        - 0.17 * np.cos(np.radians(mean_hue - 30))
        + 0.24 * np.cos(np.radians(2 * mean_hue))
        + 0.32 * np.cos(np.radians(3 * mean_hue + 6))
        - 0.20 * np.cos(np.radians(4 * mean_hue - 63))
    )
    from_middle = (mean_lightness - 50) ** 2
    lightness_part = (lightness_2 - lightness_1) / (
        1 + 0.015 * from_middle / np.sqrt(20 + from_middle)
    )
    chroma_part = (chroma_2 - chroma_1) / (1 + 0.045 * mean_chroma)
    hue_part = hue_step / (1 + 0.015 * mean_chroma * weight)
    rotation = 60 * np.exp(-(((mean_hue - 275) / 25) ** 2))  # twice (16)
    crossing = -2 * np.sqrt(mean_chroma**7 / (mean_chroma**7 + 25.0**7))
    crossing = crossing * np.sin(np.radians(rotation))  # (21)
    squared = lightness_part**2 + chroma_part**2 + hue_part**2 + crossing * chroma_part * hue_part
    return np.sqrt(np.maximum(squared, 0.0))


def _hue_turn_and_mean(hue_1, hue_2, grey):
    """Equations (10) and (14) of Sharma, Wu & Dalal: signed hue difference and mean hue."""
    turn = hue_2 - hue_1
    # opposite hues are 180 degrees apart whatever the last digit of the arc tangent says
    far = np.abs(turn) > 180.0 + 1e-9
    total = hue_1 + hue_2
    turn = np.where(far, turn - 360.0 * np.sign(turn), turn)
    mean = np.where(far, np.where(total < 360.0, total + 360.0, total - 360.0), total) / 2
    return np.where(grey, 0.0, turn), np.where(grey, total, mean)


def seen_as(srgb, vision):
    """How a colour looks to a dichromat, as encoded sRGB within the display's range.

    Parameters
    ----------
    srgb : (..., 3) array
        Encoded sRGB.
    vision : str
        ``normal``, ``protanopia``, ``deuteranopia`` or ``tritanopia``.

    References
    ----------
    Machado, Oliveira & Fernandes (2009), IEEE Trans. Vis. Comput. Graph. 15:1291.
    """
    if vision == "normal":
        return np.asarray(srgb, float)
    linear = srgb_to_linear(srgb) @ DEFICIENCIES[vision].T
    return linear_to_srgb(np.clip(linear, 0.0, 1.0))


def in_gamut(oklab, tolerance=1e-6):
    """Whether an sRGB display can show an Oklab colour."""
    linear = oklab_to_linear(oklab)
    return np.all((linear >= -tolerance) & (linear <= 1 + tolerance), axis=-1)


def into_gamut(oklab, steps=24):
    """Bring Oklab colours into the sRGB gamut by less chroma, at the same lightness and hue.

    Parameters
    ----------
    oklab : (..., 3) array
        Lightness 0 to 1.
    steps : int
        Halvings of the interval that holds the largest chroma.

    Returns
    -------
    (..., 3) array
        Colours that were inside come back unchanged.
    """
    oklab = np.array(oklab, float)
    flat = oklab.reshape(-1, 3)
    outside = np.flatnonzero(~in_gamut(flat))
    if len(outside) == 0:
        return oklab
    low, high = np.zeros(len(outside)), np.ones(len(outside))
    for _ in range(steps):
        middle = (low + high) / 2
        trial = flat[outside] * np.stack([np.ones_like(middle), middle, middle], axis=-1)
        inside = in_gamut(trial)
        low, high = np.where(inside, middle, low), np.where(inside, high, middle)
    flat[outside, 1:] *= low[:, None]
    return flat.reshape(oklab.shape)


def to_hex(srgb):
    """Colours as text ``#rrggbb``: one text for one colour, a list for several."""
    levels = np.rint(255 * np.clip(np.asarray(srgb, float), 0, 1)).astype(int)
    if levels.ndim > 1:
        return [to_hex(level / 255) for level in levels]
    return "#{:02x}{:02x}{:02x}".format(*levels)


def from_hex(text):
    """Encoded sRGB of a colour written ``#rrggbb`` or ``#rgb``.

    Raises
    ------
    InputError
        The text is something else.
    """
    digits = text.strip().lstrip("#")
    if not re.fullmatch(r"[0-9a-fA-F]{3}|[0-9a-fA-F]{6}", digits):
        raise InputError("A colour is written like #2e7179; found “{}”.", text)
    if len(digits) == 3:
        digits = "".join(2 * digit for digit in digits)
    return np.array([int(digits[place : place + 2], 16) for place in (0, 2, 4)]) / 255
