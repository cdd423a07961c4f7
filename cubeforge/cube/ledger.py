"""The durable record of the tiles that are done.

Each worker process of a run appends to one file of its own, so nobody waits for a lock. A file is a line of
JSON that describes the records, then records of one size, each closed by a CRC32 over its other bytes. What
a kill or a power cut leaves at the end of a file is ignored: the tile is rendered again, and comes out the
same.
"""

from __future__ import annotations

import contextlib
import json
import os
import threading
import uuid
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from cubeforge.cube.durable import disk_errors, fsync_folder, write_all
from cubeforge.cube.process import machine
from cubeforge.errors import CubeError

SUFFIX = ".tiles"
"""Ending of the ledger's files."""
VERSION = 1
"""Version of the files' layout."""
FIXED = ("tile", "checksum", "finished", "seconds")
"""Fields that every record has; the caller's statistics follow."""


class TileRecord(NamedTuple):
    """One finished tile.

    Attributes
    ----------
    tile : int
    checksum : int
        `cubeforge.cube.tiles.tile_checksum` of the decoded tile.
    finished : float
        Unix time.
    seconds : float
        Time it took.
    statistics : tuple of float
        In the order of the writer's statistics.
    """

    tile: int
    checksum: int
    finished: float
    seconds: float
    statistics: tuple[float, ...] = ()


def record_dtype(statistics: Sequence[str]) -> np.dtype[np.void]:
    """Packed type of a record: tile i8, checksum u8, finished f8, seconds f8, one f8 per statistic."""
    kinds = [("tile", "<i8"), ("checksum", "<u8"), ("finished", "<f8"), ("seconds", "<f8")]
    return np.dtype(kinds + [(name, "<f8") for name in statistics])


def _with_crc(dtype: np.dtype[np.void]) -> np.dtype[np.void]:
    return np.dtype([("record", dtype), ("crc", "<u4")])


class LedgerWriter:
    """Appends records of finished tiles, durably. For one process of one run; its threads may share it.

    Parameters
    ----------
    folder : path
        `Cube.ledger`.
    run_id : str
    statistics : tuple of str
        Names of the statistics that each record carries.

    Raises
    ------
    CubeError
        Names of statistics that repeat or clash with the fixed fields.
    EngineError
        The file cannot be created.
    """

    def __init__(self, folder: Path | str, run_id: str, statistics: tuple[str, ...] = ()) -> None:
        if len({*FIXED, *statistics}) != len(FIXED) + len(statistics):
            raise CubeError(f"ledger: statistics {statistics} repeat a name, or one of {FIXED}")
        self.statistics = tuple(statistics)
        self.dtype = record_dtype(self.statistics)
        self.path = Path(folder) / f"{run_id}-{uuid.uuid4().hex[:12]}{SUFFIX}"
        self._lock = threading.Lock()
        described = {"ledger": VERSION, "run": run_id, "where": machine(), "pid": os.getpid()}
        header = json.dumps(described | {"statistics": self.statistics}).encode() + b"\n"
        with disk_errors(self.path, len(header)):
            flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC
            self._file = os.open(self.path, flags, 0o666)
            write_all(self._file, header)
            os.fsync(self._file)
            fsync_folder(self.path.parent)
        self._size = len(header)

    def append(self, records: Sequence[TileRecord]) -> None:
        """Add `records` with one flush; they are durable on return.

        Raises
        ------
        CubeError
            A record has another number of statistics, or the writer is closed.
        EngineError
            The disk is full, or refuses; none of `records` counts, and the call may be repeated.
        """
        for record in records:
            if len(record.statistics) != len(self.statistics):
                raise CubeError(
                    f"ledger: tile {record.tile} has {len(record.statistics)} statistics; "
                    f"wanted {len(self.statistics)}: {', '.join(self.statistics)}"
                )
        rows = np.array([(*record[:4], *record.statistics) for record in records], dtype=self.dtype)
        closed = np.empty(len(rows), dtype=_with_crc(self.dtype))
        closed["record"] = rows
        closed["crc"] = _crcs(rows)
        data = closed.tobytes()
        with self._lock:
            if self._file < 0:
                raise CubeError(f"{self.path}: the ledger was closed")
            with disk_errors(self.path, len(data)):
                self._write(data)

    def _write(self, data: bytes) -> None:
        try:
            write_all(self._file, data, self._size)
            os.fsync(self._file)
        except BaseException:
            # The next append starts at the same place; until then, no half record stays behind.
            with contextlib.suppress(OSError):
                os.ftruncate(self._file, self._size)
            raise
        self._size += len(data)

    def close(self) -> None:
        """Close the file; everything appended is durable already."""
        with self._lock:
            if self._file >= 0:
                os.close(self._file)
                self._file = -1

    def __enter__(self) -> LedgerWriter:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


