"""Kernels of the look-up indices: sparse 3-D bins per level, and a pyramid of 2-D bins on the sky."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(nogil=True, cache=True)
def bin_entries(lo, shape, patch0, width, bins, keys, ids):  # type: ignore[no-untyped-def]
    """Write one (bin key, patch) pair for every bin that every box touches; returns their number.

    lo, shape: (n, 3) int32, boxes of one level; patch0: id of the first; width, bins: (3,) int64.
    keys: (entries,) int64 and ids: (entries,) int32, both out; empty `keys` only counts.
    """
    count = 0
    for box in range(lo.shape[0]):
        x0 = lo[box, 0] // width[0]
        x1 = (lo[box, 0] + shape[box, 0] - 1) // width[0]
        y0 = lo[box, 1] // width[1]
        y1 = (lo[box, 1] + shape[box, 1] - 1) // width[1]
        z0 = lo[box, 2] // width[2]
        z1 = (lo[box, 2] + shape[box, 2] - 1) // width[2]
        if len(keys) == 0:
            count += (x1 - x0 + 1) * (y1 - y0 + 1) * (z1 - z0 + 1)
            continue
        for x in range(x0, x1 + 1):
            for y in range(y0, y1 + 1):
                for z in range(z0, z1 + 1):
                    keys[count] = (x * bins[1] + y) * bins[2] + z
                    ids[count] = patch0 + box
                    count += 1
    return count


@njit(nogil=True, cache=True)
def _lower(keys, first, last, value):  # type: ignore[no-untyped-def]
    """First position in sorted ``keys[first:last]`` that is not below `value`."""
    while first < last:
        middle = (first + last) // 2
        if keys[middle] < value:
            first = middle + 1
        else:
            last = middle
    return first


@njit(nogil=True, cache=True)
def _collect(bin3, bin0, entries, lo, shape, width, q0, q1, found, n):  # type: ignore[no-untyped-def]
    """Append the patches of one bin that meet the box [q0, q1) and have not been met in an earlier bin."""
    for patch in entries:
        meets = True
        for axis in range(3):
            low = lo[patch, axis]
            if low >= q1[axis] or low + shape[patch, axis] <= q0[axis]:
                meets = False
                break
            # A patch that lies in several bins is taken in the first of them that the box touches.
            if max(low // width[axis], bin0[axis]) != bin3[axis]:
                meets = False
                break
        if meets:
            if n == len(found):
                bigger = np.empty(2 * n, np.int64)
                bigger[:n] = found
                found = bigger
            found[n] = patch
            n += 1
    return found, n


@njit(nogil=True, cache=True)
def boxes_meeting(  # type: ignore[no-untyped-def]
    level0, level1, box_lo, box_hi, scale, lo, shape, width, bins, key_first, keys, start, ids
):
    """Patches of levels ``level0 <= level < level1`` that meet a box, in no order.

    box_lo, box_hi: (3,) int64 in finest units. scale, width, bins: (levels, 3) int64. lo, shape: (patches, 3)
    int32. Occupied bins of a level are ``keys[key_first[level]:key_first[level + 1]]``, sorted; the patches
    in bin k are ``ids[start[k]:start[k + 1]]``.
    """
    found = np.empty(32, np.int64)
    n = 0
    q0 = np.empty(3, np.int64)
    q1 = np.empty(3, np.int64)
    bin0 = np.empty(3, np.int64)
    bin1 = np.empty(3, np.int64)
    bin3 = np.empty(3, np.int64)
    for level in range(level0, level1):
        first, last = key_first[level], key_first[level + 1]
        empty = first == last
        for axis in range(3):
            s, w = scale[level, axis], width[level, axis]
            q0[axis] = max(box_lo[axis] // s, 0)
            q1[axis] = min(-(-box_hi[axis] // s), bins[level, axis] * w)
            empty = empty or q1[axis] <= q0[axis]
            bin0[axis] = q0[axis] // w
            bin1[axis] = (q1[axis] - 1) // w
        if empty:
            continue
        ny, nz = bins[level, 1], bins[level, 2]
        first = _lower(keys, first, last, (bin0[0] * ny + bin0[1]) * nz + bin0[2])
        last = _lower(keys, first, last, (bin1[0] * ny + bin1[1]) * nz + bin1[2] + 1)
        across = bin1[1] - bin0[1] + 1
        rows = (bin1[0] - bin0[0] + 1) * across
        # Where fewer bins are occupied than there are rows of them, walk through all as if they were one row.
        sparse = last - first <= rows
        for row in range(1 if sparse else rows):
            k, end = first, last
            if not sparse:
                key = ((bin0[0] + row // across) * ny + bin0[1] + row % across) * nz
                k = _lower(keys, first, last, key + bin0[2])
                end = _lower(keys, k, last, key + bin1[2] + 1)
            for occupied in range(k, end):
                bin3[0] = keys[occupied] // nz // ny
                bin3[1] = keys[occupied] // nz % ny
                bin3[2] = keys[occupied] % nz
                inside = True
                for axis in range(3):
                    inside = inside and bin0[axis] <= bin3[axis] <= bin1[axis]
                if inside:
                    entries = ids[start[occupied] : start[occupied + 1]]
                    found, n = _collect(bin3, bin0, entries, lo, shape, width[level], q0, q1, found, n)
    return found[:n]


@njit(nogil=True, cache=True)
def sky_bins(first, last, tier, tier_first, tier_columns, start, ids):  # type: ignore[no-untyped-def]
    """Count (empty `ids`) or place the rectangles in the bins of their tier.

    first, last: (n, 2) int32, first and last unit bin of each rectangle in x, y; tier: (n,) int64, its bins
    are ``2**tier`` units wide; negative: left out. The bins of tier t start at ``tier_first[t]`` and run
    ``tier_columns[t]`` in a row. start: (bins + 1,) int64, out: counts in ``start[1:]``, or, while placing,
    the running end of each bin. ids: (entries,) int32, out.
    """
    for rectangle in range(len(tier)):
        t = tier[rectangle]
        if t < 0:
            continue
        for y in range(first[rectangle, 1] >> t, (last[rectangle, 1] >> t) + 1):
            row = tier_first[t] + y * tier_columns[t]
            for x in range(first[rectangle, 0] >> t, (last[rectangle, 0] >> t) + 1):
                if len(ids) == 0:
                    start[row + x + 1] += 1
                else:
                    ids[start[row + x]] = rectangle
                    start[row + x] += 1


@njit(nogil=True, cache=True)
def rectangles_meeting(  # type: ignore[no-untyped-def]
    x0, x1, y0, y1, unit, rect_lo, rect_hi, first, tier_first, tier_columns, start, ids
):
    """Rectangles (closed) that meet the half-open box [x0, x1) x [y0, y1) in pixels, in no order.

    unit: (4,) int64, first and last unit bin that the box touches in x, then in y; rect_lo, rect_hi: (n, 2)
    float64; the rest as in `sky_bins`, with the bins' final starts.
    """
    found = np.empty(64, np.int64)
    n = 0
    for t in range(len(tier_columns)):
        bx0, by0 = unit[0] >> t, unit[2] >> t
        for by in range(by0, (unit[3] >> t) + 1):
            row = tier_first[t] + by * tier_columns[t]
            for bx in range(bx0, (unit[1] >> t) + 1):
                for entry in range(start[row + bx], start[row + bx + 1]):
                    r = ids[entry]
                    if rect_lo[r, 0] >= x1 or rect_hi[r, 0] < x0 or rect_lo[r, 1] >= y1 or rect_hi[r, 1] < y0:
                        continue
                    # One that lies in several bins is taken in the first of them that the box touches.
                    if max(first[r, 0] >> t, bx0) != bx or max(first[r, 1] >> t, by0) != by:
                        continue
                    if n == len(found):
                        bigger = np.empty(2 * n, np.int64)
                        bigger[:n] = found
                        found = bigger
                    found[n] = r
                    n += 1
    return found[:n]
