"""The hierarchy: levels, patches, cell sizes and refinement ratios of a snapshot, without any field data.

Positions are integers. The low corner of the domain is index 0 on every level, and edges of patches on
different levels are compared in *finest units*: multiples of the finest cell, exact in int64 and float64.
Physical positions follow from `origin` and `cell_size`, never from rounded edges in a file.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError

IntArray = npt.NDArray[np.int32]
FloatArray = npt.NDArray[np.float64]

PATCH_LIMIT = 64
"""Longest side of a patch in cells; larger stored blocks are cut virtually."""


@dataclass(frozen=True)
class Hierarchy:
    """Metadata of a snapshot in flat arrays, patches sorted by level (28 bytes a patch).

    Attributes
    ----------
    origin : ndarray, shape (3,), float64
        Physical position of the domain's low corner, in the snapshot's length unit.
    cell_size : ndarray, shape (levels, 3), float64
        Cell size of each level, in the snapshot's length unit.
    ratio : ndarray, shape (levels, 3), int32
        Refinement ratio to the next coarser level; ``ratio[0]`` is 1.
    domain : ndarray, shape (levels, 3), int32
        Cells of the whole domain in each level's index space.
    level : ndarray, shape (patches,), int32
        Level of each patch, ascending.
    lo, shape : ndarray, shape (patches, 3), int32
        First cell of each patch in its level's index space (domain corner = 0), and its cells per axis.
    """

    origin: FloatArray
    cell_size: FloatArray
    ratio: IntArray
    domain: IntArray
    level: IntArray
    lo: IntArray
    shape: IntArray

    @property
    def levels(self) -> int:
        """Number of levels."""
        return len(self.ratio)

    @property
    def patches(self) -> int:
        """Number of patches on all levels."""
        return len(self.level)

    @cached_property
    def first(self) -> npt.NDArray[np.int64]:
        """Patches of level L are ``range(first[L], first[L + 1])``; shape (levels + 1,)."""
        return np.searchsorted(self.level, np.arange(self.levels + 1)).astype(np.int64)

    @cached_property
    def scale(self) -> npt.NDArray[np.int64]:
        """Finest units a cell of each level is wide, per axis; shape (levels, 3); 1 on the finest level."""
        ratio = self.ratio.astype(np.int64)
        return np.array([ratio[level + 1 :].prod(axis=0) for level in range(self.levels)], dtype=np.int64)

    @property
    def hi(self) -> IntArray:
        """One past the last cell of each patch in its level's index space; shape (patches, 3)."""
        return self.lo + self.shape

    def edges(self, patches: Any = slice(None)) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
        """Low and high corners of `patches` in finest units, each of shape (n, 3), int64."""
        scale = self.scale[self.level[patches]]
        lo = self.lo[patches].astype(np.int64)
        return lo * scale, (lo + self.shape[patches]) * scale

    @property
    def extent(self) -> FloatArray:
        """Physical size of the domain, shape (3,), in the snapshot's length unit."""
        return np.asarray(self.domain[0] * self.cell_size[0])

    @property
    def centre(self) -> FloatArray:
        """Physical centre of the domain, shape (3,), in the snapshot's length unit."""
        return np.asarray(self.origin + 0.5 * self.extent)

    @property
    def finest_cell(self) -> FloatArray:
        """Size of one finest unit, shape (3,), in the snapshot's length unit."""
        return np.asarray(self.cell_size[-1])

    def cells(self, patches: Any = slice(None)) -> npt.NDArray[np.int64]:
        """Stored cells of each of `patches`, shape (n,)."""
        return np.asarray(self.shape[patches].astype(np.int64).prod(axis=-1))

    def validate(self) -> None:
        """Refuse a hierarchy that contradicts itself.

        Raises
        ------
        SnapshotError
            Wrong array shapes, non-positive sizes, patches outside their level's domain or out of order.
        """
        arrays = {"lo": (self.lo, (self.patches, 3)), "shape": (self.shape, (self.patches, 3))}
        for name in ("ratio", "domain", "cell_size"):
            arrays[name] = (getattr(self, name), (self.levels, 3))
        for name, (array, wanted) in arrays.items():
            if array.shape != wanted:
                raise SnapshotError(f"hierarchy: {name} has shape {array.shape}, wanted {wanted}")
        if not (np.all(self.cell_size > 0) and np.all(np.isfinite(self.cell_size))):
            raise SnapshotError("hierarchy: a cell size is not a positive number")
        if self.patches == 0 or np.any(np.diff(self.level) < 0) or self.level[0] != 0:
            raise SnapshotError("hierarchy: patches must start at level 0 and ascend in level")
        outside = np.any((self.lo < 0) | (self.shape < 1) | (self.hi > self.domain[self.level]), axis=1)
        if outside.any():
            patch = int(np.argmax(outside))
            raise SnapshotError(
                f"hierarchy: {int(outside.sum())} patches reach outside their level's domain; the first is "
                f"patch {patch} of level {self.level[patch]}: cells {self.lo[patch].tolist()} to "
                f"{(self.hi[patch] - 1).tolist()} of {self.domain[self.level[patch]].tolist()}"
            )


