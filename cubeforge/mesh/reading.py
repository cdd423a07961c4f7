"""The one thing the mesh asks of a snapshot: cells of a patch, or of a part of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

Box = tuple[tuple[int, int, int], tuple[int, int, int]]
"""A part of a patch: first cell and one past the last, counted from the patch's own corner."""


class Read(Protocol):
    """Field arrays of one patch, or of the part `box`: field -> array (nx, ny, nz)."""

    def __call__(
        self, patch: int, fields: Sequence[str], box: Box | None = None, /
    ) -> Mapping[str, npt.NDArray[np.floating[Any]]]:
        """Cells of `patch`; errors are the reader's."""
        ...
