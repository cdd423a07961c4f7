"""The march: every ray of a tile through its patches, front to back, and sub-rays averaged into pixels."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import carray, float32, njit

from cubeforge.transfer.line_kernels import (
    FOLD,
    add_line,
    fold,
    line_any,
    line_moderate,
    line_thin,
    outside_share,
    transfer_sum,
    window,
)
from cubeforge.transfer.pointers import as_float32_pointer
from cubeforge.transfer.ray_kernels import clip_to_region, inverse_of, overlay, trace

_opts = {"nogil": True, "cache": True, "error_model": "numpy"}
Array = Any

CELL_HEAD = 2
"""Numbers at the head of a cell: line-of-sight velocity, mass density."""
CELL_LINE = 3
"""Numbers for each line in a cell: inverse width, opacity, emission above the background."""
BLOCK = 8
"""Pixels a side of the blocks that share one list of candidate patches."""

RAYS, CROSSINGS, EMISSION, OUTSIDE, INVERTED = range(5)
STATISTICS = ("rays", "crossings", "emission", "emission_outside", "inverted_crossings")
"""What a march counts; emission is the optically thin, velocity-integrated one."""

_PER_SQRT_PI = 1.0 / math.sqrt(math.pi)


@njit(**_opts)
def cross_single(cell: Array, at: int, length: float, nodes: Array, reach: float, cut: float, state: Array,
                 sums: Array) -> tuple[int, int]:  # fmt: skip
    """Apply one crossing with a single line; returns the channels touched."""
    v = cell[at]
    inv_b = cell[at + 2]
    peak = float32(length * inv_b * _PER_SQRT_PI)
    tau = cell[at + 3] * peak
    energy = cell[at + 4] * peak
    if tau == 0.0 and energy == 0.0:
        return 0, 0
    half = (cut if tau <= 1.0 else math.sqrt(math.log(tau) + cut * cut)) / inv_b
    channels = nodes.shape[1]
    k0, k1 = window(v + 0.5 * (channels - 1), half, reach, channels)
    size = abs(tau)
    for node in range(nodes.shape[0]):
        u = nodes[node, k0:k1]
        bright = state[0, node, k0:k1]
        lost = state[1, node, k0:k1]
        if size < 0.05:
            line_thin(u, v, inv_b, tau, energy, bright, lost)
        elif size < 1.0:
            line_moderate(u, v, inv_b, tau, energy, bright, lost)
        else:
            line_any(u, v, inv_b, max(tau, float32(-10.0)), energy, bright, lost)
    return k0, k1


@njit(**_opts)
def cross_blend(cell: Array, at: int, lines: int, shifts: Array, length: float, nodes: Array, reach: float,
                cut: float, state: Array, sums: Array) -> tuple[int, int]:  # fmt: skip
    """Apply one crossing with several lines, summing their opacity and emission before the light passes."""
    channels = nodes.shape[1]
    low, high = channels, 0
    for line in range(lines):
        v = cell[at] + shifts[line]
        inv_b = cell[at + 2 + 3 * line]
        peak = float32(length * inv_b * _PER_SQRT_PI)
        tau = cell[at + 3 + 3 * line] * peak
        energy = cell[at + 4 + 3 * line] * peak
        if tau == 0.0 and energy == 0.0:
            continue
        half = (cut if tau <= 1.0 else math.sqrt(math.log(tau) + cut * cut)) / inv_b
        k0, k1 = window(v + 0.5 * (channels - 1), half, reach, channels)
        if k1 <= k0:
            continue
        low = min(low, k0)
        high = max(high, k1)
        for node in range(nodes.shape[0]):
            add_line(nodes[node, k0:k1], v, inv_b, tau, energy, sums[0, node, k0:k1], sums[1, node, k0:k1])
    if high <= low:
        return 0, 0
    for node in range(nodes.shape[0]):
        transfer_sum(sums[0, node, low:high], sums[1, node, low:high], state[0, node, low:high],
                     state[1, node, low:high])  # fmt: skip
    return low, high


@njit(**_opts)
def count_crossing(cell: Array, at: int, lines: int, shifts: Array, length: float, channels: int,
                   statistics: Array) -> None:  # fmt: skip
    """Book the thin emission of a crossing, the part outside the band, and inverted gas."""
    for line in range(lines):
        kappa = cell[at + 3 + 3 * line]
        emitted = abs(cell[at + 4 + 3 * line]) * length
        statistics[EMISSION] += emitted
        v = cell[at] + shifts[line] + 0.5 * (channels - 1)
        statistics[OUTSIDE] += emitted * outside_share(v, cell[at + 2 + 3 * line], channels)
        if kappa < 0.0:
            statistics[INVERTED] += 1.0


@njit(**_opts)
def march_ray(origin: Array, direction: Array, inverse: Array, n_pieces: int, piece_start: Array,
              piece_stop: Array, piece_patch: Array, lo: Array, hi: Array, level: Array, scale: Array,
              address: Array, lines: int, shifts: Array, nodes: Array, reach: float, cut: float, state: Array,
              sums: Array, folded: Array, cells: Array, lengths: Array, statistics: Array) -> float:  # fmt: skip
    """March one ray through its pieces; leaves intensity and transmission in `folded`, returns the mass column."""
    width = CELL_HEAD + CELL_LINE * lines
    channels = nodes.shape[1]
    count = 0
    column = 0.0
    touched_low, touched_high = channels, 0
    for piece in range(n_pieces):
        p = piece_patch[piece]
        n = trace(origin, direction, inverse, piece_start[piece], piece_stop[piece], lo[p], hi[p],
                  scale[level[p]], cells, lengths)  # fmt: skip
        size = (hi[p, 0] - lo[p, 0]) * (hi[p, 1] - lo[p, 1]) * (hi[p, 2] - lo[p, 2])
        cell = carray(as_float32_pointer(address[p]), (size * width,))
        for i in range(n):
            at = cells[i] * width
            column += cell[at + 1] * lengths[i]
            count_crossing(cell, at, lines, shifts, lengths[i], channels, statistics)
            if lines == 1:
                k0, k1 = cross_single(cell, at, lengths[i], nodes, reach, cut, state, sums)
            else:
                k0, k1 = cross_blend(cell, at, lines, shifts, lengths[i], nodes, reach, cut, state, sums)
            if k1 > k0:
                touched_low = min(touched_low, k0)
                touched_high = max(touched_high, k1)
            count += 1
            if count % FOLD == 0 and touched_high > touched_low:
                fold(touched_low, touched_high, state[0], state[1], folded[0], folded[1])
                touched_low, touched_high = channels, 0
    if touched_high > touched_low:
        fold(touched_low, touched_high, state[0], state[1], folded[0], folded[1])
    statistics[CROSSINGS] += count
    return column


@njit(**_opts)
def block_candidates(rect: Array, x0: int, x1: int, y0: int, y1: int, out: Array) -> int:
    """Patches whose sky rectangle (x0, x1, y0, y1 in pixels) meets a block of pixels, in their given order."""
    n = 0
    for p in range(rect.shape[0]):
        if rect[p, 0] < x1 and rect[p, 1] > x0 and rect[p, 2] < y1 and rect[p, 3] > y0:
            out[n] = p
            n += 1
    return n


@njit(**_opts)
def march_tile(tile: Array, rays_per_side: Array, start: Array, step_x: Array, step_y: Array, direction: Array,
               box: Array, sphere: Array, cell_size: Array, lo: Array, hi: Array, level: Array, scale: Array,
               rect: Array, address: Array, lines: int, shifts: Array, nodes: Array, weights: Array,
               reach: float, cut: float, longest: int, image: Array, column: Array,
               statistics: Array) -> None:  # fmt: skip
    """March all rays of one tile.

    Parameters
    ----------
    tile : int64, shape (4,)
        ``x0, x1, y0, y1``: the tile's pixels, half open.
    rays_per_side : int32, shape (y, x)
        Each pixel gets this number squared of sub-rays, on a square lattice.
    start, step_x, step_y : float64, shape (3,)
        Corner of pixel (0, 0) and the steps to the next pixel in x and y, in finest units.
    direction : float64, shape (3,)
        Finest units per unit of depth.
    box, sphere, cell_size
        The region; see `ray_kernels.clip_to_region`.
    lo, hi, level, scale
        The tile's patches, ascending in level; see `ray_kernels.overlay`.
    rect : float64, shape (patches, 4)
        Each patch's rectangle on the sky in pixels: x low, x high, y low, y high.
    address : int64, shape (patches,)
        Where each patch's cells are: float32, C order, ``2 + 3 * lines`` numbers a cell (see CELL_HEAD).
        Velocities are in channels from the middle of the band, widths in channels; opacity and emission are
        integrated over velocity, per unit of depth; density in g/cm2 per unit of depth.
    lines, shifts : int; float64, shape (lines,)
        Lines a cell holds, and the velocity of each against the first, in channels.
    nodes, weights : float32, shape (nodes, channels); float64, shape (nodes,)
        Velocities sampled, in channels from the middle of the band; their weights in the channel's mean.
    reach : float
        Largest distance of a node from its channel's centre.
    cut : float
        Half width of a window in line widths, for an optical depth up to 1.
    longest : int
        Bound on the crossings of one ray in one patch.
    image : float32, shape (channels, y, x), out
        Brightness above the background, mean over the pixel.
    column : float64, shape (y, x), out
        Mean mass column, g/cm2.
    statistics : float64, shape (len(STATISTICS),), out
        Added to.
    """
    channels = nodes.shape[1]
    n_nodes = nodes.shape[0]
    inverse = inverse_of(direction)
    state = np.zeros((2, n_nodes, channels), dtype=np.float32)
    sums = np.zeros((2, n_nodes, channels), dtype=np.float32)
    folded = np.zeros((2, n_nodes, channels))
    pixel = np.zeros(channels)
    cells = np.empty(longest + 1, dtype=np.int64)
    lengths = np.empty(longest + 1)
    candidates = np.empty(rect.shape[0], dtype=np.int32)
    piece_start = np.empty((3, 2 * rect.shape[0] + 1))
    piece_stop = np.empty((3, 2 * rect.shape[0] + 1))
    piece_patch = np.empty((3, 2 * rect.shape[0] + 1), dtype=np.int32)
    origin = np.empty(3)
    x_first, x_last, y_first, y_last = tile
    # Blocks lie on a lattice of absolute pixels.
    for by in range(y_first // BLOCK, (y_last - 1) // BLOCK + 1):
        for bx in range(x_first // BLOCK, (x_last - 1) // BLOCK + 1):
            x0, x1 = max(bx * BLOCK, x_first), min(bx * BLOCK + BLOCK, x_last)
            y0, y1 = max(by * BLOCK, y_first), min(by * BLOCK + BLOCK, y_last)
            n_candidates = block_candidates(rect, x0, x1, y0, y1, candidates)
            for y in range(y0, y1):
                for x in range(x0, x1):
                    side = rays_per_side[y - y_first, x - x_first]
                    pixel[:] = 0.0
                    mass = 0.0
                    for sub in range(side * side):
                        px = x + (sub % side + 0.5) / side
                        py = y + (sub // side + 0.5) / side
                        for axis in range(3):
                            origin[axis] = start[axis] + px * step_x[axis] + py * step_y[axis]
                        t_lo, t_hi = clip_to_region(origin, direction, inverse, box, sphere, cell_size)
                        statistics[RAYS] += 1.0
                        if not t_lo < t_hi:
                            continue
                        n = overlay(origin, direction, inverse, t_lo, t_hi, lo, hi, level, scale, candidates,
                                    n_candidates, piece_start, piece_stop, piece_patch)  # fmt: skip
                        folded[0] = 0.0
                        folded[1] = 1.0
                        mass += march_ray(origin, direction, inverse, n, piece_start[0], piece_stop[0],
                                          piece_patch[0], lo, hi, level, scale, address, lines, shifts, nodes,
                                          reach, cut, state, sums, folded, cells, lengths,
                                          statistics)  # fmt: skip
                        for node in range(n_nodes):
                            for k in range(channels):
                                pixel[k] += weights[node] * folded[0, node, k]
                    for k in range(channels):
                        image[k, y - y_first, x - x_first] = pixel[k] / (side * side)
                    column[y - y_first, x - x_first] = mass / (side * side)
