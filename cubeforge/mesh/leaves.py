"""Leaf cells: which cells of a patch the finest-wins rule shows, and integrals over them.

A cell is a leaf when some of its volume is covered by no patch of any finer level. A finer patch that is not
aligned with a coarse cell covers it in part: such a cell stays a leaf, and integrals take the part that is
left open, as a ray would.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError
from cubeforge.mesh.cover_kernels import COVERED, count_leaves, mark_covered, open_parts
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.mesh.overlap import box_index
from cubeforge.mesh.reading import Read

BoolArray = npt.NDArray[np.bool_]
FloatArray = npt.NDArray[np.float64]


def _cover(
    hierarchy: Hierarchy, level: int, lo: npt.ArrayLike, hi: npt.ArrayLike
) -> tuple[npt.NDArray[np.uint8] | None, FloatArray | None]:
    """States of the cells of a box (None: all open), and open fractions (None: each 0 or 1)."""
    finer = box_index(hierarchy).finer(level, lo, hi)
    if len(finer) == 0:
        return None, None
    low = np.asarray(lo, dtype=np.int64)
    state = np.zeros(tuple(np.asarray(hi) - low), dtype=np.uint8)
    where = (
        finer,
        hierarchy.level,
        hierarchy.lo,
        hierarchy.shape,
        hierarchy.scale,
        low,
        hierarchy.scale[level],
    )
    if not mark_covered(*where, state):
        return state, None
    fraction = np.empty(state.shape)
    open_parts(*where, state, fraction)
    return state, fraction


def leaf_mask(hierarchy: Hierarchy, patch: int) -> BoolArray:
    """Leaf cells of `patch`, shape (nx, ny, nz): True where finer patches don't cover the whole cell."""
    level, lo, hi = (
        int(hierarchy.level[patch]),
        hierarchy.lo[patch],
        hierarchy.lo[patch] + hierarchy.shape[patch],
    )
    state, _ = _cover(hierarchy, level, lo, hi)
    if state is None:
        return np.ones(tuple(hierarchy.shape[patch]), dtype=bool)
    mask: BoolArray = state != COVERED
    return mask


def open_fraction(
    hierarchy: Hierarchy, level: int, lo: npt.ArrayLike, hi: npt.ArrayLike
) -> FloatArray | None:
    """Fraction of each cell of the box [lo, hi) of `level` that no patch of a finer level covers.

    Shape ``hi - lo``; None when no finer patch meets the box (all 1). Exact to rounding, and exactly 0 where
    finer patches cover the whole cell.
    """
    state, fraction = _cover(hierarchy, level, lo, hi)
    if state is not None and fraction is None:
        fraction = (state != COVERED).astype(np.float64)
    return fraction


def leaf_counts(hierarchy: Hierarchy) -> npt.NDArray[np.int64]:
    """Leaf cells of every patch, shape (patches,); a patch with none need never be read."""
    counts = np.empty(hierarchy.patches, dtype=np.int64)
    count_leaves(hierarchy.level, box_index(hierarchy).tables, counts)
    return counts


def leaf_cells(hierarchy: Hierarchy) -> int:
    """Leaf cells of the whole hierarchy."""
    return int(leaf_counts(hierarchy).sum())


def total(hierarchy: Hierarchy, read: Read, field: str) -> float:
    """Integral of `field` over the leaf cells: the sum of value x open volume.

    In the field's unit times the cube of the snapshot's length unit. Values of covered cells don't enter.
    """
    sums = []
    for patch in range(hierarchy.patches):
        level, lo = int(hierarchy.level[patch]), hierarchy.lo[patch]
        volume = float(hierarchy.cell_size[level].prod())
        fraction = open_fraction(hierarchy, level, lo, lo + hierarchy.shape[patch])
        if fraction is not None and not fraction.any():
            continue
        values = np.asarray(read(patch, (field,))[field], dtype=np.float64)
        if fraction is not None:
            shown = fraction > 0
            values = values[shown] * fraction[shown]
        sums.append(float(values.sum()) * volume)
    return math.fsum(sums)


def check_disjoint(hierarchy: Hierarchy) -> None:
    """Refuse patches of one level that overlap each other: which of them holds would be anybody's guess.

    Raises
    ------
    SnapshotError
        Names the first pair and the cells that they share.
    """
    index, high = box_index(hierarchy), hierarchy.hi
    for patch in range(hierarchy.patches):
        level, lo, hi = int(hierarchy.level[patch]), hierarchy.lo[patch], high[patch]
        others = index.overlapping(level, lo, hi)
        if len(others) > 1:
            other = int(others[others != patch][0])
            first = np.maximum(lo, hierarchy.lo[other]).tolist()
            last = (np.minimum(hi, high[other]) - 1).tolist()
            raise SnapshotError(
                f"hierarchy: patches {patch} and {other} of level {level} both hold the cells {first} to "
                f"{last}; wanted patches of one level that don't overlap"
            )
