"""From the parsed text files of an AMReX plotfile to a hierarchy and the places of its boxes on disk."""

from __future__ import annotations

import posixpath
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.mesh.hierarchy import Hierarchy, build_hierarchy, cut_boxes
from cubeforge.snapshots.amrex_fab import RealFormat
from cubeforge.snapshots.amrex_header import PlotHeader
from cubeforge.snapshots.amrex_level import LevelHeader


@dataclass(frozen=True)
class SharedLevel:
    """What all boxes of a level share; `corner` is the first cell of the domain in the file's index space."""

    version: int
    ghost: tuple[int, int, int]
    real: RealFormat | None
    corner: tuple[int, int, int]


@dataclass(frozen=True)
class StoredBoxes:
    """Flat arrays over the stored boxes of all levels (28 bytes a box).

    Attributes
    ----------
    first : ndarray, shape (boxes,), int32
        The first patch cut from each box; it has the box's own low corner.
    shape : ndarray, shape (boxes, 3), int32
        Valid cells.
    file : ndarray, shape (boxes,), int32
        Index into the snapshot's data files.
    offset : ndarray, shape (boxes,), int64
        First byte of the record.
    """

    first: npt.NDArray[np.int32]
    shape: npt.NDArray[np.int32]
    file: npt.NDArray[np.int32]
    offset: npt.NDArray[np.int64]


def triple(values: Any) -> tuple[int, int, int]:
    """Three plain ints."""
    x, y, z = values
    return int(x), int(y), int(z)


def assemble(
    header: PlotHeader, parts: Sequence[LevelHeader]
) -> tuple[Hierarchy, StoredBoxes, tuple[str, ...]]:
    """Hierarchy, places of the stored boxes, and data files relative to the plotfile.

    Raises
    ------
    SnapshotError
        Boxes outside the domain.
    """
    boxes, first, shapes = [], [], []
    patches = 0
    for part, corner in zip(parts, header.domain_lo, strict=True):
        shape = part.hi - part.lo + 1
        cut_lo, cut_shape, parent = cut_boxes(part.lo - corner, shape)
        boxes.append((cut_lo, cut_shape))
        first.append(patches + np.flatnonzero(np.diff(parent, prepend=-1)))
        shapes.append(shape)
        patches += len(parent)
    cells = header.domain_hi[0] - header.domain_lo[0] + 1
    # Header's own cell sizes are rounded more coarsely than the domain's corners need to be.
    cell_size = (header.high - header.low) / cells
    hierarchy = build_hierarchy(
        header.low.tolist(), cell_size.tolist(), cells.tolist(), header.ratio[1:].tolist(), boxes
    )
    names, file = _number_files(header, parts)
    stored = StoredBoxes(
        first=np.concatenate(first).astype(np.int32),
        shape=np.concatenate(shapes).astype(np.int32),
        file=file,
        offset=np.concatenate([part.offset for part in parts]),
    )
    return hierarchy, stored, names


def _number_files(
    header: PlotHeader, parts: Sequence[LevelHeader]
) -> tuple[tuple[str, ...], npt.NDArray[np.int32]]:
    names: list[str] = []
    numbers = []
    for path, part in zip(header.paths, parts, strict=True):
        numbers.append(part.file + np.int32(len(names)))
        names += [posixpath.join(posixpath.dirname(path), name) for name in part.files]
    return tuple(names), np.concatenate(numbers)
