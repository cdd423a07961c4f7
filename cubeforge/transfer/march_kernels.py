"""The march: every ray of a tile through its patches, front to back, and sub-rays averaged into pixels."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from cubeforge.transfer.channel_kernels import ROW, STEP, clear_folded
from cubeforge.transfer.gather_kernels import RAYS, gather
from cubeforge.transfer.packet_kernels import (
    CAPACITY,
    apply_rows,
    can_reach,
    compact,
    fold_touched,
    level_target,
    pack_rows,
    safe_target,
)
from cubeforge.transfer.ray_kernels import clip_to_region, inverse_of, overlay
from cubeforge.transfer.subray_kernels import PACKET_SIDE, SQUARE, list_rays
from cubeforge.transfer.vectors import LANES, flush_denormals, restore_denormals

_opts = {"nogil": True, "cache": True, "error_model": "numpy"}
Array = Any

BLOCK = 8
"""Pixels a side of the blocks that share one list of candidate patches; a tile is a whole number of them, except at
the image's far edges."""


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
def march_packet(rays: int, origins: Array, direction: Array, inverse: Array, box: Array, sphere: Array,
                 cell_size: Array, lo: Array, hi: Array, level: Array, scale: Array, address: Array,
                 candidates: Array, n_candidates: int, lines: int, shifts: Array, offsets_first: Array,
                 channels: int, reach: float, cut: float, start: Array, stop: Array, patch: Array, pieces: Array,
                 progress: Array, values: Array, windows: Array,
                 far: Array, rows: Array, row_windows: Array, state: Array, sums: Array, folded: Array,
                 touched: Array, columns: Array, statistics: Array) -> None:  # fmt: skip
    """March up to sixteen rays together.

    Leaves intensities in `folded`, in channels ``touched[2]..touched[3]`` alone, and mass columns in `columns`.
    """
    taken, filled = np.zeros(LANES, dtype=np.int64), np.zeros(LANES, dtype=np.int64)
    finished = np.ones(LANES, dtype=np.bool_)
    touched[:] = (channels, 0, channels, 0)
    for lane in range(rays):
        columns[lane] = 0.0
        near, end = clip_to_region(origins[lane], direction, inverse, box, sphere, cell_size)
        pieces[lane] = 0
        progress[lane, 0] = 0.0
        progress[lane, 1] = -np.inf
        if near < end:
            pieces[lane] = overlay(origins[lane], direction, inverse, near, end, lo, hi, level, scale, candidates,
                                   n_candidates, start[lane], stop[lane], patch[lane])  # fmt: skip
        finished[lane] = pieces[lane] == 0
    done = 0
    while True:
        for lane in range(rays):
            if not finished[lane]:
                filled[lane], more = gather(
                    origins[lane], direction, inverse, pieces[lane], progress[lane], start[lane, 0], stop[lane, 0],
                    patch[lane, 0], lo, hi, level, scale, address, lines, shifts, channels, reach, cut,
                    values[lane], windows[lane], far[lane], filled[lane], statistics,
                )  # fmt: skip
                columns[lane] += more
                finished[lane] = progress[lane, 0] == pieces[lane]
        moved = False
        while True:
            target = level_target(far, taken, filled)
            if not can_reach(target, far, taken, filled, finished):
                if moved:
                    break
                # A full buffer that its neighbours' long crossings outrun: go as far as it goes.
                target = safe_target(far, filled, finished)
            count = pack_rows(target, lines, values, windows, far, taken, filled, rows, row_windows)
            if count == 0:
                break
            done = apply_rows(count, done, touched, rows, row_windows, lines, offsets_first, channels, state, sums,
                              folded)  # fmt: skip
            moved = True
        if finished.all() and (taken == filled).all():
            break
        compact(values, windows, far, taken, filled)
    fold_touched(touched, channels, offsets_first.shape[0], state, folded)


