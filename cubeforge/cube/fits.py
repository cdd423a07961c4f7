"""Cubes and maps to FITS files, streamed: a row of tiles at a time, checksums on the way.

The file is made at its full size beside its final name, filled by positioned writes, flushed and renamed.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from astropy.io import fits

from cubeforge.cube import checksums
from cubeforge.cube.durable import disk_errors, make_folders, replacing, sweep_beside, write_all
from cubeforge.cube.ledger import LedgerState, read_ledger
from cubeforge.cube.tiles import INTENSITY, MAPS, Cube, tile_checksum
from cubeforge.cube.wcs import header, map_header
from cubeforge.errors import CubeError

BUFFER_LIMIT = 512 * 2**20
"""Bytes of the buffer that a row of tiles is gathered in; above, the row is done by groups of channels."""

THREADS = 4
"""Tiles that are decoded at the same time."""

_BLOCK = 2880
_LOW = 0xFFFFFFFF

Progress = Callable[[int, int], None]
"""Called with the tiles that are written and their total."""


@dataclass(frozen=True)
class _Image:
    """One HDU to be written: its keywords, its array, and how to get a tile of it, (planes, ty, tx)."""

    header: Any
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    read: Callable[[int], npt.NDArray[Any]]

    @property
    def planes(self) -> int:
        return self.shape[0] if len(self.shape) == 3 else 1

    @property
    def data_size(self) -> int:
        """Bytes of the data, whole blocks."""
        return -(-math.prod(self.shape) * self.dtype.itemsize // _BLOCK) * _BLOCK


@dataclass
class _Work:
    """What the images of one file share."""

    cube: Cube
    done: npt.NDArray[np.bool_]
    limit: int
    progress: Callable[[], None]
    threads: ThreadPoolExecutor


def export_fits(
    cube: Cube,
    path: Path | str,
    *,
    maps: bool = False,
    overwrite: bool = False,
    partial: bool = False,
    progress: Progress | None = None,
    buffer_limit: int = BUFFER_LIMIT,
) -> None:
    """Write the cube as a FITS file: float32, axes RA, Dec, velocity.

    Every tile is compared with its checksum in the ledger on the way. Memory: a row of tiles, at most
    `buffer_limit`, and `THREADS` tiles.

    Parameters
    ----------
    cube : Cube
    path : path
    maps : bool
        Append the cube's maps as image extensions, named after them.
    overwrite : bool
        Whether to replace a file at `path`; the old one stays until the new one is complete.
    partial : bool
        Whether to export an unfinished cube, with NaN where tiles are missing.
    progress : callable, optional
        Called as ``progress(tiles written, tiles in all)``.
    buffer_limit : int
        Bytes.

    Raises
    ------
    CubeError
        The cube is unfinished or damaged, or `path` exists.
    EngineError
        The disk is full, or refuses; `path` is as before.
    """
    images = [_Image(header(cube.spec), cube.spec.shape, np.dtype("f4"), _checked(cube, INTENSITY))]
    if maps:
        images += [_map_image(cube, name) for name, _ in cube.spec.maps]
    _export(cube, path, images, overwrite, partial, progress, buffer_limit)


def export_map(
    cube: Cube, name: str, path: Path | str, *, overwrite: bool = False, partial: bool = False
) -> None:
    """Write the map `name` of the cube as a 2-D FITS image, float64; otherwise as `export_fits`."""
    _export(cube, path, [_map_image(cube, name)], overwrite, partial, None, BUFFER_LIMIT)


def _map_image(cube: Cube, name: str) -> _Image:
    keywords = map_header(cube.spec, name)
    index = [known for known, _ in cube.spec.maps].index(name)
    read = _checked(cube, MAPS)
    return _Image(keywords, cube.spec.shape[1:], np.dtype("f8"), lambda tile: read(tile)[index : index + 1])


def _checked(cube: Cube, array: str) -> Callable[[int], npt.NDArray[Any]]:
    """Reader of a tile of `array` that compares it with its half of the checksum in the ledger."""
    state = read_ledger(cube.ledger)
    ids, recorded = state.tiles, state.records["checksum"]
    nothing = np.empty(0)

    def read(tile: int) -> npt.NDArray[Any]:
        wanted = int(recorded[np.searchsorted(ids, tile)])
        if array == INTENSITY:
            values: npt.NDArray[Any] = cube.read_intensity(tile)
            found, wanted = tile_checksum(values, nothing) & _LOW, wanted & _LOW
        else:
            values = cube.read_maps(tile)
            found, wanted = tile_checksum(nothing, values) >> 32, wanted >> 32
        if found != wanted:
            raise CubeError(
                f"{cube.object_path(array, tile)}: tile {tile} has the checksum {found:08x}, "
                f"recorded as {wanted:08x}; delete this file and resume: the tile is rendered again"
            )
        return values

    return read


def finished_tiles(cube: Cube, state: LedgerState | None = None) -> npt.NDArray[np.bool_]:
    """Which tiles are recorded as done and have their objects, shape (tiles,)."""
    return (state or read_ledger(cube.ledger)).done(cube.spec.tiles) & cube.stored_tiles()


def _export(
    cube: Cube,
    path: Path | str,
    images: list[_Image],
    overwrite: bool,
    partial: bool,
    progress: Progress | None,
    limit: int,
) -> None:
    path = Path(os.path.abspath(path))
    if path.exists() and (not overwrite or path.is_dir()):
        raise CubeError(f"{path}: exists already; choose another path, or say that it may be overwritten")
    done = finished_tiles(cube)
    if not (done.all() or partial):
        missing = len(done) - int(done.sum())
        raise CubeError(
            f"{cube.path}: {missing} of {len(done)} tiles are not done; resume the render, or ask for a "
            "partial export, which has NaN there"
        )
    counter = _count(progress, len(images) * len(done))
    headers = [_whole_header(image, index, len(images)) for index, image in enumerate(images)]
    size = sum(len(keywords.tostring()) for keywords in headers) + sum(image.data_size for image in images)
    with disk_errors(path, size):
        make_folders(path.parent)
        sweep_beside(path)
        with replacing(path) as file, ThreadPoolExecutor(THREADS) as threads:
            work = _Work(cube, done, limit, counter, threads)
            os.ftruncate(file, size)
            offset = 0
            for image, keywords in zip(images, headers, strict=True):
                offset = _write_image(file, offset, image, work, keywords)


def _count(progress: Progress | None, total: int) -> Callable[[], None]:
    written = 0

    def step() -> None:
        nonlocal written
        written += 1
        if progress is not None:
            progress(written, total)

    return step


def _whole_header(image: _Image, index: int, count: int) -> Any:
    """Header of HDU `index` of `count`, with placeholders for the checksums."""
    axes = image.shape[::-1]
    kind = ("SIMPLE", True, "FITS Standard 4.0") if index == 0 else ("XTENSION", "IMAGE", "image extension")
    cards: list[tuple[str, Any, str]] = [
        kind,
        ("BITPIX", -8 * image.dtype.itemsize, "IEEE floats"),
        ("NAXIS", len(axes), ""),
        *((f"NAXIS{axis + 1}", length, "") for axis, length in enumerate(axes)),
    ]
    if index > 0:
        cards += [("PCOUNT", 0, ""), ("GCOUNT", 1, ""), ("EXTNAME", image.header["MAPNAME"], "")]
    elif count > 1:
        cards.append(("EXTEND", True, "the maps follow"))
    cards += [("DATASUM", "0", "sum of the data"), ("CHECKSUM", "0" * 16, "sum of header and data")]
    whole = fits.Header(cards)
    whole.extend(image.header.cards, bottom=True)
    return whole


def _write_image(file: int, offset: int, image: _Image, work: _Work, keywords: Any) -> int:
    """Write one HDU at `offset`; where the next one begins."""
    start = offset + len(keywords.tostring())
    total = checksums.fold(sum(_write_rows(file, start, image, work)))
    keywords["DATASUM"] = str(total)
    block = keywords.tostring().encode("ascii")
    keywords["CHECKSUM"] = checksums.encode(checksums.fold(total + checksums.sum_bytes(block)))
    write_all(file, keywords.tostring().encode("ascii"), offset)
    return start + image.data_size


def _write_rows(file: int, start: int, image: _Image, work: _Work) -> Iterator[int]:
    """Write the pixels, which begin at `start`; the sum of each row of tiles and group of planes."""
    spec = work.cube.spec
    _, ny, nx = spec.shape
    rows, columns = spec.tile_grid
    size = image.dtype.itemsize
    group = max(1, min(image.planes, work.limit // (min(spec.tile[0], ny) * nx * size)))
    # One buffer for all: a fresh one for each row costs the page faults again, and lives beside the old one.
    memory = np.empty(group * min(spec.tile[0], ny) * nx, dtype=image.dtype)
    for row in range(rows):
        along_y, _ = spec.tile_slices(row * columns)
        height = along_y.stop - along_y.start
        for first in range(0, image.planes, group):
            planes = slice(first, min(first + group, image.planes))
            count = planes.stop - first
            buffer = memory[: count * height * nx].reshape(count, height, nx)
            _gather(buffer, planes, row, image, work)
            yield checksums.sum_words(buffer)
            _to_file_order(buffer)
            for plane, pixels in zip(range(first, planes.stop), buffer, strict=True):
                write_all(file, pixels, start + (plane * ny + along_y.start) * nx * size)


def _gather(buffer: npt.NDArray[Any], planes: slice, row: int, image: _Image, work: _Work) -> None:
    """Fill `buffer` (planes, y, x) with a row of tiles, in a few threads: decoding lets them run."""
    spec = work.cube.spec
    first = row * spec.tile_grid[1]

    def fill(tile: int) -> None:
        _, along_x = spec.tile_slices(tile)
        buffer[:, :, along_x] = image.read(tile)[planes] if work.done[tile] else np.nan

    for _ in work.threads.map(fill, range(first, first + spec.tile_grid[1])):
        if planes.stop == image.planes:
            work.progress()


def _to_file_order(buffer: npt.NDArray[Any]) -> None:
    """Swap the bytes of native floats to big-endian, in place."""
    if np.little_endian:
        buffer.view(f"u{buffer.dtype.itemsize}").byteswap(inplace=True)
