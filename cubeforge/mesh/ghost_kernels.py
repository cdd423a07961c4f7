"""Kernels of ghost filling: which cells are needed, means of finer cells, interpolation from coarser ones."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(nogil=True, cache=True)
def beside_leaves(leaf, need):  # type: ignore[no-untyped-def]
    """Mark every cell that is no leaf and shares a face with one.

    leaf: (nx, ny, nz) bool; need: (nx + 2, ny + 2, nz + 2) bool, out, all False before.
    """
    nx, ny, nz = leaf.shape
    for i in range(nx):
        for j in range(ny):
            for k in range(nz):
                if not leaf[i, j, k]:
                    continue
                if i == 0 or not leaf[i - 1, j, k]:
                    need[i, j + 1, k + 1] = True
                if i == nx - 1 or not leaf[i + 1, j, k]:
                    need[i + 2, j + 1, k + 1] = True
                if j == 0 or not leaf[i, j - 1, k]:
                    need[i + 1, j, k + 1] = True
                if j == ny - 1 or not leaf[i, j + 1, k]:
                    need[i + 1, j + 2, k + 1] = True
                if k == 0 or not leaf[i, j, k - 1]:
                    need[i + 1, j + 1, k] = True
                if k == nz - 1 or not leaf[i, j, k + 1]:
                    need[i + 1, j + 1, k + 2] = True


@njit(nogil=True, cache=True)
def _plane_bounds(mask, box, axis, planes):  # type: ignore[no-untyped-def]
    """Bounding box of the True cells in each plane of `box` across `axis`; low > high where a plane is empty.

    box: (6,) int64, low then high corner; planes: (cells along axis, 6) int64, out. Returns the True cells.
    """
    count = 0
    for p in range(box[3 + axis] - box[axis]):
        for a in range(3):
            planes[p, a] = box[3 + a]
            planes[p, 3 + a] = box[a]
    for i in range(box[0], box[3]):
        for j in range(box[1], box[4]):
            for k in range(box[2], box[5]):
                if mask[i, j, k]:
                    count += 1
                    at = (i, j, k)
                    p = at[axis] - box[axis]
                    for a in range(3):
                        planes[p, a] = min(planes[p, a], at[a])
                        planes[p, 3 + a] = max(planes[p, 3 + a], at[a] + 1)
    return count


@njit(nogil=True, cache=True)
def _grow(box, other):  # type: ignore[no-untyped-def]
    """Widen `box` to hold `other` too; returns its volume, 0 when empty."""
    volume = 1
    for a in range(3):
        box[a] = min(box[a], other[a])
        box[3 + a] = max(box[3 + a], other[3 + a])
        volume *= max(box[3 + a] - box[a], 0)
    return volume


@njit(nogil=True, cache=True)
def _best_cut(mask, box, parts):  # type: ignore[no-untyped-def]
    """Shrink `box` to its True cells and find the cut that leaves the least volume in two tight boxes.

    parts: (2, 6) int64, out, the halves. Returns (volume of the shrunk box, True cells in it).
    """
    best = np.int64(1) << 62
    nothing = np.empty(6, np.int64)
    for a in range(3):
        nothing[a] = box[3 + a]
        nothing[3 + a] = box[a]
    tight = nothing.copy()
    volume = count = 0
    for axis in range(3):
        n = box[3 + axis] - box[axis]
        planes = np.empty((n, 6), np.int64)
        count = _plane_bounds(mask, box, axis, planes)
        right = np.empty((n + 1, 6), np.int64)
        right_volume = np.zeros(n + 1, np.int64)
        right[n] = nothing
        for p in range(n - 1, -1, -1):
            right[p] = right[p + 1]
            right_volume[p] = _grow(right[p], planes[p])
        if right_volume[0] == 0:
            return 0, 0
        volume = right_volume[0]
        tight[:] = right[0]
        left = nothing.copy()
        for p in range(n - 1):
            left_volume = _grow(left, planes[p])
            if left_volume > 0 and right_volume[p + 1] > 0 and left_volume + right_volume[p + 1] < best:
                best = left_volume + right_volume[p + 1]
                parts[0] = left
                parts[1] = right[p + 1]
    box[:] = tight
    return volume, count


@njit(nogil=True, cache=True)
def _any_in(mask, low, high):  # type: ignore[no-untyped-def]
    """Whether some cell of ``mask[low:high]`` is True."""
    for i in range(low[0], high[0]):
        for j in range(low[1], high[1]):
            for k in range(low[2], high[2]):
                if mask[i, j, k]:
                    return True
    return False


@njit(nogil=True, cache=True)
def boxes_of(mask, low, high, extra):  # type: ignore[no-untyped-def]
    """Tight boxes around the True cells of ``mask[low:high]``, cut where that saves over `extra` cells.

    mask: bool array; low, high: (3,) int64; returns (boxes, 6) int64, low then high corners; disjoint.
    """
    found = np.empty((8, 6), np.int64)
    if not _any_in(mask, low, high):
        return found[:0]
    done = 0
    stack = np.empty((8, 6), np.int64)
    stack[0, :3] = low
    stack[0, 3:] = high
    waiting = 1
    parts = np.empty((2, 6), np.int64)
    around = np.empty((1, 6), np.int64)
    cost, single = 0, -1
    while waiting > 0:
        waiting -= 1
        box = stack[waiting].copy()
        volume, count = _best_cut(mask, box, parts)
        if single < 0:
            single = volume
            around[0] = box
        if count == 0:
            continue
        # A shell pays only after its last face is cut off, so cut on while there is enough to save at all.
        if volume - count > extra:
            if waiting + 2 > len(stack):
                stack = np.concatenate((stack, np.empty_like(stack)))
            stack[waiting] = parts[1]
            stack[waiting + 1] = parts[0]
            waiting += 2
            continue
        if done == len(found):
            found = np.concatenate((found, np.empty_like(found)))
        found[done] = box
        done += 1
        cost += volume + extra
    return around if done > 1 and cost > single + extra else found[:done]


@njit(nogil=True, cache=True)
def mark_held(patches, corner, lo, shape, held):  # type: ignore[no-untyped-def]
    """Mark the cells of a window that patches of its level hold.

    patches: ids; corner: (3,) int64, the window's corner in index space, moved by the periodic image; lo,
    shape: (all patches, 3) int32; held: (nx, ny, nz) bool, out.
    """
    for patch in patches:
        first, last = _overlap(patch, corner, lo, shape, held.shape)
        for i in range(first[0], last[0]):
            for j in range(first[1], last[1]):
                held[i, j, first[2] : last[2]] = True


@njit(nogil=True, cache=True)
def _overlap(patch, corner, lo, shape, size):  # type: ignore[no-untyped-def]
    """First cells and ends of the part of a window that a patch holds, from the window's corner."""
    first = np.empty(3, np.int64)
    last = np.empty(3, np.int64)
    for a in range(3):
        first[a] = max(lo[patch, a] - corner[a], 0)
        last[a] = max(min(lo[patch, a] + shape[patch, a] - corner[a], size[a]), first[a])
    return first, last


