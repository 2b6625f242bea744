"""What the plots of several reports share: colour ramps, maps in kilometres, logarithmic axes."""

import numpy as np

from ..plugin.looks import SEQUENCE
from ..plugin.text import number, tr

# most pixels of a picture along one side
PICTURE = 900


def colour_ramp(colours=SEQUENCE, missing=None):
    """A continuous ramp for matplotlib.

    Parameters
    ----------
    colours : sequence of str
        From the least to the greatest value.
    missing : str or None
        Colour of what has no value; None: see-through.
    """
    from matplotlib.colors import LinearSegmentedColormap

    ramp = LinearSegmentedColormap.from_list("ramp", colours)
    if missing is not None:
        ramp.set_bad(missing)
    return ramp


def thinned(values):
    """Every so many rows and columns of a (rows, columns) array, so that a picture stays small."""
    step = thinning(values.shape)
    return values[::step, ::step]


def thinning(shape):
    """Of how many rows and columns a picture of a grid shows one."""
    return max(1, int(np.ceil(max(shape) / PICTURE)))


def kilometre_extent(grid, metres):
    """Where a picture of a grid lies on axes in kilometres from its south-western corner.

    Parameters
    ----------
    grid : numeric.grid.Grid
    metres : float
        Metres in one unit of the CRS.

    Returns
    -------
    (left, right, bottom, top)
    """
    kilometres = grid.cell * metres / 1000
    return 0.0, grid.columns * kilometres, 0.0, grid.rows * kilometres


def name_kilometres(axes):
    """Say what the axes of a map with `kilometre_extent` count."""
    axes.grid(False)
    axes.set_xlabel(tr("km from the western edge"))
    axes.set_ylabel(tr("km from the southern edge"))


def plain_logarithmic(axes):
    """Give the horizontal axis steps of 1, 2 and 5 times a power of ten, in plain figures."""
    from matplotlib.ticker import LogLocator, NullLocator

    axes.set_xscale("log")
    axes.xaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(lambda value, _: number(value, 2))
