"""What ghost cells are made of, worked out from the hierarchy alone: which parts of which patches.

The value of a level at a cell is, in this order: the stored value, where a patch of that level holds the cell
and finer patches don't cover all of it; the mean of the finer leaf cells, where they cover it; else the
limited-linear value interpolated from the next coarser level, which is found by the same rule. A `Window`
says so for a box of one level, and leads to the window of the next coarser level that it needs.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from cubeforge.mesh.ghost_kernels import beside_leaves, boxes_of, mark_held, mark_parents, own_boxes
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.mesh.leaves import open_fraction
from cubeforge.mesh.overlap import BoxIndex, box_index
from cubeforge.mesh.reading import Box

Ints = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]
FloatArray = npt.NDArray[np.float64]

ALL_OPEN = np.empty((0, 0, 0))
"""Stands for an array of open fractions that are all 1."""
READ_COST = 256
"""A part is read in two when that spares more than this many cells: about what one more read costs."""


@dataclass(frozen=True)
class Part:
    """A part of a patch, and where it goes in a window.

    Attributes
    ----------
    patch, box : the cells to read.
    at : ndarray, shape (3,)
        Place of the box's corner, counted from the window's corner in cells of the patch's own level.
    ratio : ndarray, shape (3,)
        Cells of the patch's level that a cell of the window is wide.
    open_part : ndarray
        Fraction of each cell of the box that is a leaf; `ALL_OPEN` if all are.
    """

    patch: int
    box: Box
    at: Ints
    ratio: Ints
    open_part: FloatArray


@dataclass(frozen=True)
class Window:
    """A box of cells of one level, and what their values are made of.

    Attributes
    ----------
    level, lo : the box's corner in the level's index space; outside the domain where that is periodic.
    ratio : ndarray, shape (3,)
        Refinement ratio to the next coarser level.
    stored : ndarray of bool
        Cells that take the stored value.
    missing : ndarray of bool
        Cells interpolated from `coarse`, at least for the part of them that is open.
    under : ndarray of bool
        Cells that take the mean of finer ones, at least for the part of them that is covered.
    open_part : ndarray
        Fraction of each cell that no finer patch covers; `ALL_OPEN` if all.
    own, fine : parts of patches of this level, of finer levels.
    coarse : Window or None
    """

    level: int
    lo: Ints
    ratio: Ints
    stored: BoolArray
    missing: BoolArray
    under: BoolArray
    open_part: FloatArray
    own: list[Part]
    fine: list[Part]
    coarse: Window | None

    def parts(self) -> Iterator[Part]:
        """Everything to read for this window and the coarser ones behind it, in that order."""
        yield from self.own
        if self.coarse is not None:
            yield from self.coarse.parts()
        yield from self.fine

    @property
    def averages(self) -> bool:
        """Whether means of finer cells are taken, which may need weights."""
        return bool(self.fine) or (self.coarse is not None and self.coarse.averages)


@dataclass(frozen=True)
class Planner:
    """Plans windows of a hierarchy.

    Attributes
    ----------
    hierarchy : Hierarchy
    periodic : which axes of the domain are.
    whole : plan every ghost cell and every covered cell, not only those that share a face with a leaf cell.
    """

    hierarchy: Hierarchy
    periodic: tuple[bool, bool, bool]
    whole: bool

    @cached_property
    def _index(self) -> BoxIndex:
        return box_index(self.hierarchy)

    @cached_property
    def _lo(self) -> Ints:
        return self.hierarchy.lo.astype(np.int64)

    @cached_property
    def _hi(self) -> Ints:
        return self.hierarchy.hi.astype(np.int64)

    def around(self, patch: int) -> Window:
        """Window of `patch` with one cell more on each side; in it, only the cells whose value is in want."""
        level, lo, hi = int(self.hierarchy.level[patch]), self._lo[patch], self._hi[patch]
        open_part = self._open_part(level, lo - 1, hi + 1)
        shown = open_part[1:-1, 1:-1, 1:-1] > 0.0 if open_part.size else np.ones(tuple(hi - lo), dtype=bool)
        need = np.zeros(tuple(hi - lo + 2), dtype=bool)
        if self.whole:
            need[...] = True
            need[1:-1, 1:-1, 1:-1] = ~shown
        else:
            beside_leaves(shown, need)
        for axis, (first, last) in enumerate(self.clip(level, lo - 1, hi + 1)):
            ahead = np.moveaxis(need, axis, 0)
            ahead[:first] = False
            ahead[last:] = False
        return self._window(level, lo - 1, need, open_part)

    def clip(self, level: int, lo: Ints, hi: Ints) -> list[tuple[int, int]]:
        """Range of the box [lo, hi) inside the domain, per axis; the whole of a periodic axis."""
        domain = self.hierarchy.domain[level]
        return [
            (0, int(b - a)) if wraps else (max(int(-a), 0), int(min(n, b) - a))
            for a, b, n, wraps in zip(lo, hi, domain, self.periodic, strict=True)
        ]

    def _images(self, level: int, lo: Ints, hi: Ints) -> list[Ints]:
        """Shifts by whole domains that bring some of the box [lo, hi) into the domain."""
        if not any(self.periodic):
            return [np.zeros(3, np.int64)]
        domain = self.hierarchy.domain[level].astype(np.int64)
        turns = [
            range(int(a // n), int((b - 1) // n) + 1) if wraps else range(1)
            for a, b, n, wraps in zip(lo, hi, domain, self.periodic, strict=True)
        ]
        return [domain * turn for turn in itertools.product(*turns)]

    def _window(self, level: int, lo: Ints, need: BoolArray, open_part: FloatArray) -> Window:
        """Plan the cells `need` of the box of `level` with its corner at `lo`."""
        hi = lo + need.shape
        images = self._images(level, lo, hi)
        siblings = [(s, self._index.overlapping(level, lo - s, hi - s)) for s in images]
        held = np.zeros(need.shape, dtype=bool)
        for shift, patches in siblings:
            mark_held(patches, lo - shift, self.hierarchy.lo, self.hierarchy.shape, held)
        if open_part.size:
            stored = need & held & (open_part > 0.0)
            missing = need & ~held & (open_part > 0.0)
            under = need & (open_part < 1.0) & ~stored
        else:
            stored, missing, under = need & held, need & ~held, np.zeros(need.shape, dtype=bool)
        return Window(
            level=level,
            lo=lo,
            ratio=self.hierarchy.ratio[level].astype(np.int64),
            stored=stored,
            missing=missing,
            under=under,
            open_part=open_part,
            own=self._own_parts(lo, stored, siblings),
            fine=self._fine_parts(level, lo, under, images) if open_part.size and under.any() else [],
            coarse=self._coarser(level, lo, missing) if level and missing.any() else None,
        )

    def _open_part(self, level: int, lo: Ints, hi: Ints) -> FloatArray:
        """Fraction of each cell of a box that no finer patch covers, periodic images included."""
        if level + 1 == self.hierarchy.levels:
            return ALL_OPEN
        result = ALL_OPEN
        for shift in self._images(level, lo, hi):
            part = open_fraction(self.hierarchy, level, lo - shift, hi - shift)
            if part is not None:
                # images never overlap: where one is covered, the others are open
                result = part if result.size == 0 else np.minimum(result, part)
        return result

    def _own_parts(self, lo: Ints, stored: BoolArray, siblings: list[tuple[Ints, Ints]]) -> list[Part]:
        parts = []
        one = np.ones(3, np.int64)
        for shift, patches in siblings:
            corner = lo - shift
            rows = own_boxes(patches, corner, self.hierarchy.lo, self.hierarchy.shape, stored, READ_COST)
            corner = corner - self._lo[rows[:, 0]]
            for row, low, high in zip(rows, rows[:, 1:4] + corner, rows[:, 4:] + corner, strict=True):
                parts.append(Part(int(row[0]), _box(low, high), row[1:4], one, ALL_OPEN))
        return parts

    def _fine_parts(self, level: int, lo: Ints, under: BoolArray, images: list[Ints]) -> list[Part]:
        """Parts of finer patches that lie in the cells `under`, in the order of the patches.

        A part holds all of a coarse cell that its patch has, so that the sums of a cell run in one order
        whatever the window.
        """
        parts = []
        hierarchy = self.hierarchy
        size = np.array(under.shape, dtype=np.int64)
        for shift in images:
            for patch in self._index.finer(level, lo - shift, lo - shift + size).tolist():
                finer = int(hierarchy.level[patch])
                ratio = hierarchy.scale[level] // hierarchy.scale[finer]
                corner = self._lo[patch] + (shift - lo) * ratio
                end = self._hi[patch] + (shift - lo) * ratio
                low, high = np.maximum(corner // ratio, 0), np.minimum(-(-end // ratio), size)
                for box in boxes_of(under, low, high, READ_COST // int(ratio.prod())):
                    first, last = np.maximum(box[:3] * ratio, corner), np.minimum(box[3:] * ratio, end)
                    back = self._lo[patch] - corner
                    leaf = open_fraction(hierarchy, finer, first + back, last + back)
                    if leaf is None or leaf.any():
                        place = _box(first - corner, last - corner)
                        parts.append(Part(patch, place, first, ratio, ALL_OPEN if leaf is None else leaf))
        return parts

    def _coarser(self, level: int, lo: Ints, missing: BoolArray) -> Window:
        ratio = self.hierarchy.ratio[level].astype(np.int64)
        filled = [np.flatnonzero(missing.any(axis=axes)) for axes in ((1, 2), (0, 2), (0, 1))]
        low = (lo + [int(f[0]) for f in filled]) // ratio - 1
        high = (lo + [int(f[-1]) for f in filled]) // ratio + 2
        inside = self.clip(level - 1, low, high)
        low, high = low + [a for a, _ in inside], low + [b for _, b in inside]
        need = np.zeros(tuple(high - low), dtype=bool)
        mark_parents(missing, lo, ratio, low, need)
        return self._window(level - 1, low, need, self._open_part(level - 1, low, high))


def _box(lo: Ints, hi: Ints) -> Box:
    a, b = lo.tolist(), hi.tolist()
    return (a[0], a[1], a[2]), (b[0], b[1], b[2])
