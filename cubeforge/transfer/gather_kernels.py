"""From the cells that a ray crosses to what the channels need: optical depth, energy, velocity and width.

A cell is ``CELL_HEAD + CELL_LINE * lines`` float32: line-of-sight velocity in channels from the middle of the band,
its change per cell along x, y and z, mass density (g/cm2 per unit of depth), then for each line 1/b (per channel),
opacity and emission above the background (integrated over velocity, in channels, per unit of depth).
"""

from __future__ import annotations

import math
from typing import Any

from numba import carray, njit

from cubeforge.transfer.channel_kernels import ROW
from cubeforge.transfer.pointers import as_float32_pointer
from cubeforge.transfer.ray_kernels import trace

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
"""Largest half span of velocity, in widths b, of a crossing that is done in one piece: the line's shape is then right
to 1e-5 (`channel_kernels.skew`). Others are cut."""
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
    """Half width of a window in line widths: where the crossing's optical depth falls below what `cut` stands for."""
    return cut if tau <= 1.0 else math.sqrt(math.log(tau) + cut * cut)


@njit(**_merged)
def cuts(span: float) -> int:
    """Pieces in which to do a crossing of half span `span` (in widths)."""
    return 1 if span <= WIDEST else min(int(span / WIDEST) + 1, MOST_CUTS)


@njit(**_merged)
def put_line(cell: Array, at: int, v: float, half_span: float, pieces: int, length: float, channels: int,
             reach: float, cut: float, values: Array, windows: Array, n: int, line: int,
             statistics: Array) -> bool:  # fmt: skip
    """Write one line of one crossing into `pieces` entries from `n` on; False when no channel is touched.

    `v` is the velocity at the crossing's middle from channel 0, `half_span` its change from there to the far end.
    """
    inv_b = float(cell[at])
    peak = length * inv_b * _PER_SQRT_PI / pieces
    tau = cell[at + 1] * peak
    energy = cell[at + 2] * peak
    emitted = abs(cell[at + 2]) * length
    statistics[EMISSION] += emitted
    statistics[OUTSIDE] += emitted * outside_share(v, inv_b, channels)
    if abs(half_span) * inv_b > 0.5:
        statistics[STEEP] += emitted
    if tau < 0.0:
        statistics[INVERTED] += 1.0
    part = half_span / pieces
    widening = 1.0 + 2.0 / 3.0 * (part * inv_b) ** 2
    inv_wide = inv_b / math.sqrt(widening)
    square = (part * inv_b) ** 2 / widening
    scale = inv_wide / inv_b
    half = half_width(tau, cut) / inv_wide
    touched = False
    first_line = line * ROW
    for piece in range(pieces):
        here = v + (2 * piece + 1 - pieces) * part
        first, last = window(here, half, reach, channels)
        windows[n + piece, 2 * line] = first
        windows[n + piece, 2 * line + 1] = last
        values[n + piece, first_line] = tau * scale
        values[n + piece, first_line + 1] = energy * scale
        values[n + piece, first_line + 2] = here - 0.5 * (channels - 1)
        values[n + piece, first_line + 3] = inv_wide
        values[n + piece, first_line + 4] = square
        touched |= last > first and (tau != 0.0 or energy != 0.0)
    return touched


@njit(**_opts)
def gather(origin: Array, direction: Array, inverse: Array, pieces: Array, progress: Array, piece_start: Array,
           piece_stop: Array, piece_patch: Array, lo: Array, hi: Array, level: Array, scale: Array,
           address: Array, lines: int, shifts: Array, channels: int, reach: float, cut: float, cells: Array,
           ends: Array, offsets: Array, values: Array, windows: Array, far: Array, n: int,
           statistics: Array) -> tuple[int, float]:  # fmt: skip
    """Append crossings of one ray to its buffer until the ray ends or the buffer is full.

    Parameters
    ----------
    pieces : int
        Pieces of the ray (see `ray_kernels.overlay`).
    progress : int64, shape (2,), changed
        Piece, and crossing of it, to go on from; ``progress[0] == pieces`` at the end.
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
    column = 0.0
    width = CELL_HEAD + CELL_LINE * lines
    middle = 0.5 * (channels - 1)
    while progress[0] < pieces:
        piece = progress[0]
        p = piece_patch[piece]
        grid = scale[level[p]]
        count = trace(origin, direction, inverse, piece_start[piece], piece_stop[piece], lo[p], hi[p], grid, cells,
                      ends, offsets)  # fmt: skip
        size = (hi[p, 0] - lo[p, 0]) * (hi[p, 1] - lo[p, 1]) * (hi[p, 2] - lo[p, 2])
        cell = carray(as_float32_pointer(address[p]), (size * width,))
        ux, uy, uz = direction[0] / grid[0], direction[1] / grid[1], direction[2] / grid[2]
        for i in range(progress[1], count):
            at = cells[i] * width
            length = ends[i + 1] - ends[i]
            gx, gy, gz = cell[at + 1], cell[at + 2], cell[at + 3]
            half_span = 0.5 * length * (gx * ux + gy * uy + gz * uz)
            sharpest = cell[at + CELL_HEAD]
            for line in range(1, lines):
                sharpest = max(sharpest, cell[at + CELL_HEAD + CELL_LINE * line])
            number = cuts(abs(half_span) * sharpest)
            if n + number > values.shape[0]:
                progress[1] = i
                return n, column
            v = cell[at] + gx * offsets[i, 0] + gy * offsets[i, 1] + gz * offsets[i, 2] + middle
            column += cell[at + 4] * length
            statistics[CROSSINGS] += 1.0
            touched = False
            for line in range(lines):
                touched |= put_line(cell, at + CELL_HEAD + CELL_LINE * line, v + shifts[line], half_span, number,
                                    length, channels, reach, cut, values, windows, n, line,
                                    statistics)  # fmt: skip
            if touched:
                for each in range(number):
                    far[n + each] = ends[i] + length * (each + 1) / number
                n += number
        progress[0] += 1
        progress[1] = 0
    return n, column
