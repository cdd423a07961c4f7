"""Which patches meet a box: in space, level by level (`BoxIndex`), and on the sky (`SkyIndex`)."""

from __future__ import annotations

import threading
import weakref
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.errors import PlanError
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.mesh.kernels import bin_entries, boxes_meeting, rectangles_meeting, sky_bins

Ids = npt.NDArray[np.int64]

ENTRIES_PER_PATCH = 16
"""Bins of a level are widened until a patch lies in no more of them than this, on average."""


class BoxIndex:
    """Uniform bins per level; only occupied bins are stored (about 20 bytes a patch).

    A look-up takes a time that depends on the box and on what is found, not on the number of patches, but for
    a binary search among the occupied bins.

    Parameters
    ----------
    hierarchy : Hierarchy
        Its `lo` and `shape` are used in place.
    """

    def __init__(self, hierarchy: Hierarchy) -> None:
        self._levels = hierarchy.levels
        self._scale = hierarchy.scale
        self._lo = np.ascontiguousarray(np.asarray(hierarchy.lo, dtype=np.int32))
        self._shape = np.ascontiguousarray(np.asarray(hierarchy.shape, dtype=np.int32))
        self._width = np.ones((hierarchy.levels, 3), dtype=np.int64)
        self._bins = np.ones((hierarchy.levels, 3), dtype=np.int64)
        key_first, keys, counts, ids = [0], [], [], []
        for level in range(hierarchy.levels):
            level_keys, level_ids = self._fill_level(level, hierarchy)
            order = np.argsort(level_keys, kind="stable")
            unique, first = np.unique(level_keys[order], return_index=True)
            key_first.append(key_first[-1] + len(unique))
            keys.append(unique)
            counts.append(np.diff(np.append(first, len(order))))
            ids.append(level_ids[order])
        self._key_first = np.array(key_first, dtype=np.int64)
        self._keys = np.concatenate(keys)
        self._start = np.concatenate([[0], np.cumsum(np.concatenate(counts))]).astype(np.int64)
        self._ids = np.concatenate(ids)

    def _fill_level(self, level: int, hierarchy: Hierarchy) -> tuple[Ids, npt.NDArray[np.int32]]:
        """Choose the bins of one level and list (bin key, patch) pairs, unsorted."""
        first, last = (int(i) for i in hierarchy.first[level : level + 2])
        lo, shape = self._lo[first:last], self._shape[first:last]
        if first == last:
            return np.empty(0, np.int64), np.empty(0, np.int32)
        width = np.int64(2) ** np.ceil(np.log2(shape.mean(axis=0))).astype(np.int64)
        nothing = (np.empty(0, np.int64), np.empty(0, np.int32))
        while True:
            bins = -(-hierarchy.domain[level].astype(np.int64) // width)
            entries = bin_entries(lo, shape, first, width, bins, *nothing)
            if entries <= ENTRIES_PER_PATCH * len(lo):
                break
            width = 2 * width
        self._width[level], self._bins[level] = width, bins
        keys, ids = np.empty(entries, np.int64), np.empty(entries, np.int32)
        bin_entries(lo, shape, first, width, bins, keys, ids)
        return keys, ids

    @property
    def nbytes(self) -> int:
        """Memory of the index itself, without the hierarchy's arrays."""
        return int(sum(a.nbytes for a in (self._keys, self._start, self._ids, self._width, self._bins)))

    @property
    def tables(self) -> tuple[npt.NDArray[Any], ...]:
        """The arrays that `kernels.boxes_meeting` takes after the box."""
        return (
            self._scale,
            self._lo,
            self._shape,
            self._width,
            self._bins,
            self._key_first,
            self._keys,
            self._start,
            self._ids,
        )

    def overlapping(self, level: int, lo: npt.ArrayLike, hi: npt.ArrayLike) -> Ids:
        """Patches of `level` that share volume with the box of cells [lo, hi) of that level, ascending.

        The box may reach outside the domain.
        """
        return self._meeting(level, lo, hi, level, level + 1)

    def finer(self, level: int, lo: npt.ArrayLike, hi: npt.ArrayLike) -> Ids:
        """Patches of all finer levels that share volume with the cells [lo, hi) of `level`, ascending."""
        return self._meeting(level, lo, hi, level + 1, self._levels)

    def _meeting(self, level: int, lo: npt.ArrayLike, hi: npt.ArrayLike, level0: int, level1: int) -> Ids:
        scale = self._scale[level]
        low = np.asarray(lo, dtype=np.int64) * scale
        found: Ids = boxes_meeting(level0, level1, low, np.asarray(hi, dtype=np.int64) * scale, *self.tables)
        found.sort()  # here and not in the kernel, whose compilation it would double
        return found


_lock = threading.Lock()
_known: dict[int, BoxIndex] = {}


def box_index(hierarchy: Hierarchy) -> BoxIndex:
    """Return the index of `hierarchy`: built at the first call, kept as long as the hierarchy lives."""
    with _lock:
        index = _known.get(id(hierarchy))
        if index is None:
            index = _known[id(hierarchy)] = BoxIndex(hierarchy)
            weakref.finalize(hierarchy, _known.pop, id(hierarchy), None)
        return index


class SkyIndex:
    """Bins of tile size on the sky, in tiers: a rectangle many tiles wide lies in a few wide bins.

    So the memory is a few integers a patch (at most 4 entries of 4 bytes, besides the bins), even where a
    patch fills the image.

    Parameters
    ----------
    rect_lo, rect_hi : array_like, shape (n, 2)
        Bounding rectangle of each patch, x then y, in pixels; pixel k reaches from k to k + 1. Closed.
    bin : int or (int, int)
        Pixels of a tile along x and y.
    image : (int, int), optional
        Pixels along x and y of the image; the index covers it from 0, and rectangles outside it are left out.
        By default it reaches to the last rectangle.

    Raises
    ------
    PlanError
        A rectangle that is not finite or has its corners the wrong way round, or a bin below one pixel.
    """

    def __init__(
        self,
        rect_lo: npt.ArrayLike,
        rect_hi: npt.ArrayLike,
        bin: int | tuple[int, int],
        image: tuple[int, int] | None = None,
    ) -> None:
        self._lo = np.ascontiguousarray(np.reshape(rect_lo, (-1, 2)), dtype=np.float64)
        self._hi = np.ascontiguousarray(np.reshape(rect_hi, (-1, 2)), dtype=np.float64)
        self._bin = np.broadcast_to(np.asarray(bin, dtype=np.int64), 2)
        wrong = ~np.all(np.isfinite(self._lo) & np.isfinite(self._hi) & (self._lo <= self._hi), axis=1)
        if self._lo.shape != self._hi.shape or np.any(self._bin < 1):
            raise PlanError(
                f"sky index: {len(self._lo)} low and {len(self._hi)} high corners, bins of {bin} pixels; "
                "wanted as many of each, and bins of at least 1 pixel"
            )
        if wrong.any():
            i = int(np.argmax(wrong))
            raise PlanError(
                f"sky index: the rectangle of patch {i} reaches from {self._lo[i]} to {self._hi[i]} pixels"
            )
        if image is None:
            reach = np.floor(self._hi.max(axis=0, initial=0.0)) + 1
            image = int(reach[0]), int(reach[1])
        self.image = image
        self.tiles = tuple(int(n) for n in -(-np.array(image, dtype=np.int64) // self._bin))
        self._build()

    def _build(self) -> None:
        unit_count = np.array(self.tiles, dtype=np.int64)
        inside = np.all((self._hi >= 0) & (self._lo < np.array(self.image)), axis=1)
        # whole pixels first, then bins: no rounding of lo / bin to worry about
        limit = unit_count * self._bin
        low = np.floor(np.clip(self._lo, 0, limit - 1)).astype(np.int64) // self._bin
        high = np.floor(np.clip(self._hi, 0, limit - 1)).astype(np.int64) // self._bin
        self._first, self._last = low.astype(np.int32), high.astype(np.int32)
        self._inside = inside
        # the tier whose bins are as wide as the rectangle: it then touches at most 2 of them an axis
        across = np.max(high - low + 1, axis=1, initial=1)
        tier = np.where(inside, np.frexp(across - 0.5)[1], -1).astype(np.int64)
        columns, first = [], [0]
        for t in range(int(tier.max(initial=0)) + 1):
            nx, ny = (int((n - 1) >> t) + 1 for n in unit_count)
            columns.append(nx)
            first.append(first[-1] + nx * ny)
        self._tier_first, self._tier_columns = np.array(first, np.int64), np.array(columns, np.int64)
        self._start = np.zeros(first[-1] + 1, dtype=np.int64)
        tables = (self._first, self._last, tier, self._tier_first, self._tier_columns)
        sky_bins(*tables, self._start, np.empty(0, np.int32))
        np.cumsum(self._start, out=self._start)
        self._ids = np.empty(self._start[-1], dtype=np.int32)
        sky_bins(*tables, self._start.copy(), self._ids)

    @property
    def nbytes(self) -> int:
        """Memory of the index with its copy of the rectangles."""
        arrays = (self._lo, self._hi, self._first, self._last, self._start, self._ids, self._inside)
        return int(sum(a.nbytes for a in arrays))

    def patches_in(self, x0: int, x1: int, y0: int, y1: int) -> Ids:
        """Patches whose closed rectangle meets the pixels [x0, x1) x [y0, y1), ascending.

        The box is cut to the image.
        """
        x0, x1 = max(x0, 0), min(x1, self.image[0])
        y0, y1 = max(y0, 0), min(y1, self.image[1])
        if x0 >= x1 or y0 >= y1:
            return np.empty(0, np.int64)
        bx, by = self._bin
        unit = np.array([x0 // bx, (x1 - 1) // bx, y0 // by, (y1 - 1) // by], dtype=np.int64)
        tables = (self._tier_first, self._tier_columns, self._start, self._ids)
        found: Ids = rectangles_meeting(x0, x1, y0, y1, unit, self._lo, self._hi, self._first, *tables)
        found.sort()
        return found

    def counts(self) -> Ids:
        """Patches behind each tile, as many as `patches_in` finds there; shape (tiles in y, tiles in x)."""
        nx, ny = self.tiles
        change = np.zeros((ny + 1, nx + 1), dtype=np.int64)
        x0, y0 = self._first[self._inside].T
        x1, y1 = self._last[self._inside].T + 1
        for y, x, step in ((y0, x0, 1), (y0, x1, -1), (y1, x0, -1), (y1, x1, 1)):
            np.add.at(change, (y, x), step)
        counts: Ids = change.cumsum(axis=0).cumsum(axis=1)[:ny, :nx]
        return counts