@njit(**_opts)
def march_tile(tile: Array, lattice: int, least: int, most: int, limit: Array, start: Array, step_x: Array,
               step_y: Array, direction: Array, box: Array, sphere: Array, cell_size: Array, lo: Array, hi: Array,
               level: Array, scale: Array, rect: Array, address: Array, lines: int, shifts: Array, nodes: Array,
               weights: Array, channels: int, reach: float, cut: float, image: Array, column: Array,
               contrast: Array, statistics: Array) -> None:  # fmt: skip
    """March all rays of one tile.

    Parameters
    ----------
    tile : int64, shape (4,)
        ``x0, x1, y0, y1``: the tile's pixels, half open; x0 and y0 are multiples of BLOCK, x1 and y1 too unless the
        image ends there.
    lattice, least, most, limit
        Where sub-rays go; see `subray_kernels.list_rays`.
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
        Where each patch's cells are: float32; see `gather_kernels` for a cell's numbers.
    lines, shifts : int; float64, shape (lines,)
        Lines a cell holds, and the velocity of each against the first, in channels.
    nodes, weights : float64, shape (n,)
        Velocities sampled in each channel, in channels from its centre, and their weights in its mean.
    channels : int
    reach : float
        Largest distance of a node from its channel's centre.
    cut : float
        Half width of a window in line widths, for an optical depth up to 1.
    image : float32, shape (channels, y, x), out
        Brightness above the background, mean over the pixel.
    column : float64, shape (y, x), out
        Mean mass column, g/cm2.
    contrast : float64, shape (y, x), out
        Half the difference between the means of two sets of the pixel's rays, of the brightness summed over channels;
        without meaning for a pixel with a single ray.
    statistics : float64, shape (len(gather_kernels.STATISTICS),), out
        Added to.
    """
    before = flush_denormals()
    inverse = inverse_of(direction)
    n_nodes = nodes.shape[0]
    # Rows hold velocities from the middle of the band, where float32 is finest.
    offsets_first = (nodes - 0.5 * (channels - 1)).astype(np.float32)
    state = np.zeros(n_nodes * channels * STEP, dtype=np.float32)
    sums = np.zeros(n_nodes * channels * STEP if lines > 1 else STEP, dtype=np.float32)
    folded = np.empty(n_nodes * channels * STEP)
    clear_folded(0, channels, channels, n_nodes, folded)
    touched = np.empty(4, dtype=np.int64)
    values = np.empty((LANES, CAPACITY, lines * ROW), dtype=np.float32)
    windows = np.empty((LANES, CAPACITY, 2 * lines), dtype=np.int32)
    far = np.empty((LANES, CAPACITY))
    rows = np.empty(CAPACITY * lines * ROW * LANES, dtype=np.float32)
    row_windows = np.empty((CAPACITY, 2 * lines), dtype=np.int32)
    candidates = np.empty(rect.shape[0], dtype=np.int32)
    most_pieces = 2 * rect.shape[0] + 1
    piece_start, piece_stop = np.empty((LANES, 3, most_pieces)), np.empty((LANES, 3, most_pieces))
    piece_patch = np.empty((LANES, 3, most_pieces), dtype=np.int32)
    pieces, progress = np.empty(LANES, dtype=np.int64), np.empty((LANES, 2))
    block, cursor = np.empty(4, dtype=np.int64), np.empty(4, dtype=np.int64)
    squares = np.empty((3 * most + 4, SQUARE), dtype=np.int64)
    places, pixels, shares = np.empty((LANES, 2)), np.empty((LANES, 2), dtype=np.int64), np.empty((LANES, 2))
    origins, columns = np.empty((LANES, 3)), np.empty(LANES)
    pixel_sums = np.zeros((PACKET_SIDE, PACKET_SIDE, channels))
    for y0 in range(tile[2], tile[3], PACKET_SIDE):
        for x0 in range(tile[0], tile[1], PACKET_SIDE):
            x1, y1 = min(x0 + PACKET_SIDE, tile[1]), min(y0 + PACKET_SIDE, tile[3])
            n_candidates = block_candidates(rect, x0, x1, y0, y1, candidates)
            block[0], block[1], block[2], block[3] = x0, x1, y0, y1
            cursor[:] = 0
            pixel_sums[:] = 0.0
            while True:
                rays = list_rays(block, lattice, least, most, limit, rect, level, candidates, n_candidates, cursor,
                                 squares, places, pixels, shares)  # fmt: skip
                if rays == 0:
                    break
                statistics[RAYS] += rays
                for lane in range(rays):
                    for axis in range(3):
                        origins[lane, axis] = (start[axis] + places[lane, 0] * step_x[axis]
                                               + places[lane, 1] * step_y[axis])  # fmt: skip
                march_packet(rays, origins, direction, inverse, box, sphere, cell_size, lo, hi, level, scale, address,
                             candidates, n_candidates, lines, shifts, offsets_first, channels, reach, cut, piece_start,
                             piece_stop, piece_patch, pieces, progress, values, windows, far,
                             rows, row_windows, state, sums, folded, touched, columns, statistics)  # fmt: skip
                for lane in range(rays):
                    x, y = pixels[lane]
                    into = pixel_sums[y - y0, x - x0]
                    total = 0.0
                    for node in range(n_nodes):
                        for k in range(touched[2], touched[3]):
                            part = weights[node] * folded[(node * channels + k) * STEP + lane]
                            into[k] += shares[lane, 0] * part
                            total += part
                    column[y - tile[2], x - tile[0]] += shares[lane, 0] * columns[lane]
                    contrast[y - tile[2], x - tile[0]] += shares[lane, 1] * total
                clear_folded(touched[2], touched[3], channels, n_nodes, folded)
            for y in range(y0, y1):
                for x in range(x0, x1):
                    for k in range(channels):
                        image[k, y - tile[2], x - tile[0]] = pixel_sums[y - y0, x - x0, k]
    restore_denormals(before)