@dataclass(frozen=True)
class LedgerState:
    """What the ledger says.

    Attributes
    ----------
    records : ndarray, shape (done tiles,), structured as `record_dtype`
        The last record of each done tile, ascending in tile. Statistics that a file lacks are NaN.
    conflicts : ndarray of int64
        Tiles whose records disagree on the checksum, which must not be: trust `verify` alone for them.
    problems : tuple of str
        Damaged records and files, for people. What they recorded doesn't count as done.
    torn_bytes : int
        Bytes at ends of files that were being written when their process stopped; harmless.
    """

    records: npt.NDArray[np.void]
    conflicts: npt.NDArray[np.int64]
    problems: tuple[str, ...]
    torn_bytes: int

    @property
    def tiles(self) -> npt.NDArray[np.int64]:
        """Ids of the done tiles, ascending."""
        return self.records["tile"].astype(np.int64)

    @property
    def statistics(self) -> tuple[str, ...]:
        """Names of the statistics."""
        return tuple((self.records.dtype.names or ())[len(FIXED) :])

    def done(self, tiles: int) -> npt.NDArray[np.bool_]:
        """Which of the tiles 0 to `tiles` - 1 are done; CubeError when the ledger names others."""
        ids = self.tiles
        if len(ids) and (ids[0] < 0 or ids[-1] >= tiles):
            raise CubeError(f"ledger: it names tiles {ids[0]} to {ids[-1]}; the cube has 0 to {tiles - 1}")
        mask = np.zeros(tiles, dtype=bool)
        mask[ids] = True
        return mask


def read_ledger(folder: Path | str) -> LedgerState:
    """Read all files of the ledger in `folder` (`Cube.ledger`); a missing folder is an empty ledger."""
    parts: list[npt.NDArray[np.void]] = []
    problems: list[str] = []
    torn = 0
    for path in sorted(Path(folder).glob(f"*{SUFFIX}")):
        records, left, problem = _read_file(path)
        parts.append(records)
        problems += problem
        torn += left
    records, conflicts = _merge(parts)
    return LedgerState(records, conflicts, tuple(problems), torn)


def _read_file(path: Path) -> tuple[npt.NDArray[np.void], int, list[str]]:
    """Sound records of one file, torn bytes at its end, and what is damaged."""
    data = path.read_bytes()
    header, newline, body = data.partition(b"\n")
    if not newline:
        return np.empty(0, record_dtype(())), len(data), []
    try:
        described = json.loads(header)
        if described["ledger"] != VERSION:
            raise ValueError(f"version {described['ledger']}, wanted {VERSION}")
        dtype = record_dtype(described["statistics"])
    except (ValueError, KeyError, TypeError) as error:
        problem = f"{path}: the first line is damaged ({error}); its tiles don't count as done"
        return np.empty(0, record_dtype(())), 0, [problem]
    closed = _with_crc(dtype)
    whole = len(body) // closed.itemsize
    rows = np.frombuffer(body, dtype=closed, count=whole)
    sound = _crcs(np.ascontiguousarray(rows["record"])) == rows["crc"]
    # A power cut may leave the last, never acknowledged records as zeros: they are torn, not damaged.
    last = int(np.flatnonzero(sound)[-1]) + 1 if sound.any() else 0
    damaged = np.flatnonzero(~sound[:last])
    problems = []
    if len(damaged):
        problems = [
            f"{path}: {len(damaged)} of {whole} records are damaged, the first is record {damaged[0]}; "
            "their tiles don't count as done"
        ]
    return rows["record"][sound], len(body) - last * closed.itemsize, problems


def _crcs(rows: npt.NDArray[np.void]) -> npt.NDArray[np.uint32]:
    """CRC32 of each record."""
    pieces: list[Any] = rows.view(f"V{rows.dtype.itemsize}").tolist()
    return np.fromiter(map(zlib.crc32, pieces), dtype=np.uint32, count=len(pieces))


def _merge(
    parts: list[npt.NDArray[np.void]],
) -> tuple[npt.NDArray[np.void], npt.NDArray[np.int64]]:
    """Last record of each tile, and the tiles whose checksums disagree."""
    names = list(dict.fromkeys(name for part in parts for name in (part.dtype.names or ())[len(FIXED) :]))
    merged = np.empty(sum(map(len, parts)), dtype=record_dtype(names))
    start = 0
    for part in parts:
        target = merged[start : start + len(part)]
        for name in merged.dtype.names or ():
            target[name] = part[name] if name in (part.dtype.names or ()) else np.nan
        start += len(part)
    # Nearly always each tile has one record: then the cheap sort, by tile alone, is all there is to do.
    order = np.argsort(merged["tile"])
    tile = merged["tile"][order]
    if not np.any(tile[1:] == tile[:-1]):
        return np.take(merged, order), np.empty(0, dtype=np.int64)
    merged = np.take(merged, np.lexsort((merged["finished"], merged["tile"])))
    same = merged["tile"][1:] == merged["tile"][:-1]
    differ = same & (merged["checksum"][1:] != merged["checksum"][:-1])
    conflicts = np.unique(merged["tile"][1:][differ]).astype(np.int64)
    return merged[np.append(~same, True)], conflicts
