"""An open cube: tiles in and out of a zarr group whose chunks are the tiles.

One stored object a tile and array, all channels in it, never sharded: two workers that write different
parts of one object lose each other's tiles without an error.
"""

from __future__ import annotations

import asyncio
import contextlib
import os
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Self

import numcodecs.blosc  # type: ignore[import-untyped]
import numpy as np
import numpy.typing as npt
import zarr
from zarr.core.buffer import Buffer
from zarr.storage import LocalStore

from cubeforge.cube.durable import Staging
from cubeforge.cube.spec import CubeSpec
from cubeforge.errors import CubeError

INTENSITY = "intensity"
MAPS = "maps"
LEDGER = "ledger"

# Blosc's own threads make the encoded bytes differ from run to run; workers are parallel enough.
numcodecs.blosc.use_threads = False


class DurableStore(LocalStore):
    """zarr's local store, with writes that are durable on return and never seen half done."""

    def __init__(self, root: Path | str, *, read_only: bool = False, staging: Staging | None = None) -> None:
        super().__init__(root, read_only=read_only)
        self.staging = staging

    def with_read_only(self, read_only: bool = False) -> Self:
        """The same folder and run, for reading only or for both."""
        return type(self)(self.root, read_only=read_only, staging=self.staging)

    def set_sync(self, key: str, value: Buffer) -> None:
        """Write `value` under `key`; durable on return."""
        self._check_writable()
        if self.staging is None:
            raise CubeError(f"{self.root}: the cube was opened for reading, and {key} was to be written")
        self.staging.write(self.root / key, value.as_buffer_like())

    async def set(self, key: str, value: Buffer) -> None:
        """Write `value` under `key`; durable when awaited."""
        # A thread of its own keeps zarr's event loop free while the device flushes.
        await asyncio.to_thread(self.set_sync, key, value)

    async def set_if_not_exists(self, key: str, value: Buffer) -> None:
        """Write `value` unless `key` exists (metadata only, which one process writes)."""
        if not await self.exists(key):
            await self.set(key, value)


def tile_checksum(intensity: npt.NDArray[Any], maps: npt.NDArray[Any]) -> int:
    """CRC32 of the decoded intensity in the low half, of the decoded maps in the high half.

    Taken over the values as little-endian float32 and float64 in C order, so that it depends neither on
    the compression nor on the processor.
    """
    low = zlib.crc32(np.ascontiguousarray(intensity, dtype="<f4").data.cast("B"))
    high = zlib.crc32(np.ascontiguousarray(maps, dtype="<f8").data.cast("B")) if maps.size else 0
    return (high << 32) | low


