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
    """Change of the line-of-sight velocity across each cell of a patch; cells in flat order, x fastest.

    Attributes
    ----------
    values : ndarray, shape (3, cells)
        cm/s per cell along x, y, z.
    limited : ndarray of bool, shape (cells,)
        Cells where the limiter acted.
    """

    values: FloatArray
    limited: npt.NDArray[np.bool_]


@dataclass(frozen=True)
class PatchCounts:
    """What was counted over the leaf cells of a patch: lines narrower than planned for; thin emission (K/s, summed over
    cells), all of it and from cells where the limiter acted."""

    narrow: int
    emission: float
    emission_limited: float


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
    cells = int(np.prod([n - 2 for n in velocity.shape]))
    values, limited = np.empty((3, cells)), np.empty(cells, dtype=bool)
    limited_slopes(np.ascontiguousarray(velocity), LIMITERS[limiter], values, limited)
    return Slopes(values, limited)


def pack_cells(
    density: FloatArray,
    velocity: FloatArray,
    slopes: Slopes | None,
    lines: list[LineCells],
    band: Band,
    unit_cm: float,
    *,
    narrowest: float = 0.0,
    leaf: npt.NDArray[np.bool_] | None = None,
) -> tuple[npt.NDArray[np.float32], PatchCounts]:
    """Write a patch as the march reads it; see `gather_kernels` for the layout.

    Arrays in Fortran order, as readers give them, are not copied.

    Parameters
    ----------
    density : ndarray, shape (nx, ny, nz)
        Mass density, g/cm3; cells of zero opacity, emission and density are transparent.
    velocity : ndarray, shape (nx, ny, nz)
        Line-of-sight velocity of the first line, cm/s, receding positive.
    slopes : Slopes, optional
        Its change across each cell; none for a velocity that is constant in each cell.
    lines : list of LineCells
    unit_cm : float
        Unit of depth in cm.
    narrowest : float
        Widths b (cm/s) below this are counted.
    leaf : ndarray of bool, shape (nx, ny, nz), optional
        Cells that count.

    Returns
    -------
    cells : ndarray, shape (nz, ny, nx, CELL_HEAD + CELL_LINE * len(lines)), float32
    counts : PatchCounts
    """
    out = np.empty((density.size, CELL_HEAD + CELL_LINE * len(lines)), dtype=np.float32)
    none = np.empty(0, dtype=bool)
    values, limited = (np.empty((3, 0)), none) if slopes is None else (slopes.values, slopes.limited)
    pack_head(_flat(density), _flat(velocity), values, band.middle, band.width, unit_cm, out)
    counted = none if leaf is None else leaf.ravel(order="F")
    narrow, emission, emission_limited = 0, 0.0, 0.0
    for index, line in enumerate(lines):
        found = pack_line(
            CELL_HEAD + CELL_LINE * index, _flat(line.kappa), _flat(line.emis), _flat(line.temperature),
            line.thermal, line.turbulence, band.width, unit_cm, narrowest, counted, limited, out,
        )  # fmt: skip
        narrow, emission, emission_limited = (
            narrow + found[0],
            emission + found[1],
            emission_limited + found[2],
        )
    return out.reshape(*density.shape[::-1], -1), PatchCounts(narrow, emission, emission_limited)


def _flat(array: FloatArray) -> FloatArray:
    return np.asarray(array, dtype=np.float64).ravel(order="F")
