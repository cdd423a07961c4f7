"""Reader of AMReX plotfiles: metadata on opening, the cells of a patch when asked for."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Mapping, Sequence
from functools import cached_property
from pathlib import Path

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError
from cubeforge.snapshots._files import OpenFiles, read_exactly, read_upto
from cubeforge.snapshots._ranges import Four, plan_ranges, read_ranges
from cubeforge.snapshots.amrex_fab import FAB_LIMIT, FabLine, RealFormat, fab_line_text, parse_fab_line
from cubeforge.snapshots.amrex_header import PlotHeader, parse_header
from cubeforge.snapshots.amrex_layout import SharedLevel, assemble, triple
from cubeforge.snapshots.amrex_level import LevelHeader, parse_bounds, parse_level
from cubeforge.snapshots.base import Box
from cubeforge.snapshots.request import check_box, check_fields, check_patch


class AmrexSnapshot:
    """One AMReX plotfile. Arrays come in the stored precision, native byte order, x fastest in memory.

    Parameters
    ----------
    path : str or Path
        The plotfile's folder.

    Raises
    ------
    SnapshotError
        A missing or malformed `Header` or `Cell_H`, and whatever cannot be rendered: 2-D, nodal,
        non-Cartesian, or header-only output.
    """

    format_name = "AMReX plotfile"

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self.path = os.fspath(path)
        self._root = Path(path)
        self._files = OpenFiles()
        self._real_seen: dict[int, RealFormat] = {}
        self._bounds: dict[str, npt.NDArray[np.float64] | None] = {}
        raw = self._metadata("Header")
        digest = hashlib.sha256(raw)
        header = parse_header(raw, str(self._root / "Header"))
        parsed = []
        for level, name in enumerate(header.paths):
            raw = self._metadata(f"{name}_H")
            digest.update(raw)
            parsed.append(parse_level(raw, str(self._root / f"{name}_H")))
            self._check_level(header, parsed[level], level)
        self._digest = digest
        self._paths = header.paths
        self.fields: tuple[str, ...] = header.fields
        self.time = header.time
        self.units: Mapping[str, str] = {}
        self.hierarchy, self._stored, self.data_files = assemble(header, parsed)
        self._levels = tuple(
            SharedLevel(part.version, part.ghost, part.real, triple(corner))
            for part, corner in zip(parsed, header.domain_lo, strict=True)
        )

    def __reduce__(self) -> tuple[type[AmrexSnapshot], tuple[str]]:
        return type(self), (self.path,)

    def _metadata(self, name: str) -> bytes:
        path = self._root / name
        try:
            return path.read_bytes()
        except OSError as error:
            reason = (
                "is missing" if isinstance(error, FileNotFoundError) else f"cannot be read: {error.strerror}"
            )
            raise SnapshotError(f"{path} {reason}; the plotfile needs it") from None

    def _check_level(self, header: PlotHeader, part: LevelHeader, level: int) -> None:
        where = self._root / f"{header.paths[level]}_H"
        if len(part.lo) != header.grids[level]:
            raise SnapshotError(f"{where}: {len(part.lo)} boxes where Header promises {header.grids[level]}")
        if part.components != len(header.fields):
            raise SnapshotError(
                f"{where}: {part.components} components where Header names {len(header.fields)} fields"
            )

    @cached_property
    def identity(self) -> str:
        """SHA-256 over `Header`, every `Cell_H`, and the names and sizes of the data files."""
        digest = self._digest.copy()
        for name in self.data_files:
            digest.update(f"{name} {self._size(name)}\n".encode())
        return digest.hexdigest()

    def _size(self, name: str) -> int:
        path = self._root / name
        try:
            return path.stat().st_size
        except FileNotFoundError:
            raise SnapshotError(f"{path}: the data file is missing") from None

    def bounds(self, field: str) -> npt.NDArray[np.float64] | None:
        """Stored minimum and maximum per level, shape (levels, 2); None where the layout has none.

        Covered cells count too. The file's figures are those before rounding to 32 bits, so for 32-bit data
        they are widened by one such step. Reads the `Cell_H` files again, the first time for each field.
        """
        check_fields([field], self.fields, self.path)
        if field not in self._bounds:
            self._bounds[field] = self._read_bounds(self.fields.index(field))
        return self._bounds[field]

    def _read_bounds(self, component: int) -> npt.NDArray[np.float64] | None:
        out = np.empty((self.hierarchy.levels, 2))
        for level, name in enumerate(self._paths):
            path = f"{name}_H"
            pair = parse_bounds(self._metadata(path), str(self._root / path), component)
            if pair is None:
                return None
            out[level] = pair
            if self._real(level).size == 4:
                out[level] = _widen(*pair)
        out.flags.writeable = False
        return out

    def read_bytes(self, patches: npt.NDArray[np.int64], fields: Sequence[str]) -> npt.NDArray[np.int64]:
        """Bytes that `read` takes from disk for each whole patch, shape (n,), merged gaps included."""
        check_fields(fields, self.fields, self.path)
        patches = np.asarray(patches, dtype=np.int64)
        box = np.searchsorted(self._stored.first, patches, side="right") - 1
        mesh, stored = self.hierarchy, self._stored
        # One number a kind: sorting rows of seven would take seconds for a million patches.
        whole = np.unique(_pack(stored.shape[box]), return_inverse=True)[1].reshape(-1)
        key = (whole * 64 + mesh.level[patches]) << 21 | _pack(mesh.shape[patches], bits=7)
        _, example, kind = np.unique(key, return_index=True, return_inverse=True)
        counts = np.empty(len(example), dtype=np.int64)
        for number, (p, b) in enumerate(zip(patches[example], box[example], strict=True)):
            counts[number] = self._bytes_of(int(mesh.level[p]), mesh.shape[p], stored.shape[b], fields)
        out: npt.NDArray[np.int64] = counts[kind.reshape(-1)]
        return out

    def _bytes_of(
        self, level: int, shape: npt.NDArray[np.int32], stored: npt.NDArray[np.int32], fields: Sequence[str]
    ) -> int:
        size, version = self._real(level).size, self._levels[level].version
        total = FAB_LIMIT if version == 1 else 0
        full = [int(n) + 2 * g for n, g in zip(stored, self._levels[level].ghost, strict=True)]
        for run in self._runs(fields):
            total += plan_ranges((*triple(shape), len(run)), full, size).total * size
        return total

    def _runs(self, fields: Sequence[str]) -> list[list[int]]:
        """Components wanted, in groups that lie side by side on disk."""
        runs: list[list[int]] = []
        for component in sorted({self.fields.index(field) for field in fields}):
            if runs and runs[-1][-1] == component - 1:
                runs[-1].append(component)
            else:
                runs.append([component])
        return runs

    def check_files(self) -> None:
        """Compare every data file's size with the end of its last record; reads at most a line a level."""
        ends = np.zeros(len(self.data_files), dtype=np.int64)
        for name in self.data_files:
            self._size(name)
        last = np.lexsort((self._stored.offset, self._stored.file))
        last = last[np.append(np.diff(self._stored.file[last]) > 0, True)]
        for box in last:
            ends[self._stored.file[box]] = self._record_end(int(box))
        for name, end in zip(self.data_files, ends, strict=True):
            if self._size(name) < end:
                raise SnapshotError(
                    f"{self._root / name}: the data file is truncated: it has {self._size(name)} bytes, "
                    f"its last record ends at {end}"
                )

    def _record_end(self, box: int) -> int:
        level = int(self.hierarchy.level[self._stored.first[box]])
        real, shared = self._real(level), self._levels[level]
        lo, hi = self._promised(box)
        cells = int(np.prod([b - a + 1 for a, b in zip(lo, hi, strict=True)], dtype=np.int64))
        text = fab_line_text(real, lo, hi, len(self.fields)) if shared.version == 1 else ""
        return int(self._stored.offset[box]) + len(text) + cells * len(self.fields) * real.size

    def _promised(self, box: int) -> tuple[tuple[int, int, int], tuple[int, int, int]]:
        """First and last cell of a stored box, ghost cells included, in the file's own index space."""
        patch = int(self._stored.first[box])
        shared = self._levels[int(self.hierarchy.level[patch])]
        corner = self.hierarchy.lo[patch].astype(np.int64) + shared.corner
        lo = corner - shared.ghost
        return triple(lo), triple(corner + self._stored.shape[box] - 1 + shared.ghost)

    def _real(self, level: int) -> RealFormat:
        known = self._levels[level].real or self._real_seen.get(level)
        if known is None:
            box = int(np.searchsorted(self._stored.first, self.hierarchy.first[level]))
            path = str(self._root / self.data_files[self._stored.file[box]])
            with self._files.lease(path) as descriptor:
                known = self._fab_line(descriptor, box, path).real
            self._real_seen[level] = known
        return known

    def _fab_line(self, descriptor: int, box: int, path: str) -> FabLine:
        """The line before a version-1 record, checked against what `Cell_H` promised."""
        offset = int(self._stored.offset[box])
        where = f"{path}, byte {offset}"
        line = parse_fab_line(read_upto(descriptor, FAB_LIMIT, offset, path), where)
        lo, hi = self._promised(box)
        if (line.lo, line.hi) != (lo, hi):
            raise SnapshotError(
                f"{where}: the record holds cells {line.lo} to {line.hi}, where Cell_H promises {lo} to {hi}"
            )
        if line.components != len(self.fields):
            raise SnapshotError(
                f"{where}: the record holds {line.components} components, Header names {len(self.fields)}"
            )
        return line

    def read(
        self, patch: int, fields: Sequence[str], box: Box | None = None
    ) -> dict[str, npt.NDArray[np.floating]]:
        """Cells of a patch, or of its part `box`: field -> array (nx, ny, nz), x fastest in memory.

        Raises
        ------
        SnapshotError
            Unknown field or patch, an empty or outside box, a missing, truncated or contradictory file.
        """
        index = check_patch(patch, self.hierarchy.patches, self.path)
        check_fields(fields, self.fields, self.path)
        lo, hi = check_box(box, self.hierarchy.shape[index], f"{self.path}, patch {index}")
        level = int(self.hierarchy.level[index])
        real, ghost = self._real(level), self._levels[level].ghost
        stored = int(np.searchsorted(self._stored.first, index, side="right")) - 1
        inset = triple(self.hierarchy.lo[index] - self.hierarchy.lo[self._stored.first[stored]] + lo + ghost)
        full = triple(self._stored.shape[stored] + 2 * np.array(ghost))
        shape = (hi[0] - lo[0], hi[1] - lo[1], hi[2] - lo[2])
        native = np.dtype(f"f{real.size}")
        cells = {field: np.empty(shape, dtype=native, order="F") for field in fields}
        path = str(self._root / self.data_files[self._stored.file[stored]])
        with self._files.lease(path) as descriptor:
            begin = self._data_start(descriptor, stored, level, path)
            for run in self._runs(fields):
                part: Four = (*shape, len(run))
                first = inset[0] + full[0] * (inset[1] + full[1] * (inset[2] + full[2] * run[0]))
                read_ranges(
                    lambda count, offset: read_exactly(descriptor, count, offset, path),
                    plan_ranges(part, full, real.size),
                    begin + first * real.size,
                    real,
                    [cells[self.fields[component]] for component in run],
                )
        return cells

    def _data_start(self, descriptor: int, box: int, level: int, path: str) -> int:
        offset = int(self._stored.offset[box])
        if self._levels[level].version > 1:
            return offset
        line = self._fab_line(descriptor, box, path)
        if line.real != self._real(level):
            raise SnapshotError(
                f"{path}, byte {offset}: reals are {line.real}, where the level's first record has "
                f"{self._real(level)}"
            )
        return offset + line.length


def _pack(shapes: npt.NDArray[np.int32], bits: int = 21) -> npt.NDArray[np.int64]:
    wide = shapes.astype(np.int64)
    return (wide[:, 0] << 2 * bits) | (wide[:, 1] << bits) | wide[:, 2]


def _widen(low: float, high: float) -> tuple[float, float]:
    # Data may have been rounded to nearest or towards zero: both lie within the two float32 neighbours.
    with np.errstate(over="ignore"):
        below = np.nextafter(np.float32(low), np.float32(-np.inf))
        above = np.nextafter(np.float32(high), np.float32(np.inf))
    return float(below), float(above)