@njit(nogil=True, cache=True)
def own_boxes(patches, corner, lo, shape, stored, extra):  # type: ignore[no-untyped-def]
    """Boxes to read of patches of the window's level: rows of patch, low corner, high corner in the window.

    Arguments as in `mark_held`; stored: (nx, ny, nz) bool, cells wanted; extra: as in `boxes_of`.
    """
    rows = np.empty((8, 7), np.int64)
    n = 0
    for patch in patches:
        first, last = _overlap(patch, corner, lo, shape, stored.shape)
        for box in boxes_of(stored, first, last, extra):
            if n == len(rows):
                rows = np.concatenate((rows, np.empty_like(rows)))
            rows[n, 0] = patch
            rows[n, 1:] = box
            n += 1
    return rows[:n]


@njit(nogil=True, cache=True)
def mark_parents(missing, lo, ratio, parent_lo, need):  # type: ignore[no-untyped-def]
    """Mark the parent of every missing cell and the parent's face neighbours.

    missing: bool, its corner at `lo` in its level; need: bool, out, its corner at `parent_lo` one level
    coarser.
    """
    for i in range(missing.shape[0]):
        for j in range(missing.shape[1]):
            for k in range(missing.shape[2]):
                if not missing[i, j, k]:
                    continue
                x = (lo[0] + i) // ratio[0] - parent_lo[0]
                y = (lo[1] + j) // ratio[1] - parent_lo[1]
                z = (lo[2] + k) // ratio[2] - parent_lo[2]
                for d in range(-1, 2):
                    if 0 <= x + d < need.shape[0]:
                        need[x + d, y, z] = True
                    if 0 <= y + d < need.shape[1]:
                        need[x, y + d, z] = True
                    if 0 <= z + d < need.shape[2]:
                        need[x, y, z + d] = True


