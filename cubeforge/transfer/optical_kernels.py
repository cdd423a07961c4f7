"""A patch of gas into the numbers that a crossing needs: slopes of the velocity, and the cells' float32."""

from __future__ import annotations

import math
from typing import Any

from numba import njit

_opts = {"nogil": True, "cache": True, "error_model": "numpy"}
Array = Any

CENTRAL, MINMOD = 0, 1
"""Limiters: monotonised central (van Leer 1977), and minmod (Roe 1986)."""


@njit(**_opts)
def limit(backward: float, forward: float, limiter: int) -> float:
    """Slope of a cell from the steps to its two neighbours; 0 at an extremum, the central one in smooth flow."""
    if backward * forward <= 0.0:
        return 0.0
    smaller = min(abs(backward), abs(forward))
    size = smaller if limiter == MINMOD else min(2.0 * smaller, 0.5 * abs(backward + forward))
    return math.copysign(size, backward)


@njit(**_opts)
def limited_slopes(v: Array, limiter: int, slopes: Array, limited: Array) -> None:
    """Limited change of `v` across each cell, along each axis.

    Parameters
    ----------
    v : float64, shape (nx + 2, ny + 2, nz + 2)
        With one layer of ghost cells.
    slopes : float64, shape (3, cells), out
        In units of `v` per cell; cells x fastest.
    limited : bool, shape (cells,), out
        Whether the limiter changed a slope by more than a hundredth of the larger step.
    """
    nx, ny, nz = v.shape[0] - 2, v.shape[1] - 2, v.shape[2] - 2
    for i in range(nx):
        for j in range(ny):
            for k in range(nz):
                here = v[i + 1, j + 1, k + 1]
                cell = (k * ny + j) * nx + i
                acted = False
                for axis in range(3):
                    a, b, c = axis == 0, axis == 1, axis == 2
                    backward = here - v[i + 1 - a, j + 1 - b, k + 1 - c]
                    forward = v[i + 1 + a, j + 1 + b, k + 1 + c] - here
                    slope = limit(backward, forward, limiter)
                    slopes[axis, cell] = slope
                    change = abs(slope - 0.5 * (backward + forward))
                    acted |= change > 0.01 * max(abs(backward), abs(forward))
                limited[cell] = acted


@njit(**_opts)
def pack_head(density: Array, velocity: Array, slopes: Array, middle: float, width: float, unit_cm: float,
              out: Array) -> None:  # fmt: skip
    """Velocity, its slopes and density of each cell; see `gather_kernels` for units and order.

    Parameters
    ----------
    density, velocity : float64, shape (cells,)
        g/cm3 and cm/s.
    slopes : float64, shape (3, cells), or (3, 0) for none
        cm/s per cell.
    middle, width : float
        Middle of the band and width of a channel, cm/s.
    unit_cm : float
        Unit of depth.
    out : float32, shape (cells, numbers), out
    """
    scale = 1.0 / width
    for cell in range(density.shape[0]):
        out[cell, 0] = (velocity[cell] - middle) * scale
        for axis in range(3):
            out[cell, 1 + axis] = slopes[axis, cell] * scale if slopes.shape[1] > 0 else 0.0
        out[cell, 4] = density[cell] * unit_cm


@njit(**_opts)
def pack_line(at: int, kappa: Array, emis: Array, temperature: Array, thermal: float, turbulence: float, width: float,
              unit_cm: float, narrowest: float, leaf: Array, limited: Array,
              out: Array) -> tuple[int, float, float]:  # fmt: skip
    """Inverse width, opacity and emission of one line; counts leaf cells.

    Parameters
    ----------
    at : int
        Where in a cell the line's numbers go.
    kappa, emis : float64, shape (cells,)
        Integrated over velocity, 1/s and K/s.
    temperature : float64, shape (cells,)
    thermal, turbulence : float
        b**2 = thermal * temperature + turbulence, (cm/s)**2.
    leaf, limited : bool, shape (cells,) or (0,)
        Cells that count (all, if empty); cells where the slope limiter acted (none, if empty).

    Returns
    -------
    narrow : int
        Leaf cells narrower than `narrowest`.
    emission, emission_limited : float
        Sum of abs(emis) over leaf cells, and over those where the limiter acted.
    """
    per_depth = unit_cm / width
    narrow, emission, emission_limited = 0, 0.0, 0.0
    least = (narrowest * (1.0 - 1e-6)) ** 2
    for cell in range(kappa.shape[0]):
        square = thermal * temperature[cell] + turbulence
        out[cell, at] = width / math.sqrt(square)
        out[cell, at + 1] = kappa[cell] * per_depth
        out[cell, at + 2] = emis[cell] * per_depth
        if leaf.shape[0] == 0 or leaf[cell]:
            narrow += square < least
            emission += abs(emis[cell])
            if limited.shape[0] > 0 and limited[cell]:
                emission_limited += abs(emis[cell])
    return narrow, emission, emission_limited
