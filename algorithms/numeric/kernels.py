"""Smoothing kernels on the plane, scaled so that one bandwidth smooths alike with any of them.

A bandwidth h is the kernel's standard deviation along each axis. A kernel is written
K_h(r) = peak / h^2 * profile(r^2 / h^2) and holds a mass of 1.
"""

import math
from dataclasses import dataclass
from typing import Callable

import numpy as np

from .errors import InputError


@dataclass(frozen=True)
class Kernel:
    """A radially symmetric kernel of unit mass and unit variance along each axis.

    Attributes
    ----------
    name : str
    peak : float
        Value at the centre for bandwidth 1.
    profile : callable
        Value over the peak as a function of (r / h)^2, an array.
    reach : float
        Distance in bandwidths beyond which the kernel counts as nothing.
    roughness : float
        Integral of the squared kernel for bandwidth 1.
    """

    name: str
    peak: float
    profile: Callable
    reach: float
    roughness: float

    def value(self, squared_distance, bandwidth):
        """Density at a squared distance, per unit of the CRS squared.

        Both arguments are arrays that broadcast, in units of the CRS (squared).
        """
        variance = np.square(bandwidth)
        return self.peak / variance * self.profile(squared_distance / variance)


def _gaussian_profile(squared):
    return np.exp(-0.5 * squared)


# the biweight on the unit disc has variance 1/8 along each axis, so its radius is sqrt(8) h
QUARTIC_RADIUS = math.sqrt(8.0)


def _quartic_profile(squared):
    inside = np.maximum(1.0 - squared / 8.0, 0.0)
    return inside * inside


# beyond 5 bandwidths a Gaussian is below 4e-6 of its peak
GAUSSIAN = Kernel("gaussian", 1 / (2 * math.pi), _gaussian_profile, 5.0, 1 / (4 * math.pi))
QUARTIC = Kernel("quartic", 3 / (8 * math.pi), _quartic_profile, QUARTIC_RADIUS, 9 / (40 * math.pi))

KERNELS = {kernel.name: kernel for kernel in (GAUSSIAN, QUARTIC)}


def kernel_named(name):
    """The kernel of a name, ``gaussian`` or ``quartic`` (the biweight).

    Raises
    ------
    InputError
        For any other name.
    """
    try:
        return KERNELS[name]
    except (KeyError, TypeError):
        choices = " or ".join(KERNELS)
        raise InputError("KERNEL must be {}; found {!r}.", choices, name) from None
