"""Data files kept open for many small reads from several threads."""

from __future__ import annotations

import os
import threading
from collections import OrderedDict
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass

from cubeforge.errors import SnapshotError

MOST_OPEN = 32
"""Files kept open; opening costs a round trip to the metadata server of a parallel file system."""


@dataclass
class _Open:
    descriptor: int
    users: int


class OpenFiles:
    """File descriptors by path, the least recently used and idle ones closed beyond `limit`."""

    def __init__(self, limit: int = MOST_OPEN) -> None:
        self._limit = limit
        self._lock = threading.Lock()
        self._open: OrderedDict[str, _Open] = OrderedDict()

    @contextmanager
    def lease(self, path: str) -> Iterator[int]:
        """A descriptor that stays open inside the ``with`` block.

        Raises
        ------
        SnapshotError
            The file is missing or cannot be opened.
        """
        with self._lock:
            entry = self._open.get(path)
            if entry is None:
                entry = self._open[path] = _Open(_open(path), 0)
            self._open.move_to_end(path)
            entry.users += 1
        try:
            yield entry.descriptor
        finally:
            with self._lock:
                entry.users -= 1
                self._trim(self._limit)

    def close(self) -> None:
        """Close all files that nobody is reading."""
        with self._lock:
            self._trim(0)

    def __del__(self) -> None:
        self.close()

    def _trim(self, limit: int) -> None:
        for path in list(self._open)[: max(0, len(self._open) - limit)]:
            if self._open[path].users == 0:
                os.close(self._open.pop(path).descriptor)


def _open(path: str) -> int:
    try:
        return os.open(path, os.O_RDONLY | os.O_CLOEXEC)
    except FileNotFoundError:
        raise SnapshotError(f"{path}: the data file is missing") from None
    except OSError as error:
        raise SnapshotError(f"{path}: the data file cannot be opened ({error.strerror})") from None


def read_exactly(descriptor: int, count: int, offset: int, path: str) -> bytes:
    """`count` bytes from `offset`, whatever pieces the system hands them over in.

    Raises
    ------
    SnapshotError
        The file ends before, or the disk reports an error.
    """
    try:
        data = os.pread(descriptor, count, offset)
        while len(data) < count:
            more = os.pread(descriptor, count - len(data), offset + len(data))
            if not more:
                size = os.fstat(descriptor).st_size
                raise SnapshotError(
                    f"{path}: the data file is truncated: bytes {offset} to {offset + count} were promised, "
                    f"it has {size}"
                )
            data += more
    except OSError as error:
        raise SnapshotError(f"{path}: reading failed at byte {offset} ({error.strerror})") from None
    return data


def read_upto(descriptor: int, count: int, offset: int, path: str) -> bytes:
    """At most `count` bytes from `offset`: fewer at the end of the file."""
    try:
        return os.pread(descriptor, count, offset)
    except OSError as error:
        raise SnapshotError(f"{path}: reading failed at byte {offset} ({error.strerror})") from None
