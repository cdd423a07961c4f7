"""Whether the tiles that the ledger calls done are what it says they are."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from cubeforge.cube.ledger import read_ledger
from cubeforge.cube.tiles import Cube, tile_checksum
from cubeforge.errors import CubeError


@dataclass(frozen=True)
class Verification:
    """Outcome of `verify`.

    Attributes
    ----------
    checked : int
        Number of tiles that were looked at.
    missing : tuple of int
        Recorded as done, but an object of theirs does not exist.
    damaged : tuple of (tile, what is wrong)
        Not decodable, or decoded to another checksum than the recorded one.
    problems : tuple of str
        What is damaged in the ledger itself.
    """

    checked: int
    missing: tuple[int, ...]
    damaged: tuple[tuple[int, str], ...]
    problems: tuple[str, ...]

    @property
    def sound(self) -> bool:
        """Nothing missing, nothing damaged."""
        return not (self.missing or self.damaged or self.problems)


def verify(
    cube: Cube, tiles: Iterable[int] | None = None, *, sample: int | None = None, seed: int = 0
) -> Verification:
    """Decode done tiles and compare their checksums with the ledger.

    Parameters
    ----------
    cube : Cube
    tiles : iterable of int, optional
        Look at these only; CubeError for one that is not recorded as done. All done tiles by default.
    sample : int, optional
        Look at that many of them, drawn with `seed`.
    """
    state = read_ledger(cube.ledger)
    checksums = dict(zip(state.tiles.tolist(), state.records["checksum"].tolist(), strict=True))
    chosen = sorted(checksums) if tiles is None else list(tiles)
    unknown = [tile for tile in chosen if tile not in checksums]
    if unknown:
        raise CubeError(f"{cube.path}: {len(unknown)} tiles are not done, such as tile {unknown[0]}")
    if sample is not None and sample < len(chosen):
        picked = np.random.default_rng(seed).choice(len(chosen), sample, replace=False)
        chosen = [chosen[index] for index in np.sort(picked)]
    missing, damaged = [], []
    for tile in chosen:
        if not cube.stored(tile):
            missing.append(tile)
            continue
        try:
            found = tile_checksum(*cube.read_tile(tile))
        except CubeError as error:
            damaged.append((tile, str(error)))
            continue
        if found != checksums[tile]:
            damaged.append((tile, f"checksum {found:016x}, recorded as {checksums[tile]:016x}"))
    return Verification(len(chosen), tuple(missing), tuple(damaged), state.problems)
