"""How outputs open that steps of the host write in the ready models."""

import numpy as np

from . import looks
from .rasters import read_raster
from .text import tr


def published_counts(layer):
    """Look: counts in groups of equally many distinct values; withheld ones in grey."""
    counts = [feature["count"] for feature in layer.getFeatures()]
    known = np.array([count for count in counts if isinstance(count, (int, float))], float)
    groups = looks.groups_of(known)
    looks.groups_or_missing("count", groups, tr("withheld"), unit=tr("records"))(layer)


def published_density(layer):
    """Look: the density by its square root, as wide peaks and low ground are both to be seen."""
    # the host's own statistics would be noted in a file beside the raster
    density, _, unit = read_raster(layer.source())
    peak = float(np.nanmax(density))
    looks.ramp(1, looks.root_stops(peak), unit)(layer)
