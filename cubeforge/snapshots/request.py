"""Checks that every reader makes on what `read` is asked for."""

from __future__ import annotations

import operator
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError, nearest
from cubeforge.snapshots.base import Box


def check_fields(wanted: Sequence[str], known: Sequence[str], where: str) -> None:
    """Refuse a field that is not among `known`.

    Raises
    ------
    SnapshotError
        Naming the field, and the closest known one or all of them.
    """
    if isinstance(wanted, str):
        raise SnapshotError(f'{where}: fields must be a list of names, found the text "{wanted}"')
    for field in wanted:
        if field not in known:
            raise SnapshotError(f'{where} has no field "{field}"; {nearest(field, known)}')


def check_patch(patch: int, patches: int, where: str) -> int:
    """Return `patch` as an int, or refuse one that the hierarchy doesn't have (negative ones too)."""
    index = operator.index(patch)
    if not 0 <= index < patches:
        raise SnapshotError(f"{where} has no patch {index}: it has {patches}, counted from 0")
    return index


def check_box(
    box: Box | None, shape: npt.NDArray[np.integer], where: str
) -> tuple[tuple[int, int, int], tuple[int, int, int]]:
    """First cell and one past the last of `box` (None: the whole patch), as plain ints.

    Raises
    ------
    SnapshotError
        The box is empty or reaches outside the patch.
    """
    nx, ny, nz = (int(n) for n in shape)
    if box is None:
        return (0, 0, 0), (nx, ny, nz)
    (ax, ay, az), (bx, by, bz) = box
    lo, hi = (int(ax), int(ay), int(az)), (int(bx), int(by), int(bz))
    if not all(0 <= a < b <= n for a, b, n in zip(lo, hi, (nx, ny, nz), strict=True)):
        raise SnapshotError(
            f"{where}: box {lo} to {hi} is empty or outside the patch of {(nx, ny, nz)} cells"
        )
    return lo, hi
