"""Kernels that mark which cells finer patches cover. All corners are int64 in finest units."""

from __future__ import annotations

import numpy as np
from numba import njit

from cubeforge.mesh.kernels import boxes_meeting

OPEN, COVERED, PARTLY = 0, 1, 2


@njit(nogil=True, cache=True)
def mark_covered(patches, level, lo, shape, scale, cell_lo, cell_scale, state):  # type: ignore[no-untyped-def]
    """Mark the cells of a box that `patches` cover; returns whether some cell is covered in part.

    patches: ids; level: (all patches,) int32, lo, shape: (all patches, 3) int32, scale: (levels, 3) int64.
    cell_lo: (3,) int64, first cell of the box in its own level; cell_scale: (3,) int64, width of its cells.
    state: (nx, ny, nz) uint8, out: COVERED, PARTLY, or untouched.
    """
    partly = False
    outer = np.empty((3, 2), np.int64)
    inner = np.empty((3, 2), np.int64)
    for patch in patches:
        ragged = False
        for axis in range(3):
            s, n = cell_scale[axis], state.shape[axis]
            low = np.int64(lo[patch, axis]) * scale[level[patch], axis]
            high = low + np.int64(shape[patch, axis]) * scale[level[patch], axis]
            outer[axis, 0] = min(max(low // s - cell_lo[axis], 0), n)
            outer[axis, 1] = min(max(-(-high // s) - cell_lo[axis], 0), n)
            inner[axis, 0] = min(max(-(-low // s) - cell_lo[axis], 0), n)
            inner[axis, 1] = min(max(high // s - cell_lo[axis], 0), n)
            ragged = ragged or inner[axis, 0] != outer[axis, 0] or inner[axis, 1] != outer[axis, 1]
        if ragged:
            for i in range(outer[0, 0], outer[0, 1]):
                for j in range(outer[1, 0], outer[1, 1]):
                    for k in range(outer[2, 0], outer[2, 1]):
                        if state[i, j, k] == OPEN:
                            state[i, j, k] = PARTLY
                            partly = True
        for i in range(inner[0, 0], inner[0, 1]):
            for j in range(inner[1, 0], inner[1, 1]):
                for k in range(inner[2, 0], inner[2, 1]):
                    state[i, j, k] = COVERED
    return partly


@njit(nogil=True, cache=True)
def _sort(values):  # type: ignore[no-untyped-def]
    """Sort a few numbers in place, by insertion: numpy's sort takes seconds to compile."""
    for i in range(1, len(values)):
        value, j = values[i], i
        while j > 0 and values[j - 1] > value:
            values[j] = values[j - 1]
            j -= 1
        values[j] = value


@njit(nogil=True, cache=True)
def _open_part(low, high):  # type: ignore[no-untyped-def]
    """Fraction of the last box, which starts at 0, that the boxes before it leave open; exactly 0 if none.

    low, high: (boxes + 1, 3) int64, all of them cut to the last.
    """
    edges = np.empty((3, 2 * len(low)), np.int64)
    for axis in range(3):
        edges[axis, : len(low)] = low[:, axis]
        edges[axis, len(low) :] = high[:, axis]
        _sort(edges[axis])
    volume = 0.0
    boxes = len(low) - 1
    for i in range(edges.shape[1] - 1):
        for j in range(edges.shape[1] - 1):
            for k in range(edges.shape[1] - 1):
                x, y, z = edges[0, i], edges[1, j], edges[2, k]
                dx, dy, dz = edges[0, i + 1] - x, edges[1, j + 1] - y, edges[2, k + 1] - z
                if dx == 0 or dy == 0 or dz == 0:
                    continue
                free = True
                for b in range(boxes):
                    if (
                        low[b, 0] <= x < high[b, 0]
                        and low[b, 1] <= y < high[b, 1]
                        and low[b, 2] <= z < high[b, 2]
                    ):
                        free = False
                        break
                if free:
                    volume += float(dx) * float(dy) * float(dz)
    return volume / (float(high[boxes, 0]) * float(high[boxes, 1]) * float(high[boxes, 2]))


@njit(nogil=True, cache=True)
def open_parts(  # type: ignore[no-untyped-def]
    patches, level, lo, shape, scale, cell_lo, cell_scale, state, fraction
):
    """Give each cell the fraction of its volume that no patch covers; cells wholly covered by several patches
    together turn from PARTLY to COVERED.

    Arguments as in `mark_covered`, with its `state`; fraction: (nx, ny, nz) float64, out.
    """
    low = np.empty((len(patches) + 1, 3), np.int64)
    high = np.empty((len(patches) + 1, 3), np.int64)
    for i in range(state.shape[0]):
        for j in range(state.shape[1]):
            for k in range(state.shape[2]):
                if state[i, j, k] != PARTLY:
                    fraction[i, j, k] = 1.0 if state[i, j, k] == OPEN else 0.0
                    continue
                corner = (cell_lo[0] + i, cell_lo[1] + j, cell_lo[2] + k)
                n = 0
                for patch in patches:
                    inside = True
                    for axis in range(3):
                        s = scale[level[patch], axis]
                        origin = corner[axis] * cell_scale[axis]
                        low[n, axis] = max(np.int64(lo[patch, axis]) * s - origin, 0)
                        end = np.int64(lo[patch, axis] + shape[patch, axis]) * s - origin
                        high[n, axis] = min(end, cell_scale[axis])
                        inside = inside and low[n, axis] < high[n, axis]
                    if inside:
                        n += 1
                low[n] = 0
                high[n] = cell_scale
                fraction[i, j, k] = _open_part(low[: n + 1], high[: n + 1])
                if fraction[i, j, k] == 0.0:
                    state[i, j, k] = COVERED


@njit(nogil=True, cache=True)
def count_leaves(level, tables, counts):  # type: ignore[no-untyped-def]
    """Cells of every patch that finer patches leave open, at least in part.

    level: (patches,) int32; tables: those of `boxes_meeting`; counts: (patches,) int64, out.
    """
    scale, lo, shape = tables[0], tables[1], tables[2]
    width, bins, key_first, keys, start, ids = tables[3:]
    levels = len(scale)
    box_lo = np.empty(3, np.int64)
    box_hi = np.empty(3, np.int64)
    for patch in range(len(level)):
        own = level[patch]
        cells = 1
        for axis in range(3):
            box_lo[axis] = np.int64(lo[patch, axis]) * scale[own, axis]
            box_hi[axis] = box_lo[axis] + np.int64(shape[patch, axis]) * scale[own, axis]
            cells *= shape[patch, axis]
        counts[patch] = cells
        if own + 1 == levels:
            continue
        finer = boxes_meeting(
            own + 1, levels, box_lo, box_hi, scale, lo, shape, width, bins, key_first, keys, start, ids
        )
        if len(finer) == 0:
            continue
        state = np.zeros((shape[patch, 0], shape[patch, 1], shape[patch, 2]), np.uint8)
        cell_lo = lo[patch].astype(np.int64)
        if mark_covered(finer, level, lo, shape, scale, cell_lo, scale[own], state):
            open_parts(
                finer, level, lo, shape, scale, cell_lo, scale[own], state, np.empty(state.shape, np.float64)
            )
        for mark in state.flat:
            if mark == COVERED:
                counts[patch] -= 1
