"""Where a ray is: its interval in each patch, the finest patch at every depth, the cells it crosses.

Everything is in finest units (see `cubeforge.mesh.hierarchy`); depth `t` runs along the ray in any unit of
length. One formula gives the depth of every face on every level, ``t = index * step + shift`` with ``step =
scale / d`` and ``shift = -o / d``: two patches that share a face agree on its depth to the last bit,
and the cells met don't depend on how the same data are cut into patches, or on where a march was resumed.
No contraction to fused multiply-adds is allowed here, since it would break that agreement.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit

_opts = {"nogil": True, "cache": True, "error_model": "numpy"}
_merged = {"inline": "always", **_opts}
Array = Any


@njit(**_opts)
def axis_interval(o: float, d: float, inverse: float, lo: int, hi: int, scale: int) -> tuple[float, float]:
    """Depths at which a ray enters and leaves the slab ``lo <= index < hi`` of one axis."""
    if d == 0.0:
        # Half open, so that a ray in the plane between two patches belongs to one of them.
        inside = o >= lo * scale and o < hi * scale
        return (-math.inf, math.inf) if inside else (math.inf, -math.inf)
    step = scale * inverse
    shift = -o * inverse
    t0 = lo * step + shift
    t1 = hi * step + shift
    return (t0, t1) if d > 0.0 else (t1, t0)


@njit(**_opts)
def patch_interval(origin: Array, direction: Array, inverse: Array, lo: Array, hi: Array, scale: Array,
                   t_lo: float, t_hi: float) -> tuple[float, float]:  # fmt: skip
    """Depths between which a ray, itself limited to ``t_lo..t_hi``, is inside one patch (empty: t0 >= t1)."""
    for axis in range(3):
        a, b = axis_interval(origin[axis], direction[axis], inverse[axis], lo[axis], hi[axis], scale[axis])
        t_lo = max(t_lo, a)
        t_hi = min(t_hi, b)
    return t_lo, t_hi


@njit(**_opts)
def sort_by_start(start: Array, stop: Array, patch: Array, first: int, last: int) -> None:
    """Insertion sort of ``first..last`` by start: the lists are short and nearly sorted already."""
    for i in range(first + 1, last):
        a, b, p = start[i], stop[i], patch[i]
        j = i - 1
        while j >= first and start[j] > a:
            start[j + 1], stop[j + 1], patch[j + 1] = start[j], stop[j], patch[j]
            j -= 1
        start[j + 1], stop[j + 1], patch[j + 1] = a, b, p


@njit(**_opts)
def fill_gaps(start: Array, stop: Array, patch: Array, n: int, new_start: Array, new_stop: Array,
              new_patch: Array, m: int, out_start: Array, out_stop: Array, out_patch: Array) -> int:  # fmt: skip
    """Lay the `m` coarser intervals under the `n` finer ones; both sorted, the result too. Returns its length."""
    k = 0
    i = 0
    for j in range(m):
        t = new_start[j]
        end = new_stop[j]
        while i < n and stop[i] <= t:
            out_start[k], out_stop[k], out_patch[k] = start[i], stop[i], patch[i]
            k += 1
            i += 1
        while i < n and start[i] < end:
            if start[i] > t:
                out_start[k], out_stop[k], out_patch[k] = t, start[i], new_patch[j]
                k += 1
            t = max(t, stop[i])
            if stop[i] > end:
                break
            out_start[k], out_stop[k], out_patch[k] = start[i], stop[i], patch[i]
            k += 1
            i += 1
        if t < end:
            out_start[k], out_stop[k], out_patch[k] = t, end, new_patch[j]
            k += 1
    while i < n:
        out_start[k], out_stop[k], out_patch[k] = start[i], stop[i], patch[i]
        k += 1
        i += 1
    return k


@njit(**_opts)
def overlay(origin: Array, direction: Array, inverse: Array, t_lo: float, t_hi: float, lo: Array, hi: Array,
            level: Array, scale: Array, candidates: Array, n_candidates: int, start: Array, stop: Array,
            patch: Array) -> int:  # fmt: skip
    """Cut a ray into pieces of one patch each, the finest patch winning everywhere.

    Parameters
    ----------
    lo, hi : int64, shape (patches, 3)
        Corners of the patches in their own level's index space.
    level : int32, shape (patches,)
    scale : int64, shape (levels, 3)
        Finest units per cell.
    candidates : int32
        Patches to try, ascending in level.
    start, stop, patch : shape (3, capacity), out
        Scratch and result; row 0 of each holds the pieces in order of depth. ``capacity >= 2 * candidates + 1``.

    Returns
    -------
    int
        Number of pieces.
    """
    n = 0
    row = 0
    c = n_candidates
    while c > 0:
        this_level = level[candidates[c - 1]]
        m = 0
        while c > 0 and level[candidates[c - 1]] == this_level:
            c -= 1
            p = candidates[c]
            a, b = patch_interval(origin, direction, inverse, lo[p], hi[p], scale[this_level], t_lo, t_hi)
            if a < b:
                start[2, m], stop[2, m], patch[2, m] = a, b, p
                m += 1
        if m == 0:
            continue
        sort_by_start(start[2], stop[2], patch[2], 0, m)
        other = 1 - row
        n = fill_gaps(start[row], stop[row], patch[row], n, start[2], stop[2], patch[2], m,
                      start[other], stop[other], patch[other])  # fmt: skip
        row = other
    if row == 1:
        for i in range(n):
            start[0, i], stop[0, i], patch[0, i] = start[1, i], stop[1, i], patch[1, i]
    return n


@njit(**_opts)
def start_index(t: float, o: float, d: float, step: float, shift: float, lo: int, hi: int, scale: int) -> int:
    """Cell of one axis that holds depth `t`: entered at or before it, left after it."""
    i = int(math.floor((o + d * t) / scale)) if d != 0.0 else int(math.floor(o / scale))
    i = min(max(i, lo), hi - 1)
    if d > 0.0:
        while i + 1 < hi and (i + 1) * step + shift <= t:
            i += 1
        while i > lo and i * step + shift > t:
            i -= 1
    elif d < 0.0:
        while i > lo and i * step + shift <= t:
            i -= 1
        while i + 1 < hi and (i + 1) * step + shift > t:
            i += 1
    return i


@njit(**_merged)
def walls(origin: Array, direction: Array, inverse: Array, lo: Array, hi: Array, grid: Array) -> Any:
    """What a walk through one patch needs, as numbers: array views made in its loop would cost more than the walk.

    Returns
    -------
    low, high : tuple of 3 ints
        The patch's corners in its level's index space.
    step, shift : tuple of 3 floats
        Face i of an axis is at depth ``i * step + shift``.
    sign : tuple of 3 ints
        Direction of the walk along each axis.
    stride : tuple of 3 ints
        What a step along each axis means in the patch's flat order, x fastest.
    """
    step = (grid[0] * inverse[0], grid[1] * inverse[1], grid[2] * inverse[2])
    shift = (-origin[0] * inverse[0], -origin[1] * inverse[1], -origin[2] * inverse[2])
    sign = (1 if direction[0] > 0.0 else -1, 1 if direction[1] > 0.0 else -1, 1 if direction[2] > 0.0 else -1)
    nx = hi[0] - lo[0]
    stride = (sign[0] * 1, sign[1] * nx, sign[2] * nx * (hi[1] - lo[1]))
    return (lo[0], lo[1], lo[2]), (hi[0], hi[1], hi[2]), step, shift, sign, stride


@njit(**_merged)
def enter(origin: Array, direction: Array, t: float, grid: Array, around: Any) -> Any:
    """Begin a walk (Amanatides & Woo 1987) at depth `t`; `around` is from `walls`.

    Returns
    -------
    tuple
        Cell's index along x, y, z; its place in the patch's flat order; depths at which the ray leaves it through the
        faces of each axis.
    """
    low, high, step, shift, sign, _ = around
    ix = start_index(t, origin[0], direction[0], step[0], shift[0], low[0], high[0], grid[0])
    iy = start_index(t, origin[1], direction[1], step[1], shift[1], low[1], high[1], grid[1])
    iz = start_index(t, origin[2], direction[2], step[2], shift[2], low[2], high[2], grid[2])
    tx = (ix + (sign[0] > 0)) * step[0] + shift[0] if direction[0] != 0.0 else math.inf
    ty = (iy + (sign[1] > 0)) * step[1] + shift[1] if direction[1] != 0.0 else math.inf
    tz = (iz + (sign[2] > 0)) * step[2] + shift[2] if direction[2] != 0.0 else math.inf
    cell = ((iz - low[2]) * (high[1] - low[1]) + (iy - low[1])) * (high[0] - low[0]) + (ix - low[0])
    return ix, iy, iz, cell, tx, ty, tz


@njit(**_merged)
def advance(walk: Any, face: float, around: Any) -> Any:
    """Go on through the face, edge or corner at depth `face`; returns the walk, and whether it is in the patch."""
    ix, iy, iz, cell, tx, ty, tz = walk
    low, high, step, shift, sign, stride = around
    inside = True
    if tx == face:
        ix += sign[0]
        cell += stride[0]
        inside = low[0] <= ix < high[0]
        tx = (ix + (sign[0] > 0)) * step[0] + shift[0]
    if ty == face:
        iy += sign[1]
        cell += stride[1]
        inside = inside and low[1] <= iy < high[1]
        ty = (iy + (sign[1] > 0)) * step[1] + shift[1]
    if tz == face:
        iz += sign[2]
        cell += stride[2]
        inside = inside and low[2] <= iz < high[2]
        tz = (iz + (sign[2] > 0)) * step[2] + shift[2]
    return (ix, iy, iz, cell, tx, ty, tz), inside


@njit(**_opts)
def trace(origin: Array, direction: Array, inverse: Array, t0: float, t1: float, lo: Array, hi: Array,
          grid: Array, cells: Array, ends: Array) -> int:  # fmt: skip
    """Cells of one patch that a ray crosses between depths `t0` and `t1`.

    Parameters
    ----------
    lo, hi, grid : int64, shape (3,)
        The patch's corners in its level's index space; finest units per cell.
    cells : int64, shape (n,), out
        Flat index of each cell crossed, x fastest.
    ends : float64, shape (n + 1,), out
        Depths: crossing i reaches from ``ends[i]`` to ``ends[i + 1]``. Both want ``sum(hi - lo) + 1`` places, `ends`
        one more.

    Returns
    -------
    int
        Number of crossings; all have a positive length.
    """
    around = walls(origin, direction, inverse, lo, hi, grid)
    walk = enter(origin, direction, t0, grid, around)
    t = t0
    ends[0] = t
    n = 0
    inside = True
    while inside:
        face = min(walk[4], min(walk[5], walk[6]))
        end = min(face, t1)
        if end > t:
            cells[n] = walk[3]
            n += 1
            t = end
            ends[n] = t
        inside = face < t1
        if inside:
            walk, inside = advance(walk, face, around)
    return n


@njit(**_opts)
def clip_to_region(origin: Array, direction: Array, inverse: Array, box: Array, sphere: Array,
                   cell: Array) -> tuple[float, float]:  # fmt: skip
    """Depths between which a ray is inside the region that is rendered.

    Parameters
    ----------
    box : float64, shape (2, 3)
        Low and high corner in finest units.
    sphere : float64, shape (4,)
        Centre in finest units and radius in units of length; a radius of infinity means no sphere.
    cell : float64, shape (3,)
        Size of a finest unit, in units of length, per axis.
    """
    t0, t1 = -math.inf, math.inf
    for axis in range(3):
        o, d = origin[axis], direction[axis]
        if d == 0.0:
            if o < box[0, axis] or o >= box[1, axis]:
                return math.inf, -math.inf
            continue
        a = box[0, axis] * inverse[axis] + -o * inverse[axis]
        b = box[1, axis] * inverse[axis] + -o * inverse[axis]
        t0 = max(t0, min(a, b))
        t1 = min(t1, max(a, b))
    if sphere[3] < math.inf:
        along = 0.0
        square = 0.0
        speed = 0.0
        for axis in range(3):
            x = (origin[axis] - sphere[axis]) * cell[axis]
            v = direction[axis] * cell[axis]
            along += x * v
            square += x * x
            speed += v * v
        root = along * along - speed * (square - sphere[3] * sphere[3])
        if root <= 0.0:
            return math.inf, -math.inf
        root = math.sqrt(root)
        t0 = max(t0, (-along - root) / speed)
        t1 = min(t1, (-along + root) / speed)
    return t0, t1


@njit(**_opts)
def inverse_of(direction: Array) -> Array:
    """One over each component, 0 where the component is 0 (never used there)."""
    out = np.zeros(3)
    for axis in range(3):
        if direction[axis] != 0.0:
            out[axis] = 1.0 / direction[axis]
    return out
