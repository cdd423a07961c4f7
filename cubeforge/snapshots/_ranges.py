"""Which contiguous byte ranges of a stored array to read for a part of it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import prod

import numpy as np
import numpy.typing as npt

from cubeforge.snapshots.amrex_fab import RealFormat

MERGE = 4096
"""Gaps up to this many bytes are read along: storage and page cache work in pages of this size anyway."""

Four = tuple[int, int, int, int]
"""Along x, y, z and component."""


@dataclass(frozen=True)
class Ranges:
    """Equal ranges that hold a 4-D part of a stored array, all counted in numbers, not bytes.

    Attributes
    ----------
    shape, stride : Four
        The part, and the stored array's strides.
    merged : int
        Axes 0 to ``merged - 1`` lie inside one range; one range is read for each index of the others.
    span : int
        Numbers in a range.
    """

    shape: Four
    stride: Four
    merged: int
    span: int

    @property
    def total(self) -> int:
        """Numbers read, those in the gaps included."""
        return self.span * prod(self.shape[self.merged :])


def plan_ranges(shape: Four, stored: Sequence[int], size: int) -> Ranges:
    """Ranges for a part of `shape` in a `stored` array, x fastest, of numbers of `size` bytes."""
    stride = (1, stored[0], stored[0] * stored[1], stored[0] * stored[1] * stored[2])
    merged, span = 1, shape[0]
    for axis in range(1, 4):
        if shape[axis] > 1 and (stride[axis] - span) * size > MERGE:
            break
        span += (shape[axis] - 1) * stride[axis]
        merged += 1
    return Ranges(shape, stride, merged, span)


def read_ranges(
    fetch: Callable[[int, int], bytes],
    ranges: Ranges,
    start: int,
    real: RealFormat,
    out: Sequence[npt.NDArray[np.floating]],
) -> None:
    """Fill `out`, one array (nx, ny, nz) a component, by ``fetch(bytes, offset)``.

    Parameters
    ----------
    start : int
        Byte offset of the part's first number.
    """
    shape, stride, merged = ranges.shape, ranges.stride, ranges.merged
    strides = tuple(n * real.size for n in stride[:merged])
    for outer in np.ndindex(shape[merged:]):
        skip = sum(i * n for i, n in zip(outer, stride[merged:], strict=True))
        raw = fetch(ranges.span * real.size, start + skip * real.size)
        numbers = real.decode(np.frombuffer(raw, dtype=np.uint8))
        block = np.lib.stride_tricks.as_strided(numbers, shape[:merged], strides, writeable=False)
        if merged == 4:
            for component, array in enumerate(out):
                array[...] = block[..., component]
        else:
            out[outer[-1]][(..., *outer[:-1])] = block