@njit(nogil=True, cache=True)
def place(part, use, at, values):  # type: ignore[no-untyped-def]
    """Copy the cells of `part` (rows, ...) that `use` wants into `values` (rows, ...), its corner at `at`."""
    for f in range(part.shape[0]):
        for i in range(part.shape[1]):
            for j in range(part.shape[2]):
                for k in range(part.shape[3]):
                    if use[at[0] + i, at[1] + j, at[2] + k]:
                        values[f, at[0] + i, at[1] + j, at[2] + k] = part[f, i, j, k]


@njit(nogil=True, cache=True)
def _slope(minus, centre, plus):  # type: ignore[no-untyped-def]
    """Monotonised central slope per cell (van Leer 1977, J. Comput. Phys. 23, 276): 0 at an extremum."""
    left, right = centre - minus, plus - centre
    if not left * right > 0.0:
        return 0.0
    size = min(0.5 * abs(left + right), 2.0 * abs(left), 2.0 * abs(right))
    return size if right > 0.0 else -size


@njit(nogil=True, cache=True)
def interpolate(  # type: ignore[no-untyped-def]
    missing, lo, ratio, coarse, coarse_known, coarse_lo, values, known
):
    """Give every missing cell the limited-linear value of its parent.

    missing: (nx, ny, nz) bool, corner at `lo`; coarse: (fields, mx, my, mz), coarse_known: (mx, my, mz),
    corner at `coarse_lo` one level coarser; values: (fields, nx, ny, nz), known: (nx, ny, nz), both out. A
    neighbour beyond the coarse array, or unknown, counts as equal. Where a parent and its neighbours are all
    of one sign, the slopes are cut so that nothing inside the parent comes nearer to 0 than a quarter of the
    smallest.
    """
    for i in range(missing.shape[0]):
        for j in range(missing.shape[1]):
            for k in range(missing.shape[2]):
                if not missing[i, j, k]:
                    continue
                cell = (lo[0] + i, lo[1] + j, lo[2] + k)
                at = (
                    cell[0] // ratio[0] - coarse_lo[0],
                    cell[1] // ratio[1] - coarse_lo[1],
                    cell[2] // ratio[2] - coarse_lo[2],
                )
                if not coarse_known[at]:
                    continue
                known[i, j, k] = True
                for f in range(len(coarse)):
                    centre = coarse[f][at]
                    low = high = centre
                    change = reach = 0.0
                    for axis in range(3):
                        step = (np.int64(axis == 0), np.int64(axis == 1), np.int64(axis == 2))
                        minus = plus = centre
                        before = (at[0] - step[0], at[1] - step[1], at[2] - step[2])
                        after = (at[0] + step[0], at[1] + step[1], at[2] + step[2])
                        if before[axis] >= 0 and coarse_known[before]:
                            minus = coarse[f][before]
                        if after[axis] < coarse_known.shape[axis] and coarse_known[after]:
                            plus = coarse[f][after]
                        slope = _slope(minus, centre, plus)
                        change += slope * ((cell[axis] % ratio[axis] + 0.5) / ratio[axis] - 0.5)
                        reach += abs(slope) * (0.5 - 0.5 / ratio[axis])
                        low = min(low, minus, plus)
                        high = max(high, minus, plus)
                    room = reach
                    if low > 0.0:
                        room = centre - 0.25 * low
                    elif high < 0.0:
                        room = 0.25 * high - centre
                    if reach > room:
                        change *= room / reach
                    values[f, i, j, k] = centre + change


