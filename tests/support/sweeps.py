"""Exact line transfer through gas of one temperature whose velocity changes evenly along the line of sight.

Over a length s on which the velocity goes from v1 to v2, the integral of the profile exp(-((u - v) / b)^2) gives
the optical depth kappa s / (v2 - v1) (erf((u - v1) / b) - erf((u - v2) / b)) / 2, kappa being integrated over velocity.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import erf
from support.physics import CO, PARSEC, equivalent_temperature, h2_density

BACKGROUND, ABUNDANCE = 2.725, 1e-4


def excess(kelvin):
    """Brightness (K) above the background of opaque gas in CO 1-0."""
    nu = CO.frequency(1)
    return equivalent_temperature(nu, kelvin) - equivalent_temperature(nu, BACKGROUND)


def opacity_of(density, kelvin):
    """Opacity integrated over velocity, cm/s per pc, of gas of `density` g/cm3."""
    return CO.opacity(ABUNDANCE * h2_density(density), kelvin) * PARSEC


def density_of(opacity: float, kelvin: float) -> float:
    """The inverse of `opacity_of`."""
    return opacity / float(opacity_of(1.0, kelvin))


def swept_depth(channels, opacity, start, end, length, width):
    """Optical depth of `length` pc along which the velocity goes from `start` to `end`; all velocities in cm/s."""
    channels, start, end, length = np.broadcast_arrays(channels, start, end, length)
    still = np.abs(end - start) < 1e-9 * width
    span = np.where(still, 1.0, end - start)
    swept = 0.5 * (erf((channels - start) / width) - erf((channels - end) / width)) / span
    at_rest = np.exp(-(((channels - start) / width) ** 2)) / (math.sqrt(math.pi) * width)
    return opacity * length * np.where(still, at_rest, swept)
