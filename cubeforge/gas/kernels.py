"""The pass from stored fields to the state of the gas: one loop, whatever is stored or constant."""

from __future__ import annotations

import numpy as np
from numba import njit

INERT_TEMPERATURE = 1.0
"""Temperature, in K, of a cell that has none and is left without gas, so that the value enters nothing."""


@njit(nogil=True, cache=True)
def gas_state(  # type: ignore[no-untyped-def]
    fields, steps, factors, from_pressure, from_momentum, leaf, per_gram, pressure_to_t, state
):
    """Fill ``state[:, cell]`` with density, temperature, velocity x, y, z and molecules; count bad cells.

    fields: 5 flat arrays of one float type: density, temperature or pressure, and 3 components of velocity or
    momentum; steps: (5,) int64, 1, or 0 where the array is one constant; factors: (5,) float64, cgs per
    stored unit. from_pressure: the second field is a pressure, T = pressure_to_t P / rho; from_momentum: the
    last three are momenta, v = m / rho. leaf: (cells,) bool, or empty: all are. per_gram: molecules per gram.
    state: (6, cells) float64, out. Returns the bad leaf cells, and all bad cells.

    A cell is bad when its density is negative, its temperature not positive or any of its fields not finite. A cell
    without gas is not, whatever else it holds: that enters nothing, and is replaced where it is no number.
    """
    bad_leaves = bad = 0
    density, thermal, vx, vy, vz = fields
    for i in range(state.shape[1]):
        rho = np.float64(density[i * steps[0]]) * factors[0]
        t = np.float64(thermal[i * steps[1]]) * factors[1]
        x = np.float64(vx[i * steps[2]]) * factors[2]
        y = np.float64(vy[i * steps[3]]) * factors[3]
        z = np.float64(vz[i * steps[4]]) * factors[4]
        if rho > 0.0:
            if from_pressure:
                t *= pressure_to_t / rho
            if from_momentum:
                x /= rho
                y /= rho
                z /= rho
        else:
            if from_pressure:
                t = INERT_TEMPERATURE
            if from_momentum:
                x = y = z = 0.0
        if rho == 0.0:
            t = t if t > 0.0 and t - t == 0.0 else INERT_TEMPERATURE
            x = x if x - x == 0.0 else 0.0
            y = y if y - y == 0.0 else 0.0
            z = z if z - z == 0.0 else 0.0
        state[0, i] = rho
        state[1, i] = t
        state[2, i] = x
        state[3, i] = y
        state[4, i] = z
        state[5, i] = rho * per_gram
        # Comparisons with NaN are False, and differences of infinities NaN.
        if rho >= 0.0 and t > 0.0 and rho - rho + t - t + x - x + y - y + z - z == 0.0:
            continue
        bad += 1
        if len(leaf) == 0 or leaf[i]:
            bad_leaves += 1
    return bad_leaves, bad
