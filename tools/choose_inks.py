"""Choose the default inks for 2 to 6 layers and print them with their colour differences.

All inks have the common lightness of numeric/ink.py. Among candidate hues and chromas that an sRGB
display can show, the set is sought whose smallest CIEDE2000, in normal vision divided by 2 and in
each simulated deficiency divided by 1, is largest (exchange search from many seeded starts). Of
the sets within 8 % of the best, the one with the most distinct mixtures is taken. Greyish
candidates are left out because mixtures of inks are greyish, and the most vivid ones because they
hide the base map: their darkest channel is near 0, so they would have to be opaque.

    python tools/choose_inks.py
"""

import sys
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
LEAST_CHROMA, MOST_CHROMA = 0.09, 0.21
LEAST_CHANNEL = 0.12
STARTS = 150
NEARLY_BEST = 0.92
NORMAL_WEIGHT = 2.0

sys.path.insert(0, str(ROOT / "tests"))

import conftest  # noqa: E402, F401 (loads the checkout as the package ``steadfield``)
from steadfield.algorithms.numeric import colour, ink  # noqa: E402


def candidates():
    """Encoded sRGB of the colours to choose from, rounded to 8 bits."""
    chroma, hue = np.meshgrid(np.arange(LEAST_CHROMA, MOST_CHROMA, 0.015), np.arange(0, 360, 4))
    lightness = np.full(chroma.size, ink.INK_LIGHTNESS)
    oklab = colour.oklch_to_oklab(np.column_stack([lightness, chroma.ravel(), hue.ravel()]))
    oklab = oklab[colour.in_gamut(oklab)]
    srgb = colour.oklab_to_srgb(oklab)
    srgb = srgb[srgb.min(axis=1) >= LEAST_CHANNEL]
    return np.rint(255 * srgb) / 255


def separation(srgb):
    """Smallest weighted CIEDE2000 over all kinds of vision, (candidates, candidates)."""
    apart = [ink.differences(srgb, vision) for vision in colour.VISIONS]
    apart[0] = apart[0] / NORMAL_WEIGHT
    return np.min(apart, axis=0)


def good_sets(apart, count, generator):
    """Sets with a large smallest separation, by exchange from random starts: (score, chosen)."""
    found = []
    for _ in range(STARTS):
        chosen = list(generator.choice(len(apart), count, replace=False))
        score, improved = -1.0, True
        while improved:
            improved = False
            for place in range(count):
                rest = chosen[:place] + chosen[place + 1 :]
                pairs = np.triu_indices(count - 1, 1)
                among = apart[np.ix_(rest, rest)][pairs].min(initial=np.inf)
                scores = np.minimum(apart[rest].min(axis=0), among)
                candidate = int(np.argmax(scores))
                if scores[candidate] > score + 1e-9:
                    score, chosen[place], improved = scores[candidate], candidate, True
        found.append((score, chosen))
    best = max(score for score, _ in found)
    return [chosen for score, chosen in found if score >= NEARLY_BEST * best]


def best_set(srgb, apart, count, generator):
    """Among nearly the best sets of inks, the one whose mixtures are told apart best."""
    return max(
        (srgb[chosen] for chosen in good_sets(apart, count, generator)),
        key=lambda inks: ink.readability(inks)[0].mixtures,
    )


def main():
    srgb = candidates()
    apart = separation(srgb)
    print(f"{len(srgb)} candidates")
    for count in range(2, ink.MOST_LAYERS + 1):
        chosen = best_set(srgb, apart, count, np.random.default_rng(count))
        hue = colour.oklab_to_oklch(colour.srgb_to_oklab(chosen))[:, 2]
        # begin at the blues: cool inks come first
        chosen = chosen[np.argsort((hue - 220) % 360)]
        figures = ", ".join(
            f"{found.vision} {found.inks:.1f} (mixtures {found.mixtures:.1f})"
            for found in ink.readability(chosen)
        )
        print(f"{count}: {tuple(colour.to_hex(chosen))}  {figures}")


if __name__ == "__main__":
    main()
