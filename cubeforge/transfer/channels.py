"""The spectral axis as the march samples it: velocities inside each channel and their weights."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cubeforge.errors import PlanError

MOST_NODES = 64
"""More velocities than this in each channel are refused: widen the line or narrow the channels."""
WINDOW_ERROR = 1e-5
"""Bound on what all windows of a ray together may leave out, relative to the line's peak."""


@dataclass(frozen=True)
class Band:
    """Velocity channels and the nodes at which the march samples them.

    Attributes
    ----------
    first : float
        Velocity of the centre of channel 0, cm/s.
    width : float
        Channel width, cm/s; velocity grows with the channel's number.
    count : int
        Number of channels.
    nodes : ndarray, shape (n,), float64
        Offsets of the sampled velocities from a channel's centre, in channels.
    weights : ndarray, shape (n,), float64
        Their weights; they sum to 1.
    cut : float
        Half width of a crossing's window in line widths b, for optical depths up to 1.
    """

    first: float
    width: float
    count: int
    nodes: npt.NDArray[np.float64]
    weights: npt.NDArray[np.float64]
    cut: float

    @property
    def middle(self) -> float:
        """Velocity of the middle of the band, cm/s."""
        return self.first + 0.5 * (self.count - 1) * self.width

    @property
    def reach(self) -> float:
        """Largest distance of a node from its channel's centre, in channels."""
        return float(np.abs(self.nodes).max())

    @property
    def velocities(self) -> npt.NDArray[np.float64]:
        """Channel centres, cm/s, shape (count,)."""
        return np.asarray(self.first + self.width * np.arange(self.count), dtype=np.float64)


def node_count(narrowest: float) -> int:
    """Gauss-Legendre nodes a channel for lines of width b >= `narrowest` channels.

    Such that the worst channel mean, with the line anywhere in its channel, is right to 1e-4 of the peak for
    thin lines and to 1e-3 for line-centre depths up to 1e4; `tests/transfer/test_channels.py` measures it.
    """
    for least, nodes in ((4.0, 2), (3.0, 3), (2.0, 4), (1.0, 6)):
        if narrowest >= least:
            return nodes
    return math.ceil(2.0 + 4.0 / narrowest)


def window_cut(most_crossings: int) -> float:
    """Half width of a window, in units of b, such that what all crossings leave out stays below `WINDOW_ERROR`."""
    return math.sqrt(math.log(max(most_crossings, 1) / WINDOW_ERROR))


def make_band(
    first: float, width: float, count: int, *, sampling: str, narrowest: float, most_crossings: int
) -> Band:
    """Choose nodes and windows for a band.

    Parameters
    ----------
    first, width, count
        Centre of channel 0 and channel width in cm/s, number of channels.
    sampling : {"mean", "centre"}
        A channel's mean over its width, or the value at its centre.
    narrowest : float
        Lower bound on the line width b, cm/s.
    most_crossings : int
        Bound on the crossings of a ray.

    Raises
    ------
    PlanError
        The narrowest line is too narrow for these channels.
    """
    if sampling == "centre":
        nodes, weights = np.zeros(1), np.ones(1)
    else:
        n = node_count(narrowest / width)
        if n > MOST_NODES:
            raise PlanError(
                f"channels.width: {width / 1e5:.3g} km/s is {width / narrowest:.0f} times the narrowest line "
                f"(b = {narrowest / 1e5:.3g} km/s) and would take {n} samples a channel, over the "
                f"{MOST_NODES} allowed; narrower channels, or some microturbulence, would do"
            )
        x, w = np.polynomial.legendre.leggauss(n)
        nodes, weights = 0.5 * x, 0.5 * w
    return Band(first, width, count, nodes, weights, window_cut(most_crossings))
