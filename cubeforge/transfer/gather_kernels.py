"""From the cells that a ray crosses to what the channels need: optical depth, energy, velocity and width.

Cells of a patch lie one after the other, x fastest as the files have them. A cell is ``CELL_HEAD + CELL_LINE * lines``
float32: line-of-sight velocity in channels from the middle of the band,
its change per cell along x, y and z, mass density (g/cm2 per unit of depth), then for each line 1/b (per channel),
opacity and emission above the background (integrated over velocity, in channels, per unit of depth).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import carray, njit

from cubeforge.transfer.channel_kernels import ROW
from cubeforge.transfer.pointers import as_float32_pointer
from cubeforge.transfer.ray_kernels import advance, enter, walls

_opts = {"nogil": True, "cache": True, "error_model": "numpy"}
_merged = {"inline": "always", **_opts}
Array = Any

CELL_HEAD = 5
"""Numbers at the head of a cell: velocity, its three gradients, density."""
CELL_LINE = 3
"""Numbers for each line in a cell: inverse width, opacity, emission."""

RAYS, CROSSINGS, EMISSION, OUTSIDE, STEEP, INVERTED = range(6)
STATISTICS = ("rays", "crossings", "emission", "emission_outside", "emission_steep", "inverted_crossings")
"""What a march counts. Emission is the optically thin, velocity-integrated one; steep is what comes from crossings
along which the velocity changes by more than a line width b."""

WIDEST = 0.35
"""Largest half span of velocity, in widths b, of a crossing that is done in one piece. The line's shape
(`channel_kernels.skew`) is then right to 1e-5 of the peak for line-centre depths up to 30, and to 1.2e-4 at 1e4, where
only the far wings are seen. Other crossings are cut."""
MOST_CUTS = 1024
"""Most pieces of one crossing."""
EMPTY = 2**30
"""First channel of an empty window."""

_PER_SQRT_PI = 1.0 / math.sqrt(math.pi)


@njit(**_merged)
def window(v: float, half: float, reach: float, channels: int) -> tuple[int, int]:
    """Channels ``first <= k < last`` with a sampled velocity within `half` of `v`, each within `reach` of k.

    None: ``EMPTY, 0``, which leaves a union with other windows as it is.
    """
    low = v - half - reach
    high = v + half + reach
    if high < 0.0 or low > channels - 1:
        return EMPTY, 0
    first = int(low) + 1 if low > 0.0 else 0
    last = int(high) + 1 if high < channels - 1 else channels
    return first, last


@njit(**_merged)
def outside_share(v: float, inv_b: float, channels: int) -> float:
    """Share of a Gaussian line at `v` (in channels) that falls outside the band of `channels` channels."""
    below = (v + 0.5) * inv_b
    above = (channels - 0.5 - v) * inv_b
    if below > 4.0 and above > 4.0:
        return 0.0
    return 0.5 * math.erfc(below) + 0.5 * math.erfc(above)


@njit(**_merged)
def half_width(tau: float, cut: float) -> float:
    """Half width of a window in line widths: where the crossing's optical depth falls below what `cut` stands for.

    The logarithm is bounded from above by the float's own exponent and mantissa, at most 0.06 too large.
    """
    if tau <= 1.0:
        return cut
    log2 = np.float32(tau).view(np.int32) * 2.0**-23 - (127.0 - 0.0861)
    return math.sqrt(0.6931471805599453 * log2 + cut * cut)


@njit(**_merged)
def cuts(span: float) -> int:
    """Pieces in which to do a crossing of half span `span` (in widths)."""
    return 1 if span <= WIDEST else min(int(span / WIDEST) + 1, MOST_CUTS)


@njit(**_merged)
def put_entry(v: float, inv_b: float, tau: float, energy: float, half: float, square: float, reach: float,
              channels: int, n: int, line: int, values: Array, windows: Array) -> bool:  # fmt: skip
    """Write one line of one entry; whether it touches a channel."""
    first, last = window(v, half, reach, channels)
    windows[n, 2 * line] = first
    windows[n, 2 * line + 1] = last
    at = line * ROW
    values[n, at] = tau
    values[n, at + 1] = energy
    values[n, at + 2] = v - 0.5 * (channels - 1)
    values[n, at + 3] = inv_b
    values[n, at + 4] = square
    return first < last and (tau != 0.0 or energy != 0.0)


@njit(**_opts)
def put_cut_crossing(cell: Array, at: int, line: int, v: float, half_span: float, pieces: int, length: float,
                     channels: int, reach: float, cut: float, n: int, values: Array,
                     windows: Array) -> bool:  # fmt: skip
    """Write one line of a crossing along which the velocity changes, in `pieces` entries from `n` on.

    `v` is the velocity at the crossing's middle from channel 0, `half_span` its change from there to the far end. Each
    piece gets the Gaussian widened by the even distribution of velocities in it, whose other cumulants
    `channel_kernels.skew` puts back.
    """
    inv_b = float(cell[at])
    part = half_span / pieces
    square = (part * inv_b) ** 2
    widening = 1.0 / (1.0 + square * (2.0 / 3.0))
    inv_wide = inv_b * math.sqrt(widening)
    peak = length * inv_wide * _PER_SQRT_PI / pieces
    tau, energy = cell[at + 1] * peak, cell[at + 2] * peak
    half = half_width(tau, cut) / inv_wide
    touched = False
    for piece in range(pieces):
        here = v + (2 * piece + 1 - pieces) * part
        touched |= put_entry(here, inv_wide, tau, energy, half, square * widening, reach, channels, n + piece, line,
                             values, windows)  # fmt: skip
    return touched


@njit(**_opts)
def gather(origin: Array, direction: Array, inverse: Array, pieces: int, progress: Array, piece_start: Array,
           piece_stop: Array, piece_patch: Array, lo: Array, hi: Array, level: Array, scale: Array,
           address: Array, lines: int, shifts: Array, channels: int, reach: float, cut: float,
           values: Array, windows: Array, far: Array, n: int, statistics: Array) -> tuple[int, float]:  # fmt: skip
    """Append crossings of one ray to its buffer until the ray ends or the buffer is full.

    Parameters
    ----------
    pieces : int
        Pieces of the ray (see `ray_kernels.overlay`).
    progress : float64, shape (2,), changed
        Piece to go on in, and the depth there (a crossing's start); ``progress[0] == pieces`` at the end.
    values : float32, shape (capacity, lines * ROW), out
        See `channel_kernels`; crossings without opacity and emission, or outside the band, are left out.
    windows : int32, shape (capacity, 2 * lines), out
        First channel, and one past the last, of each line.
    far : float64, shape (capacity,), out
        Depth at which each entry ends.
    n : int
        Entries that are in the buffer already.

    Returns
    -------
    n : int
        Entries now.
    column : float
        Mass column of what was gathered, g/cm2.
    """
    width = CELL_HEAD + CELL_LINE * lines
    middle = 0.5 * (channels - 1)
    capacity = values.shape[0]
    piece = int(progress[0])
    t_begin = progress[1]
    # Sums are kept in registers: in memory each would wait for the one before.
    column, emission, outside, steep, crossings, inverted = 0.0, 0.0, 0.0, 0.0, 0, 0
    full = False
    while piece < pieces and not full:
        p = piece_patch[piece]
        grid = scale[level[p]]
        size = (hi[p, 0] - lo[p, 0]) * (hi[p, 1] - lo[p, 1]) * (hi[p, 2] - lo[p, 2])
        cell = carray(as_float32_pointer(address[p]), (size * width,))
        t, t1 = max(piece_start[piece], t_begin), piece_stop[piece]
        around = walls(origin, direction, inverse, lo[p], hi[p], grid)
        walk = enter(origin, direction, t, grid, around)
        ux, uy, uz = direction[0] / grid[0], direction[1] / grid[1], direction[2] / grid[2]
        px, py, pz = origin[0] / grid[0] - 0.5, origin[1] / grid[1] - 0.5, origin[2] / grid[2] - 0.5
        inside = True
        while inside:
            face = min(walk[4], min(walk[5], walk[6]))
            end = min(face, t1)
            if end > t:
                at = walk[3] * width
                length = end - t
                v = float(cell[at])
                gx, gy, gz = float(cell[at + 1]), float(cell[at + 2]), float(cell[at + 3])
                half_span = 0.5 * length * (gx * ux + gy * uy + gz * uz)
                number = 1
                if gx != 0.0 or gy != 0.0 or gz != 0.0:
                    depth = 0.5 * (t + end)
                    v += gx * (px + ux * depth - walk[0]) + gy * (py + uy * depth - walk[1])
                    v += gz * (pz + uz * depth - walk[2])
                    sharpest = cell[at + CELL_HEAD]
                    for line in range(1, lines):
                        sharpest = max(sharpest, cell[at + CELL_HEAD + CELL_LINE * line])
                    number = cuts(abs(half_span) * sharpest)
                if n + number > capacity:
                    full = True
                    break
                column += cell[at + 4] * length
                crossings += 1
                touched = False
                for line in range(lines):
                    of = at + CELL_HEAD + CELL_LINE * line
                    inv_b = float(cell[of])
                    here = v + middle + shifts[line]
                    emitted = abs(cell[of + 2]) * length
                    emission += emitted
                    outside += emitted * outside_share(here, inv_b, channels)
                    if cell[of + 1] < 0.0:
                        inverted += 1
                    if half_span == 0.0:
                        peak = length * inv_b * _PER_SQRT_PI
                        tau = cell[of + 1] * peak
                        touched |= put_entry(here, inv_b, tau, cell[of + 2] * peak, half_width(tau, cut) / inv_b, 0.0,
                                             reach, channels, n, line, values, windows)  # fmt: skip
                    else:
                        if abs(half_span) * inv_b > 0.5:
                            steep += emitted
                        touched |= put_cut_crossing(cell, of, line, here, half_span, number, length, channels, reach,
                                                    cut, n, values, windows)  # fmt: skip
                if touched:
                    for each in range(number - 1):
                        far[n + each] = t + length * (each + 1) / number
                    n += number
                    far[n - 1] = end
                t = end
            inside = face < t1
            if inside:
                walk, inside = advance(walk, face, around)
        if not full:
            piece += 1
            t_begin = -math.inf
    progress[0] = piece
    progress[1] = t if full else -math.inf
    statistics[EMISSION] += emission
    statistics[OUTSIDE] += outside
    statistics[STEEP] += steep
    statistics[CROSSINGS] += crossings
    statistics[INVERTED] += inverted
    return n, column
