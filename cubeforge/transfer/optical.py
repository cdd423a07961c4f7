"""Optical patches: a patch of gas turned into the float32 numbers that a crossing needs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cubeforge.transfer.channels import Band
from cubeforge.transfer.gather_kernels import CELL_HEAD, CELL_LINE
from cubeforge.transfer.optical_kernels import CENTRAL, MINMOD, limited_slopes, pack_head, pack_line

FloatArray = npt.NDArray[np.float64]

LIMITERS = {"monotonised central": CENTRAL, "minmod": MINMOD}
"""Names of the limiters."""


@dataclass(frozen=True)
class Slopes:
    """Change of the line-of-sight velocity across each cell of a patch.

    Attributes
    ----------
    values : ndarray, shape (3, nx, ny, nz)
        cm/s per cell along x, y, z.
    limited : ndarray of bool, shape (nx, ny, nz)
        Cells where the limiter acted.
    """

    values: FloatArray
    limited: npt.NDArray[np.bool_]


@dataclass(frozen=True)
class LineCells:
    """One line in the cells of a patch, in cgs and kelvins.

    Attributes
    ----------
    kappa : ndarray, shape (nx, ny, nz)
        Opacity integrated over velocity, 1/s (1/cm times cm/s).
    emis : ndarray, shape (nx, ny, nz)
        Emission above the background integrated over velocity, K/s (K/cm times cm/s).
    temperature : ndarray, shape (nx, ny, nz)
        K.
    thermal, turbulence : float
        Line width: b**2 = thermal * temperature + turbulence, (cm/s)**2.
    """

    kappa: FloatArray
    emis: FloatArray
    temperature: FloatArray
    thermal: float
    turbulence: float


def velocity_slopes(velocity: FloatArray, limiter: str) -> Slopes:
    """Limited slopes from velocities with one layer of ghost cells, shape (nx + 2, ny + 2, nz + 2)."""
    shape = tuple(n - 2 for n in velocity.shape)
    values, limited = np.empty((3, *shape)), np.empty(shape, dtype=bool)
    limited_slopes(velocity, LIMITERS[limiter], values, limited)
    return Slopes(values, limited)


def pack_cells(
    density: FloatArray,
    velocity: FloatArray,
    slopes: FloatArray | None,
    lines: list[LineCells],
    band: Band,
    unit_cm: float,
    *,
    narrowest: float = 0.0,
    leaf: npt.NDArray[np.bool_] | None = None,
) -> tuple[npt.NDArray[np.float32], int]:
    """Write a patch as the march reads it; see `gather_kernels` for the layout.

    Parameters
    ----------
    density : ndarray, shape (nx, ny, nz)
        Mass density, g/cm3; cells of zero opacity, emission and density are transparent.
    velocity : ndarray, shape (nx, ny, nz)
        Line-of-sight velocity of the first line, cm/s, receding positive.
    slopes : ndarray, shape (3, nx, ny, nz), optional
        Its change across each cell, cm/s; none for a velocity that is constant in each cell.
    lines : list of LineCells
    unit_cm : float
        Unit of depth in cm.
    narrowest : float
        Widths b (cm/s) below this are counted.
    leaf : ndarray of bool, shape (nx, ny, nz), optional
        Cells that count.

    Returns
    -------
    cells : ndarray, shape (nx, ny, nz, CELL_HEAD + CELL_LINE * len(lines)), float32
    narrow : int
        Lines in leaf cells that are narrower than `narrowest`.
    """
    out = np.empty((density.size, CELL_HEAD + CELL_LINE * len(lines)), dtype=np.float32)
    flat_slopes = np.empty((3, 0)) if slopes is None else np.ascontiguousarray(slopes).reshape(3, -1)
    pack_head(_flat(density), _flat(velocity), flat_slopes, band.middle, band.width, unit_cm, out)
    counted = np.ones(density.size, dtype=bool) if leaf is None else np.ascontiguousarray(leaf).ravel()
    narrow = 0
    for index, line in enumerate(lines):
        narrow += pack_line(
            CELL_HEAD + CELL_LINE * index, _flat(line.kappa), _flat(line.emis), _flat(line.temperature),
            line.thermal, line.turbulence, band.width, unit_cm, narrowest, counted, out,
        )  # fmt: skip
    return out.reshape(*density.shape, -1), narrow


def _flat(array: FloatArray) -> FloatArray:
    return np.ascontiguousarray(array, dtype=np.float64).ravel()