def build_hierarchy(
    origin: Sequence[float],
    cell_size: Sequence[float],
    domain: Sequence[int],
    ratios: Sequence[Sequence[int]],
    boxes: Sequence[tuple[Any, Any]],
) -> Hierarchy:
    """Assemble a validated `Hierarchy` from plain numbers.

    Parameters
    ----------
    origin, cell_size : sequence of 3 floats
        Low corner of the domain and cell size of level 0.
    domain : sequence of 3 ints
        Cells of level 0.
    ratios : sequence, one entry for each level above 0
        Refinement ratio per axis of level 1 to level 0, level 2 to level 1, ...
    boxes : sequence, one entry for each level
        ``(lo, shape)``, each of shape (n, 3), in that level's index space.
    """
    ratio = np.array([[1, 1, 1], *[np.broadcast_to(r, 3) for r in ratios]], dtype=np.int32)
    refine = np.cumprod(ratio.astype(np.int64), axis=0)
    level = np.repeat(np.arange(len(boxes), dtype=np.int32), [len(lo) for lo, _ in boxes])
    hierarchy = Hierarchy(
        origin=np.asarray(origin, dtype=np.float64),
        cell_size=np.asarray(cell_size, dtype=np.float64) / refine,
        ratio=ratio,
        domain=(np.asarray(domain, dtype=np.int64) * refine).astype(np.int32),
        level=level,
        lo=np.concatenate([np.reshape(lo, (-1, 3)) for lo, _ in boxes]).astype(np.int32),
        shape=np.concatenate([np.reshape(shape, (-1, 3)) for _, shape in boxes]).astype(np.int32),
    )
    hierarchy.validate()
    return hierarchy


def cut_boxes(lo: Any, shape: Any, limit: int = PATCH_LIMIT) -> tuple[IntArray, IntArray, IntArray]:
    """Cut boxes longer than `limit` cells into nearly equal parts along each axis.

    Parameters
    ----------
    lo, shape : array_like, shape (n, 3)
        Boxes in one level's index space.

    Returns
    -------
    lo, shape : ndarray, shape (m, 3), int32
        The parts, in the order of the boxes they come from.
    parent : ndarray, shape (m,), int32
        The box each part was cut from.
    """
    lo = np.asarray(lo, dtype=np.int32).reshape(-1, 3)
    shape = np.asarray(shape, dtype=np.int32).reshape(-1, 3)
    if np.all(shape <= limit):
        return lo, shape, np.arange(len(lo), dtype=np.int32)
    part_lo, part_shape, parent = [], [], []
    for index, (corner, size) in enumerate(zip(lo, shape, strict=True)):
        cuts = [np.linspace(0, n, -(-int(n) // limit) + 1).astype(np.int32) for n in size]
        grid = np.stack(np.meshgrid(*[c[:-1] for c in cuts], indexing="ij"), axis=-1).reshape(-1, 3)
        ends = np.stack(np.meshgrid(*[c[1:] for c in cuts], indexing="ij"), axis=-1).reshape(-1, 3)
        part_lo.append(corner + grid)
        part_shape.append(ends - grid)
        parent.append(np.full(len(grid), index, dtype=np.int32))
    return np.concatenate(part_lo), np.concatenate(part_shape), np.concatenate(parent)
