"""How pixels are sampled: the numbers that say where the march puts its sub-rays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

SAME_SIZE = 1e-6
"""A cell that is smaller than a square by less than this fraction counts as large as it."""


@dataclass(frozen=True)
class Sampling:
    """Where sub-rays go; see `subray_kernels.list_rays`.

    Attributes
    ----------
    lattice : int
        Squares a side that every pixel is cut into.
    least, most : int
        How often each of these is cut into four.
    limit : ndarray, shape (levels,), float64
        Largest side, in pixels, of a square before cells of each level.
    """

    lattice: int
    least: int
    most: int
    limit: npt.NDArray[np.float64]


def fixed_sampling(per_side: int, cells: npt.NDArray[np.float64], error: bool) -> Sampling:
    """A square lattice of rays; at least two a side where two sets are wanted. `cells` as for `adaptive_sampling`."""
    return Sampling(max(per_side, 2) if error else per_side, 0, 0, np.zeros(len(cells)))


def adaptive_sampling(cells: npt.NDArray[np.float64], spacing: float, most: int, error: bool) -> Sampling:
    """Squares that are cut into four while smaller cells are behind them.

    Parameters
    ----------
    cells : ndarray, shape (levels,)
        Smallest cell side of each level, in pixels.
    spacing : float
        A square may be as wide as this many cell sides, a pixel that is not cut half as wide.
    most : int
        Most rays a side, a power of two.
    error : bool
        Whether two sets of rays are wanted to estimate the sampling error; takes two rays a side at least.
    """
    cuts, least = most.bit_length() - 1, int(error)
    return Sampling(1, least, max(cuts, least), spacing * cells * (1.0 + SAME_SIZE))