@njit(nogil=True, cache=True)
def deposit(  # type: ignore[no-untyped-def]
    data, weight, open_part, offset, ratio, slot, volume, mass, reference, by_volume, by_mass
):
    """Add a part of a finer patch to the sums of the coarse cells it lies in.

    data: (rows, nx, ny, nz) float64; weight: the row that weights, or -1; open_part: (nx, ny, nz), fraction
    of each cell that is a leaf, or of shape (0, 0, 0): all 1. offset: (3,), place of the part's corner in
    fine cells from the window's corner; ratio: (3,), fine cells a coarse cell is wide; slot: window of int32,
    row of a coarse cell in the sums, or -1. volume, mass: (slots,); reference, by_volume, by_mass: (slots,
    rows), all out: sums are of differences to the first value met, so that a constant comes out exactly.
    """
    whole = 1.0 / (ratio[0] * ratio[1] * ratio[2])
    for i in range(data.shape[1]):
        x = (offset[0] + i) // ratio[0]
        for j in range(data.shape[2]):
            y = (offset[1] + j) // ratio[1]
            for k in range(data.shape[3]):
                s = slot[x, y, (offset[2] + k) // ratio[2]]
                part = whole if open_part.size == 0 else whole * open_part[i, j, k]
                if s < 0 or part == 0.0:
                    continue
                if volume[s] == 0.0:
                    reference[s] = data[:, i, j, k]
                volume[s] += part
                heavy = part * data[weight, i, j, k] if weight >= 0 else part
                mass[s] += heavy
                for f in range(len(data)):
                    by_volume[s, f] += part * (data[f, i, j, k] - reference[s, f])
                    by_mass[s, f] += heavy * (data[f, i, j, k] - reference[s, f])


@njit(nogil=True, cache=True)
def finish(  # type: ignore[no-untyped-def]
    slot, weight, plain, open_part, volume, mass, reference, by_volume, by_mass, values, known
):
    """Turn the sums of `deposit` into means, together with the open part of the cell where that has a value.

    plain: (rows,) bool, rows averaged by volume whatever the weights; open_part: as in `deposit`, for the
    window; values: (rows, nx, ny, nz), known: (nx, ny, nz), out; on entry they hold the value of the open
    part. Where the weights don't add up to something positive, the mean is by volume.
    """
    for i in range(slot.shape[0]):
        for j in range(slot.shape[1]):
            for k in range(slot.shape[2]):
                s = slot[i, j, k]
                if s < 0 or volume[s] == 0.0:
                    continue
                rest = heavy = 0.0
                if open_part.size > 0 and known[i, j, k] and open_part[i, j, k] > 0.0:
                    # not before: what a covered cell holds may be anything, and 0 x NaN is NaN
                    rest = open_part[i, j, k]
                    heavy = rest * values[weight, i, j, k] if weight >= 0 else rest
                for f in range(len(values)):
                    if rest > 0.0:
                        by_volume[s, f] += rest * (values[f, i, j, k] - reference[s, f])
                        by_mass[s, f] += heavy * (values[f, i, j, k] - reference[s, f])
                    if plain[f] or not mass[s] + heavy > 0.0:
                        mean = by_volume[s, f] / (volume[s] + rest)
                    else:
                        mean = by_mass[s, f] / (mass[s] + heavy)
                    values[f, i, j, k] = reference[s, f] + mean
                known[i, j, k] = True


@njit(nogil=True, cache=True)
def copy_outwards(values, settled, inside):  # type: ignore[no-untyped-def]
    """Give ghost cells outside the domain the value of the nearest cell in it, and those that are not settled
    the value of the nearest cell of the patch.

    values: (fields, nx + 2, ny + 2, nz + 2), out; settled: (nx + 2, ny + 2, nz + 2) bool, ghost cells that
    have a value of their own; inside: (6,) int64, low and high corner of the domain in these arrays.
    """
    nx, ny, nz = settled.shape
    for i in range(nx):
        for j in range(ny):
            between = 0 < i < nx - 1 and 0 < j < ny - 1
            for k in range(0, nz, nz - 1 if between else 1):
                if settled[i, j, k]:
                    continue
                x = min(max(i, inside[0]), inside[3] - 1)
                y = min(max(j, inside[1]), inside[4] - 1)
                z = min(max(k, inside[2]), inside[5] - 1)
                if not settled[x, y, z]:
                    x, y, z = min(max(i, 1), nx - 2), min(max(j, 1), ny - 2), min(max(k, 1), nz - 2)
                for f in range(len(values)):
                    values[f, i, j, k] = values[f, x, y, z]
