"""Packets: sixteen rays that march side by side, one in each lane of a vector.

The crossings of the rays are put into rows of sixteen. Rays need not have equally many: they are kept level in depth,
each step going as far as the slowest needs for eight crossings, and a ray that has fewer gets rows without effect. What
a ray's row holds depends on its packet, and a packet on absolute pixels alone, so the bytes of a cube don't depend on
tiles or workers.
"""

from __future__ import annotations

from typing import Any

from numba import float32, int64, njit

from cubeforge.transfer.channel_kernels import ROW, add_line, cross_row, fold, pass_sums
from cubeforge.transfer.gather_kernels import EMPTY
from cubeforge.transfer.vectors import LANES

_opts = {"nogil": True, "cache": True, "error_model": "numpy"}
# Put into the caller before compilation: numba would compile the large functions that these call again for each.
_merged = {"inline": "always", **_opts}
Array = Any

LEVELLING = 8
"""Crossings of the slowest ray in a step."""
FOLD = 256
"""Rows between two folds into float64."""
CAPACITY = 2048
"""Entries of a ray's buffer; at least `gather_kernels.MOST_CUTS`."""


@njit(**_opts)
def level_target(far: Array, taken: Array, filled: Array) -> float:
    """Depth to which the next step goes: where each ray has done `LEVELLING` more entries, or its last."""
    target = -1e300
    for lane in range(LANES):
        if taken[lane] < filled[lane]:
            target = max(target, far[lane, min(taken[lane] + LEVELLING, filled[lane]) - 1])
    return target


@njit(**_opts)
def can_reach(target: float, far: Array, taken: Array, filled: Array, finished: Array) -> bool:
    """Whether the buffers hold all that the step to `target` wants."""
    for lane in range(LANES):
        if not finished[lane]:
            short = filled[lane] - taken[lane] < LEVELLING
            if short or far[lane, filled[lane] - 1] < target:
                return False
    return True


@njit(**_opts)
def safe_target(far: Array, filled: Array, finished: Array) -> float:
    """Depth that all unfinished rays' buffers reach."""
    target = 1e300
    for lane in range(LANES):
        if not finished[lane]:
            target = min(target, far[lane, filled[lane] - 1])
    return target


@njit(**_opts)
def pack_rows(target: float, lines: int, values: Array, windows: Array, far: Array, taken: Array, filled: Array,
              rows: Array, row_windows: Array) -> int:  # fmt: skip
    """Move entries that end at `target` or before into rows; returns the number of rows.

    Parameters
    ----------
    values, windows, far
        Buffers of the rays, with a first axis of LANES; see `gather_kernels.gather`.
    taken, filled : int64, shape (LANES,)
        Entries used up (changed), and in the buffer.
    rows : float32, shape (capacity * lines * ROW * LANES,), out
    row_windows : int32, shape (capacity, 2 * lines), out
        Union of the windows in each row.
    """
    numbers = lines * ROW
    count = int64(0)
    for lane in range(LANES):
        i = taken[lane]
        row = int64(0)
        while i < filled[lane] and far[lane, i] <= target:
            if row == count:
                for line in range(lines):
                    row_windows[row, 2 * line] = EMPTY
                    row_windows[row, 2 * line + 1] = 0
                for k in range(numbers * LANES):
                    rows[row * numbers * LANES + k] = float32(0.0)
                count += 1
            for k in range(numbers):
                rows[(row * numbers + k) * LANES + lane] = values[lane, i, k]
            for line in range(lines):
                row_windows[row, 2 * line] = min(row_windows[row, 2 * line], windows[lane, i, 2 * line])
                row_windows[row, 2 * line + 1] = max(
                    row_windows[row, 2 * line + 1], windows[lane, i, 2 * line + 1]
                )
            row += 1
            i += 1
        taken[lane] = i
    return int(count)


@njit(**_merged)
def apply_row(rows: Array, row: int, row_windows: Array, lines: int, offsets: Array, channels: int, state: Array,
              sums: Array) -> tuple[int, int]:  # fmt: skip
    """Pass light through one row; returns the channels touched."""
    if lines == 1:
        first, last = row_windows[row, 0], row_windows[row, 1]
        if first < last:
            cross_row(rows, row, offsets, first, last, channels, state)
        return first, last
    low, high = channels, 0
    for line in range(lines):
        first, last = row_windows[row, 2 * line], row_windows[row, 2 * line + 1]
        if first < last:
            add_line(rows, (row * lines + line) * ROW * LANES, offsets, first, last, channels, sums)
            low, high = min(low, first), max(high, last)
    if low < high:
        pass_sums(low, high, channels, offsets.shape[0], sums, state)
    return low, high


@njit(**_merged)
def apply_rows(count: int, done: int, touched: Array, rows: Array, row_windows: Array, lines: int, offsets: Array,
               channels: int, state: Array, sums: Array, folded: Array) -> Any:  # fmt: skip
    """Pass light through `count` rows, folding every `FOLD` rows of the packet; returns the rows done in all."""
    for row in range(count):
        first, last = apply_row(rows, row, row_windows, lines, offsets, channels, state, sums)
        if first < last:
            touched[0] = min(touched[0], first)
            touched[1] = max(touched[1], last)
        done += 1
        if done % FOLD == 0:
            fold_touched(touched, channels, offsets.shape[0], state, folded)
    return done


@njit(**_merged)
def fold_touched(touched: Array, channels: int, nodes: int, state: Array, folded: Array) -> None:
    """Fold the channels ``touched[0]..touched[1]`` that were met since the last fold.

    ``touched[2]..touched[3]`` becomes what the packet has met in all.
    """
    if touched[0] < touched[1]:
        fold(touched[0], touched[1], channels, nodes, state, folded)
        touched[2] = min(touched[2], touched[0])
        touched[3] = max(touched[3], touched[1])
    touched[0] = channels
    touched[1] = 0


@njit(**_opts)
def compact(values: Array, windows: Array, far: Array, taken: Array, filled: Array) -> None:
    """Move what is left in the buffers to their front."""
    for lane in range(LANES):
        left = filled[lane] - taken[lane]
        if taken[lane] > 0:
            for i in range(left):
                values[lane, i] = values[lane, taken[lane] + i]
                windows[lane, i] = windows[lane, taken[lane] + i]
                far[lane, i] = far[lane, taken[lane] + i]
        taken[lane] = 0
        filled[lane] = left
