"""What there is to know about a snapshot from its metadata, in plain numbers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from cubeforge.mesh.leaves import leaf_counts
from cubeforge.snapshots.base import Snapshot


@dataclass(frozen=True)
class LevelSummary:
    """One level: patches, stored and leaf cells, cell size, and the share of the domain its patches fill."""

    level: int
    patches: int
    cells: int
    leaf_cells: int
    cell_size: tuple[float, float, float]
    filled: float


@dataclass(frozen=True)
class FieldSummary:
    """One field: its unit as the format states it, and its stored bounds (covered cells included)."""

    name: str
    unit: str | None
    minimum: float | None
    maximum: float | None


@dataclass(frozen=True)
class SnapshotSummary:
    """A snapshot; lengths and times in its own units."""

    path: str
    format_name: str
    identity: str
    time: float
    origin: tuple[float, float, float]
    extent: tuple[float, float, float]
    levels: tuple[LevelSummary, ...]
    fields: tuple[FieldSummary, ...]
    bytes: int


def _triple(values: Any) -> tuple[float, float, float]:
    x, y, z = (float(v) for v in values)
    return x, y, z


def describe(snapshot: Snapshot) -> SnapshotSummary:
    """Summarise a snapshot; reads no field data."""
    mesh = snapshot.hierarchy
    leaves = leaf_counts(mesh)
    levels = []
    for level in range(mesh.levels):
        patches = slice(int(mesh.first[level]), int(mesh.first[level + 1]))
        cells = int(mesh.cells(patches).sum())
        levels.append(
            LevelSummary(
                level=level,
                patches=patches.stop - patches.start,
                cells=cells,
                leaf_cells=int(leaves[patches].sum()),
                cell_size=_triple(mesh.cell_size[level]),
                filled=cells / float(np.prod(mesh.domain[level].astype(np.float64))),
            )
        )
    fields = []
    for name in snapshot.fields:
        bounds = snapshot.bounds(name)
        fields.append(
            FieldSummary(
                name=name,
                unit=snapshot.units.get(name),
                minimum=None if bounds is None else float(np.min(bounds)),
                maximum=None if bounds is None else float(np.max(bounds)),
            )
        )
    everything = np.arange(mesh.patches, dtype=np.int64)
    return SnapshotSummary(
        path=snapshot.path,
        format_name=snapshot.format_name,
        identity=snapshot.identity,
        time=float(snapshot.time),
        origin=_triple(mesh.origin),
        extent=_triple(mesh.extent),
        levels=tuple(levels),
        fields=tuple(fields),
        bytes=int(snapshot.read_bytes(everything, snapshot.fields).sum()),
    )
