"""Writer of AMReX plotfiles, for demonstration data and round trips."""

from __future__ import annotations

import os
import secrets
import shutil
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError
from cubeforge.mesh.hierarchy import Hierarchy
from cubeforge.snapshots.amrex_fab import RealFormat, box_text, fab_line_text
from cubeforge.snapshots.memory import PatchData

Source = Sequence[PatchData] | Callable[[int], PatchData]
"""The cells of every patch, or a function that makes those of one."""


@dataclass(frozen=True)
class _Style:
    """The choices of one plotfile; `origin` is the first cell of level 0's domain."""

    fields: tuple[str, ...]
    real: RealFormat
    files: int
    ghost: int
    origin: tuple[int, int, int]
    version: int


@dataclass
class _Records:
    """Where the boxes of a level went, and their extremes (boxes, fields)."""

    places: list[tuple[str, int]]
    minima: npt.NDArray[np.float64]
    maxima: npt.NDArray[np.float64]


def write_amrex(
    path: str | os.PathLike[str],
    hierarchy: Hierarchy,
    fields: Sequence[str],
    data: Source,
    *,
    time: float = 0.0,
    real: str = "f8",
    byteorder: str = "<",
    files: int = 1,
    ghost: int = 0,
    index_origin: Sequence[int] = (0, 0, 0),
    version: int = 1,
) -> None:
    """Write a plotfile, one box a patch. It appears under its name only when complete.

    Parameters
    ----------
    path : str or Path
        The folder to make; it must not exist.
    hierarchy : Hierarchy
        Levels and patches.
    fields : sequence of str
        Components, in the order to store.
    data : sequence or callable
        Patch -> field -> array (nx, ny, nz). A callable is asked for one patch at a time, in order.
    time : float
        Simulation time.
    real : {"f8", "f4"}
        Precision on disk.
    byteorder : {"<", ">", "swapped"}
        Byte order on disk; "swapped" exchanges the bytes of each pair of a big-endian number.
    files : int
        Data files per level (no more than it has patches).
    ghost : int
        Layers of ghost cells in each record; they repeat the nearest valid cell.
    index_origin : sequence of 3 ints
        First cell of level 0's domain in the file's index space.
    version : {1, 2, 3, 4}
        Layout of `Cell_H`: 1 with a line before each record; 2 without, and without minima and maxima;
        3 with those of each box; 4 with those of each field.

    Raises
    ------
    SnapshotError
        The path exists, a choice is out of range, data don't fit, or a number doesn't fit into 32 bits.
    """
    target = Path(path)
    style = _style(fields, real, byteorder, files, ghost, index_origin, version)
    if target.exists():
        raise SnapshotError(f"{target} exists already; remove it or choose another name")
    if not target.parent.is_dir():
        raise SnapshotError(f"{target.parent}: there is no such folder to write {target.name} into")
    partial = target.with_name(f".{target.name}.partial-{secrets.token_hex(4)}")
    partial.mkdir()
    try:
        for level in range(hierarchy.levels):
            _write_level(partial, hierarchy, level, data, style)
        (partial / "Header").write_text(_header(hierarchy, style, time))
        partial.rename(target)
    except BaseException:
        shutil.rmtree(partial, ignore_errors=True)
        raise


def _style(
    fields: Sequence[str],
    real: str,
    byteorder: str,
    files: int,
    ghost: int,
    index_origin: Sequence[int],
    version: int,
) -> _Style:
    if real not in ("f4", "f8"):
        raise SnapshotError(f'real is "{real}"; "f4" or "f8" can be written')
    if byteorder not in ("<", ">", "swapped"):
        raise SnapshotError(f'byteorder is "{byteorder}"; "<", ">" or "swapped" can be written')
    if version not in (1, 2, 3, 4):
        raise SnapshotError(f"version is {version}; 1 to 4 can be written")
    if files < 1 or ghost < 0 or len(index_origin) != 3:
        raise SnapshotError(f"cannot write {files} files, {ghost} ghost layers, origin {index_origin}")
    names = tuple(fields)
    if not names or len(set(names)) < len(names) or any(not n.strip() or "\n" in n for n in names):
        raise SnapshotError(f"fields {list(names)}: wanted one or more different names of one line each")
    x, y, z = (int(i) for i in index_origin)
    return _Style(names, RealFormat(int(real[1]), byteorder), files, ghost, (x, y, z), version)


def _write_level(folder: Path, mesh: Hierarchy, level: int, data: Source, style: _Style) -> None:
    first, last = (int(n) for n in mesh.first[level : level + 2])
    place = folder / f"Level_{level}"
    place.mkdir()
    count = min(style.files, last - first)
    shape = (last - first, len(style.fields))
    records = _Records([], np.empty(shape), np.empty(shape))
    handles: list[BinaryIO] = []
    try:
        for number in range(count):
            handles.append((place / f"Cell_D_{number:05d}").open("wb"))
        for patch in range(first, last):
            number = (patch - first) % count
            records.places.append((f"Cell_D_{number:05d}", handles[number].tell()))
            cells = data(patch) if callable(data) else data[patch]
            _write_record(handles[number], mesh, patch, cells, style, records)
    finally:
        for handle in handles:
            handle.close()
    (place / "Cell_H").write_text(_cell_h(mesh, level, style, records))


