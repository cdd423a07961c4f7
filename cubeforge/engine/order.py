"""The order of tiles: neighbours stay together, so that patches read for one serve the next."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt


def _spread(values: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
    """Put a zero bit between the bits of numbers below 2^31."""
    out = values.astype(np.int64)
    for shift, mask in ((16, 0x0000FFFF0000FFFF), (8, 0x00FF00FF00FF00FF), (4, 0x0F0F0F0F0F0F0F0F),
                        (2, 0x3333333333333333), (1, 0x5555555555555555)):  # fmt: skip
        out = (out | (out << shift)) & mask
    return out


def z_order(rows: int, columns: int) -> npt.NDArray[np.int64]:
    """Tile ids (row-major numbers) of a grid along the Z-shaped curve of Morton (1966)."""
    row, column = np.divmod(np.arange(rows * columns, dtype=np.int64), columns)
    return np.argsort(_spread(column) | (_spread(row) << 1), kind="stable")
