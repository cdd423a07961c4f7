"""Snapshots in memory made from plain uniform arrays, cut into patches in any way."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from cubeforge.mesh.hierarchy import build_hierarchy, cut_boxes
from cubeforge.snapshots.memory import MemorySnapshot

Fields = Mapping[str, np.ndarray]


def grid_snapshot(
    fields: Fields, cell: Sequence[float], origin: Sequence[float] = (0.0, 0.0, 0.0), patch: int = 64
) -> MemorySnapshot:
    """One level of cells of size `cell` (pc), cut into patches of at most `patch` cells a side."""
    shape = next(iter(fields.values())).shape
    lo, size, _ = cut_boxes([(0, 0, 0)], [shape], patch)
    hierarchy = build_hierarchy(origin, cell, shape, [], [(lo, size)])
    return MemorySnapshot(hierarchy, [_part(fields, a, n) for a, n in zip(lo, size, strict=True)])


def boxes_snapshot(
    levels: Sequence[Fields],
    boxes: Sequence[Sequence[tuple[Sequence[int], Sequence[int]]]],
    cell: Sequence[float],
    origin: Sequence[float] = (0.0, 0.0, 0.0),
    ratio: Sequence[Sequence[int]] = (),
) -> MemorySnapshot:
    """Several levels: `levels` hold each level's fields on its whole domain, `boxes` the (lo, shape) kept."""
    domain = next(iter(levels[0].values())).shape
    corners = [(np.array([b[0] for b in level]), np.array([b[1] for b in level])) for level in boxes]
    hierarchy = build_hierarchy(origin, cell, domain, ratio, corners)
    data = [
        _part(levels[level], lo, hi - lo)
        for level, lo, hi in zip(hierarchy.level, hierarchy.lo, hierarchy.hi, strict=True)
    ]
    return MemorySnapshot(hierarchy, data)


def _part(fields: Fields, lo: np.ndarray, shape: np.ndarray) -> dict[str, np.ndarray]:
    where = tuple(slice(int(a), int(a + n)) for a, n in zip(lo, shape, strict=True))
    return {name: np.ascontiguousarray(values[where]) for name, values in fields.items()}


def doubled(values: np.ndarray) -> np.ndarray:
    """Every cell copied 2 x 2 x 2."""
    return values.repeat(2, axis=0).repeat(2, axis=1).repeat(2, axis=2)