def _write_record(
    file: BinaryIO, mesh: Hierarchy, patch: int, cells: PatchData, style: _Style, records: _Records
) -> None:
    row = patch - int(mesh.first[mesh.level[patch]])
    if style.version == 1:
        lo, hi = _box(mesh, patch, style)
        lo, hi = [n - style.ghost for n in lo], [n + style.ghost for n in hi]
        file.write(fab_line_text(style.real, lo, hi, len(style.fields)).encode())
    for component, field in enumerate(style.fields):
        if field not in cells:
            raise SnapshotError(f'patch {patch}: the data lack field "{field}"')
        array = np.asarray(cells[field], dtype=np.float64)
        if array.shape != tuple(mesh.shape[patch]):
            raise SnapshotError(
                f'patch {patch}, field "{field}" has shape {array.shape}, wanted {tuple(mesh.shape[patch])}'
            )
        records.minima[row, component] = array.min()
        records.maxima[row, component] = array.max()
        stored = _rounded(
            np.pad(array, style.ghost, mode="edge"), style.real, f'patch {patch}, field "{field}"'
        )
        file.write(style.real.encode(stored.ravel(order="F")))


def _rounded(array: npt.NDArray[np.float64], real: RealFormat, where: str) -> npt.NDArray[np.floating]:
    if real.size == 8:
        return array
    with np.errstate(over="ignore", under="ignore"):
        single = array.astype(np.float32)
    lost = (np.isfinite(array) & ~np.isfinite(single)) | ((array != 0) & (single == 0))
    if lost.any():
        raise SnapshotError(f'{where}: {array[lost][0]:g} does not fit into 32 bits; write real="f8"')
    return single


def _box(mesh: Hierarchy, patch: int, style: _Style) -> tuple[list[int], list[int]]:
    corner = _corner(mesh, int(mesh.level[patch]), style)
    return (mesh.lo[patch] + corner).tolist(), (mesh.hi[patch] + corner - 1).tolist()


def _corner(mesh: Hierarchy, level: int, style: _Style) -> npt.NDArray[np.int64]:
    refine: npt.NDArray[np.int64] = mesh.ratio[: level + 1].astype(np.int64).prod(axis=0)
    corner: npt.NDArray[np.int64] = refine * np.array(style.origin, dtype=np.int64)
    return corner


def _row(values: npt.NDArray[np.float64]) -> str:
    return "".join(f"{value:.17e}," for value in values)


def _cell_h(mesh: Hierarchy, level: int, style: _Style, records: _Records) -> str:
    patches = range(int(mesh.first[level]), int(mesh.first[level + 1]))
    count = len(patches)
    lines = [str(style.version), "1", str(len(style.fields)), str(style.ghost), f"({count} 0"]
    lines += [box_text(*_box(mesh, patch, style)) for patch in patches]
    lines += [")", str(count), *(f"FabOnDisk: {name} {offset}" for name, offset in records.places), ""]
    if style.version in (1, 3):
        for table in (records.minima, records.maxima):
            lines += [f"{count},{len(style.fields)}", *(_row(values) for values in table), ""]
    elif style.version == 4:
        lines += [_row(records.minima.min(axis=0)), _row(records.maxima.max(axis=0))]
    if style.version > 1:
        lines.append(style.real.text)
    return "\n".join(lines) + "\n"


def _header(mesh: Hierarchy, style: _Style, time: float) -> str:
    levels = range(mesh.levels)
    corners = [_corner(mesh, level, style) for level in levels]
    domains = [box_text(c.tolist(), (c + n - 1).tolist()) for c, n in zip(corners, mesh.domain, strict=True)]
    lines = ["HyperCLaw-V1.1", str(len(style.fields)), *style.fields, "3", repr(float(time))]
    lines += [str(mesh.levels - 1), _reals(mesh.origin), _reals(mesh.origin + mesh.extent)]
    lines += [" ".join(str(ratio) for ratio in mesh.ratio[1:, 0]), " ".join(domains)]
    lines += [" ".join("0" for _ in levels), *(_reals(size) for size in mesh.cell_size), "0", "0"]
    for level in levels:
        patches = range(int(mesh.first[level]), int(mesh.first[level + 1]))
        lines += [f"{level} {len(patches)} {float(time)!r}", "0"]
        for patch in patches:
            low = mesh.origin + mesh.lo[patch] * mesh.cell_size[level]
            high = mesh.origin + mesh.hi[patch] * mesh.cell_size[level]
            lines += [f"{float(a)!r} {float(b)!r}" for a, b in zip(low, high, strict=True)]
        lines.append(f"Level_{level}/Cell")
    return "\n".join(lines) + "\n"


def _reals(values: npt.NDArray[np.float64]) -> str:
    return " ".join(repr(float(value)) for value in values)
