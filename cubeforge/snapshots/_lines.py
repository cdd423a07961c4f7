"""The lines of a text file of any size: taken one at a time where they differ, by blocks where they don't."""

from __future__ import annotations

import numpy as np

from cubeforge.errors import SnapshotError

SCAN = 1 << 22
"""Bytes searched for line ends at a time."""


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
        self.name = name
        self._raw = raw
        self._at = 0
        self._taken = 0

    @property
    def number(self) -> int:
        """Lines taken so far, which is also the number of the last one, counted from 1."""
        return self._taken

    def _end(self) -> int:
        end = self._raw.find(b"\n", self._at)
        return len(self._raw) if end < 0 else end

    def peek(self) -> str | None:
        """The next line without its ends, or None after the last."""
        if self._at >= len(self._raw):
            return None
        return self._raw[self._at : self._end()].decode("utf-8", errors="replace").strip()

    def take(self, wanted: str) -> str:
        """The next line; `wanted` says what it should be, for the message when the file ends before it."""
        line = self.peek()
        if line is None:
            raise SnapshotError(f"{self.name}: ends after line {self._taken}, where {wanted} was expected")
        self._at = self._end() + 1
        self._taken += 1
        return line

    def block(self, count: int, wanted: str) -> bytes:
        """The next `count` lines as they stand, newlines included."""
        begin, left = self._at, count
        while left:
            if self._at >= len(self._raw):
                raise SnapshotError(
                    f"{self.name}: ends after line {self._taken + count - left}, where {count} lines of "
                    f"{wanted} were expected from line {self._taken + 1} on"
                )
            size = min(SCAN, len(self._raw) - self._at)
            piece = np.frombuffer(self._raw, dtype=np.uint8, count=size, offset=self._at)
            ends = np.flatnonzero(piece == ord("\n"))[:left]
            left -= len(ends)
            self._at += size if left else int(ends[-1]) + 1
        self._taken += count
        return self._raw[begin : self._at]

    def skip_blank(self) -> None:
        """Go past empty lines."""
        while self.peek() == "":
            self.take("an empty line")

    def wrong(self, found: str, wanted: str, line: int | None = None) -> SnapshotError:
        """The error to raise for a line (by default the last taken) that is not what was wanted."""
        shown = found if len(found) <= 80 else found[:77] + "..."
        return SnapshotError(
            f'{self.name}, line {self._taken if line is None else line}: found "{shown}", expected {wanted}'
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
