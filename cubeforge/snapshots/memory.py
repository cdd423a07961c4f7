"""A snapshot of plain arrays: for library users who hold their data already, and for tests."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.snapshots.base import Box
from cubeforge.snapshots.request import check_box, check_fields, check_patch

PatchData = Mapping[str, npt.ArrayLike]
"""The cells of one patch: field -> array (nx, ny, nz)."""


class MemorySnapshot:
    """Arrays in memory, behind the same face as a snapshot on disk.

    Parameters
    ----------
    hierarchy : Hierarchy
        Levels and patches.
    data : sequence, one entry for each patch
        Field -> array (nx, ny, nz) of real numbers; the same fields in every patch. float32 and float64
        are kept by reference (don't change them afterwards), other numbers become float64.
    units : mapping, optional
        Field's name, or "length", "time" -> unit.
    time : float
        Simulation time.
    name : str
        Stands where a snapshot on disk has its path.

    Raises
    ------
    SnapshotError
        Patches, fields or shapes that don't fit the hierarchy; numbers that float64 cannot hold.
    """

    format_name = "arrays in memory"

    def __init__(
        self,
        hierarchy: Hierarchy,
        data: Sequence[PatchData],
        units: Mapping[str, str] | None = None,
        time: float = 0.0,
        name: str = "memory",
    ) -> None:
        if len(data) != hierarchy.patches:
            raise SnapshotError(f"{name}: data of {len(data)} patches for a hierarchy of {hierarchy.patches}")
        self.path = name
        self.hierarchy = hierarchy
        self.fields: tuple[str, ...] = tuple(data[0])
        self.units: Mapping[str, str] = dict(units or {})
        self.time = float(time)
        self._data = [self._checked(patch, data[patch]) for patch in range(hierarchy.patches)]

    def _checked(self, patch: int, cells: PatchData) -> dict[str, npt.NDArray[np.floating]]:
        where = f"{self.path}: patch {patch}"
        if set(cells) != set(self.fields):
            raise SnapshotError(
                f"{where} has the fields {sorted(cells)}, where patch 0 has {sorted(self.fields)}"
            )
        shape = tuple(int(n) for n in self.hierarchy.shape[patch])
        return {field: _real(cells[field], shape, f'{where}, field "{field}"') for field in self.fields}

    @cached_property
    def identity(self) -> str:
        """SHA-256 over the hierarchy, the fields and every number."""
        digest = hashlib.sha256(repr((self.fields, sorted(self.units.items()), self.time)).encode())
        mesh = self.hierarchy
        for array in (mesh.origin, mesh.cell_size, mesh.ratio, mesh.domain, mesh.level, mesh.lo, mesh.shape):
            _feed(digest, array)
        for cells in self._data:
            for field in self.fields:
                _feed(digest, cells[field])
        return digest.hexdigest()

    def bounds(self, field: str) -> npt.NDArray[np.float64]:
        """Minimum and maximum of `field` per level, covered cells included; shape (levels, 2)."""
        check_fields([field], self.fields, self.path)
        out = np.empty((self.hierarchy.levels, 2))
        for level in range(self.hierarchy.levels):
            first, last = self.hierarchy.first[level : level + 2]
            arrays = [cells[field] for cells in self._data[first:last]]
            out[level] = min(a.min() for a in arrays), max(a.max() for a in arrays)
        return out

    def read_bytes(self, patches: npt.NDArray[np.int64], fields: Sequence[str]) -> npt.NDArray[np.int64]:
        """Bytes that `read` copies for each of `patches` (none comes from a disk), shape (n,)."""
        check_fields(fields, self.fields, self.path)
        counts = [sum(self._data[int(patch)][field].nbytes for field in fields) for patch in patches]
        return np.array(counts, dtype=np.int64)

    def check_files(self) -> None:
        """Nothing to check: there are no files."""

    def read(
        self, patch: int, fields: Sequence[str], box: Box | None = None
    ) -> dict[str, npt.NDArray[np.floating]]:
        """Cells of a patch, or of its part `box`: field -> fresh array (nx, ny, nz), x fastest in memory."""
        index = check_patch(patch, self.hierarchy.patches, self.path)
        check_fields(fields, self.fields, self.path)
        lo, hi = check_box(box, self.hierarchy.shape[index], f"{self.path}, patch {index}")
        part = tuple(slice(a, b) for a, b in zip(lo, hi, strict=True))
        return {field: self._data[index][field][part].copy(order="F") for field in fields}


def _real(values: npt.ArrayLike, shape: tuple[int, ...], where: str) -> npt.NDArray[np.floating]:
    array = np.asarray(values)
    if array.shape != shape:
        raise SnapshotError(f"{where} has shape {array.shape}, wanted {shape}")
    if not np.can_cast(array.dtype, np.float64, "safe"):
        raise SnapshotError(f"{where} holds {array.dtype}, wanted real numbers of at most 64 bits")
    native = np.float32 if array.dtype.newbyteorder("=") == np.float32 else np.float64
    return array.astype(native, copy=False)


def _feed(digest: Any, array: npt.NDArray[Any]) -> None:
    # The layout in memory must not enter: always C order, little-endian.
    digest.update(repr((array.shape, array.dtype.kind, array.dtype.itemsize)).encode())
    digest.update(np.ascontiguousarray(array, dtype=array.dtype.newbyteorder("<")).tobytes())
