"""How outputs open that steps of the host write in the ready models."""

import numpy as np

from . import looks
from .rasters import read_raster
from .text import tr

GROUPS = 6


def published_counts(layer):
    """Look: counts in groups of equally many distinct values; withheld ones in grey."""
    counts = [feature["count"] for feature in layer.getFeatures()]
    known = np.unique([float(count) for count in counts if isinstance(count, (int, float))])
    groups = [
        (float(part[0]), float(part[-1])) for part in np.array_split(known, GROUPS) if len(part)
    ]
    looks.groups_or_missing("count", groups, tr("withheld"))(layer)


def published_density(layer):
    """Look: the density by its square root, as wide peaks and low ground are both to be seen."""
    # the host's own statistics would be noted in a file beside the raster
    density, _, unit = read_raster(layer.source())
    peak = float(np.nanmax(density))
    last = len(looks.SEQUENCE) - 1
    stops = [(peak * (place / last) ** 2, colour) for place, colour in enumerate(looks.SEQUENCE)]
    looks.ramp(1, stops, unit)(layer)
