"""What a snapshot reader gives to the rest of cubeforge, whatever the format on disk."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt

from cubeforge.mesh.hierarchy import Hierarchy

Box = tuple[tuple[int, int, int], tuple[int, int, int]]
"""A part of a patch: first cell and one past the last, counted from the patch's own corner."""


@runtime_checkable
class Snapshot(Protocol):
    """One AMR output on disk. Opening it reads metadata only; `read` is safe from several threads."""

    @property
    def path(self) -> str:
        """Where it lies."""
        ...

    @property
    def format_name(self) -> str:
        """Name of the file layout, for people."""
        ...

    @property
    def hierarchy(self) -> Hierarchy:
        """Levels and patches; patch ids of `read` count through its flat arrays."""
        ...

    @property
    def fields(self) -> tuple[str, ...]:
        """Stored cell fields."""
        ...

    @property
    def units(self) -> Mapping[str, str]:
        """Units that the format itself states: a field's name, or "length", "time" -> unit. May be empty."""
        ...

    @property
    def time(self) -> float:
        """Simulation time in the snapshot's own unit."""
        ...

    @property
    def identity(self) -> str:
        """Hash of the metadata and of the data files' sizes; modification times don't enter."""
        ...

    def bounds(self, field: str) -> npt.NDArray[np.float64] | None:
        """Stored minimum and maximum of `field` per level, shape (levels, 2); None where not stored.

        Bounds, not extrema of leaf cells: covered coarse cells count too.
        """
        ...

    def read_bytes(self, patches: npt.NDArray[np.int64], fields: Sequence[str]) -> npt.NDArray[np.int64]:
        """Bytes that `read` takes from disk for each of `patches`, shape (n,)."""
        ...

    def check_files(self) -> None:
        """Raise SnapshotError, naming the file, when a data file is missing or too short."""
        ...

    def read(
        self, patch: int, fields: Sequence[str], box: Box | None = None
    ) -> dict[str, npt.NDArray[np.floating]]:
        """Cells of one patch, or of the part `box`: field -> array (nx, ny, nz) in native byte order.

        Raises SnapshotError for an unknown field (with those there are) or a damaged file.
        """
        ...
