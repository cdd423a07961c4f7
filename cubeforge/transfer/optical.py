"""Optical patches: a patch of gas turned into the float32 numbers that a crossing needs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

from cubeforge.transfer.channels import Band
from cubeforge.transfer.gather_kernels import CELL_HEAD, CELL_LINE

FloatArray = npt.NDArray[np.float64]


class LineMedium(Protocol):
    """Opacity, emission and width of one line in every cell of a patch, in cgs and kelvins."""

    @property
    def kappa(self) -> FloatArray:
        """Opacity integrated over velocity, 1/s (1/cm times cm/s)."""
        ...

    @property
    def emis(self) -> FloatArray:
        """Emission above the background integrated over velocity, K/s (K/cm times cm/s)."""
        ...

    @property
    def b(self) -> FloatArray:
        """Line width b, cm/s."""
        ...


@dataclass(frozen=True)
class LineCells:
    """Plain `LineMedium`."""

    kappa: FloatArray
    emis: FloatArray
    b: FloatArray


def pack_cells(
    density: FloatArray, velocity: FloatArray, lines: Sequence[LineMedium], band: Band, unit_cm: float
) -> npt.NDArray[np.float32]:
    """Write a patch as the march reads it; see `gather_kernels` for the layout.

    Parameters
    ----------
    density : ndarray, shape (nx, ny, nz)
        Mass density, g/cm3; cells of zero opacity, emission and density are transparent.
    velocity : ndarray, shape (nx, ny, nz)
        Line-of-sight velocity of the first line, cm/s, receding positive.
    lines : sequence of LineMedium
        In order; all arrays of the patch's shape.
    unit_cm : float
        Unit of depth in cm.

    Returns
    -------
    ndarray, shape (nx, ny, nz, CELL_HEAD + CELL_LINE * len(lines)), float32
    """
    out = np.empty((*density.shape, CELL_HEAD + CELL_LINE * len(lines)), dtype=np.float32)
    per_depth = unit_cm / band.width
    out[..., 0] = (velocity - band.middle) / band.width
    out[..., 1:4] = 0.0
    out[..., 4] = density * unit_cm
    for index, line in enumerate(lines):
        at = CELL_HEAD + CELL_LINE * index
        out[..., at] = band.width / line.b
        out[..., at + 1] = line.kappa * per_depth
        out[..., at + 2] = line.emis * per_depth
    return out