@dataclass(frozen=True)
class Cube:
    """An open cube; safe to share between threads, small to pickle.

    Attributes
    ----------
    path : Path
    spec : CubeSpec
    intensity : zarr.Array, shape (channels, ny, nx), float32
        NaN where no tile was written.
    maps : zarr.Array, shape (maps, ny, nx), float64
        By-products in the order of `spec.maps`.
    """

    path: Path
    spec: CubeSpec
    intensity: zarr.Array[Any]
    maps: zarr.Array[Any] | None

    @property
    def ledger(self) -> Path:
        """Folder of the ledger."""
        return self.path / LEDGER

    def write_tile(self, tile: int, intensity: npt.NDArray[Any], maps: npt.NDArray[Any] | None = None) -> int:
        """Store one tile, durable on return, and give its checksum for the ledger.

        Parameters
        ----------
        tile : int
        intensity : ndarray, shape (channels, ty, tx), float32
            In the cube's unit; ty and tx are those of `spec.tile_shape(tile)`.
        maps : ndarray, shape (maps, ty, tx), float64
            Left out only when the cube has no maps.

        Raises
        ------
        CubeError
            Wrong shape or type, or another run has taken the cube over.
        EngineError
            The disk is full, or refuses; the tile is as it was before.
        """
        if maps is None:
            maps = np.empty((0, *self.spec.tile_shape(tile)))
        for name, array, count, dtype in (
            (INTENSITY, intensity, self.spec.shape[0], np.float32),
            (MAPS, maps, len(self.spec.maps), np.float64),
        ):
            wanted = (count, *self.spec.tile_shape(tile))
            if array.shape != wanted or array.dtype != dtype:
                raise CubeError(
                    f"{self.path}: {name} of tile {tile} is {array.dtype} {array.shape}; "
                    f"wanted {np.dtype(dtype)} {wanted}"
                )
        along_y, along_x = self.spec.tile_slices(tile)
        self.intensity[:, along_y, along_x] = intensity
        if self.maps is not None:
            self.maps[:, along_y, along_x] = maps
        return tile_checksum(intensity, maps)

    def read_tile(self, tile: int) -> tuple[npt.NDArray[np.float32], npt.NDArray[np.float64]]:
        """Intensity (channels, ty, tx) and maps (maps, ty, tx) of one tile; NaN when it was never written.

        Reads the tile's own objects and no others. CubeError, naming the file, when one is damaged.
        """
        maps = self._read(MAPS, tile) if self.maps is not None else np.empty((0, *self.spec.tile_shape(tile)))
        return self._read(INTENSITY, tile), maps

    def read_intensity(self, tile: int) -> npt.NDArray[np.float32]:
        """Intensity of one tile, shape (channels, ty, tx); see `read_tile`."""
        return self._read(INTENSITY, tile)

    def read_maps(self, tile: int) -> npt.NDArray[np.float64]:
        """Maps of one tile, shape (maps, ty, tx); see `read_tile`."""
        return self._read(MAPS, tile)

    def _read(self, name: str, tile: int) -> npt.NDArray[Any]:
        array = self.intensity if name == INTENSITY else self.maps
        if array is None:
            raise CubeError(f"{self.path}: this cube has no maps")
        along_y, along_x = self.spec.tile_slices(tile)
        try:
            return np.asarray(array[:, along_y, along_x])
        except (RuntimeError, ValueError, OSError) as error:
            raise CubeError(
                f"{self.object_path(name, tile)}: tile {tile} cannot be decoded ({error}); "
                "delete this file and resume: the tile is rendered again"
            ) from error

    def object_path(self, name: str, tile: int) -> Path:
        """File that holds `tile` of the array "intensity" or "maps"."""
        row, column = self.spec.tile_position(tile)
        return self.path / name / "c" / "0" / str(row) / str(column)

    def stored(self, tile: int) -> bool:
        """Whether all objects of `tile` exist."""
        names = (INTENSITY, MAPS) if self.maps is not None else (INTENSITY,)
        return all(self.object_path(name, tile).is_file() for name in names)

    def stored_tiles(self) -> npt.NDArray[np.bool_]:
        """Which tiles have all their objects, shape (tiles,); lists each folder of chunks once."""
        rows, columns = self.spec.tile_grid
        names = (INTENSITY, MAPS) if self.maps is not None else (INTENSITY,)
        found = np.ones((rows, columns), dtype=bool)
        for name in names:
            for row in range(rows):
                here = np.zeros(columns, dtype=bool)
                with contextlib.suppress(FileNotFoundError):
                    listed = os.listdir(self.path / name / "c" / "0" / str(row))
                    here[[int(each) for each in listed if each.isdigit() and int(each) < columns]] = True
                found[row] &= here
        return found.ravel()

    def check_plan(self, spec: CubeSpec) -> None:
        """Refuse to go on with a cube that was begun with another plan.

        Raises
        ------
        CubeError
            Naming each part of the fingerprint that differs, as it is in the cube and in `spec`.
        """
        differences = list(_differences(self.spec, spec))
        if differences:
            raise CubeError(
                f"{self.path}: this cube was begun with another plan:\n  "
                + "\n  ".join(differences)
                + "\nResume with the job it was begun with, or choose another path for the new cube"
            )


def _differences(old: CubeSpec, new: CubeSpec) -> Iterator[str]:
    if old.fingerprint != new.fingerprint:
        parts = sorted(old.fingerprint_parts.keys() | new.fingerprint_parts.keys())
        before, after = old.fingerprint_parts, new.fingerprint_parts
        changed = [part for part in parts if before.get(part) != after.get(part)]
        for part in changed:
            yield f"{part}: the cube has {before.get(part, 'nothing')}, now {after.get(part, 'nothing')}"
        if not changed:
            yield f"fingerprint: the cube has {old.fingerprint}, now {new.fingerprint}"
        return
    for name in ("shape", "tile", "unit", "absolute", "maps"):
        if getattr(old, name) != getattr(new, name):
            yield f"{name}: the cube has {getattr(old, name)}, now {getattr(new, name)}"
