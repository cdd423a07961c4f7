"""The lines of a text file of any size: taken one at a time where they differ, by blocks where they don't."""

from __future__ import annotations

import numpy as np

from cubeforge.errors import SnapshotError


class Lines:
    """A cursor over the lines of `raw`; every complaint names the file and the line.

    Parameters
    ----------
    raw : bytes
        The file's contents.
    name : str
        The file, for messages.
    """

    def __init__(self, raw: bytes, name: str) -> None:
        ends = np.flatnonzero(np.frombuffer(raw, dtype=np.uint8) == ord("\n"))
        if len(raw) and not raw.endswith(b"\n"):
            ends = np.append(ends, len(raw))
        self.name = name
        self._raw = raw
        self._ends = ends
        self._next = 0

    @property
    def number(self) -> int:
        """Lines taken so far, which is also the number of the last one, counted from 1."""
        return self._next

    def _start(self, line: int) -> int:
        return int(self._ends[line - 1]) + 1 if line else 0

    def peek(self) -> str | None:
        """The next line without its ends, or None after the last."""
        if self._next >= len(self._ends):
            return None
        line = self._raw[self._start(self._next) : int(self._ends[self._next])]
        return line.decode("utf-8", errors="replace").strip()

    def take(self, wanted: str) -> str:
        """The next line; `wanted` says what it should be, for the message when the file ends before it."""
        line = self.peek()
        if line is None:
            raise SnapshotError(f"{self.name}: ends after line {self._next}, where {wanted} was expected")
        self._next += 1
        return line

    def block(self, count: int, wanted: str) -> bytes:
        """The next `count` lines as they stand, newlines included."""
        if self._next + count > len(self._ends):
            raise SnapshotError(
                f"{self.name}: ends after line {len(self._ends)}, where {count} lines of {wanted} "
                f"were expected from line {self._next + 1} on"
            )
        begin = self._start(self._next)
        self._next += count
        return self._raw[begin : self._start(self._next)]

    def skip_blank(self) -> None:
        """Go past empty lines."""
        while self.peek() == "":
            self._next += 1

    def wrong(self, found: str, wanted: str, line: int | None = None) -> SnapshotError:
        """The error to raise for a line (by default the last taken) that is not what was wanted."""
        shown = found if len(found) <= 80 else found[:77] + "..."
        return SnapshotError(
            f'{self.name}, line {self._next if line is None else line}: found "{shown}", expected {wanted}'
        )

    def integer(self, wanted: str, least: int = 0) -> int:
        """The next line as one integer of at least `least`."""
        line = self.take(wanted)
        try:
            value = int(line)
        except ValueError:
            value = least - 1
        if value < least:
            raise self.wrong(line, wanted)
        return value

    def numbers(self, count: int, wanted: str) -> list[float]:
        """The next line as `count` finite reals."""
        line = self.take(wanted)
        try:
            values = [float(word) for word in line.split()]
        except ValueError:
            values = []
        if len(values) != count or not np.all(np.isfinite(values)):
            raise self.wrong(line, wanted)
        return values
