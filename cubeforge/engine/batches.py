"""Batches of tiles: a second or two of work each, sized by what the tiles so far have taken."""

from __future__ import annotations

from collections.abc import Sequence

from cubeforge.cube.ledger import TileRecord

SECONDS = 2.0
"""Work of one batch."""
LARGEST = 256
"""Most tiles of a batch."""


class Batches:
    """Hands out tiles in order, in batches that shrink towards the end so that nobody waits for the last one."""

    def __init__(self, tiles: Sequence[int]) -> None:
        self._tiles = tiles
        self._next = 0
        self._seconds = 0.0
        self._done = 0

    def take(self, slots: int) -> list[int]:
        """The next batch for one of `slots` threads; empty at the end."""
        left = len(self._tiles) - self._next
        size = 1
        if self._done:
            size = int(SECONDS / max(self._seconds / self._done, 1e-6))
        size = max(1, min(size, LARGEST, -(-left // (4 * slots))))
        batch = [int(tile) for tile in self._tiles[self._next : self._next + size]]
        self._next += len(batch)
        return batch

    def learn(self, records: Sequence[TileRecord]) -> None:
        """Take the time of finished tiles into account."""
        self._done += len(records)
        self._seconds += sum(record.seconds for record in records)
