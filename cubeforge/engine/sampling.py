"""How well the rays sample the image: from the job to the march, and from the maps to one number."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from cubeforge.cube.tiles import Cube
from cubeforge.engine.plan import INTEGRATED, SAMPLING_ERROR
from cubeforge.engine.setup import Setup
from cubeforge.transfer.subrays import Sampling, adaptive_sampling, fixed_sampling

PERCENT_ABOVE = 1
"""Percentage of the pixels whose sampling error may be larger than what is reported."""


def sampling(setup: Setup) -> Sampling:
    """Where the job wants sub-rays."""
    section = setup.job.rays
    cells = setup.level_cell / setup.view.pixel
    if section.per_side == "auto":
        return adaptive_sampling(cells, section.spacing, section.most, section.error)
    return fixed_sampling(int(section.per_side), cells, section.error)


class Largest:
    """The largest `count` of many numbers, in the memory of about twice as many."""

    def __init__(self, count: int) -> None:
        self.count = count
        self._parts: list[npt.NDArray[np.float64]] = []
        self._held = 0

    def add(self, values: npt.NDArray[np.float64]) -> None:
        """Look at more numbers; NaN counts as the largest."""
        self._parts.append(values.ravel())
        self._held += values.size
        if self._held > 2 * self.count + values.size:
            self._parts = [self.values()]
            self._held = self._parts[0].size

    def values(self) -> npt.NDArray[np.float64]:
        """Those found, in any order."""
        together = np.concatenate([np.empty(0), *self._parts])
        if together.size > self.count:
            together = np.partition(together, together.size - self.count)[-self.count :]
        return together


def sampling_error(cube: Cube) -> float | None:
    """99th percentile of the sampling error relative to the image's largest integrated brightness.

    The percentile is the smallest error that at most 1 % of all pixels exceed. None for a cube without these maps, 0
    for one without any brightness.
    """
    names = [name for name, _ in cube.spec.maps]
    if SAMPLING_ERROR not in names:
        return None
    brightest = 0.0
    largest = Largest(cube.spec.shape[1] * cube.spec.shape[2] * PERCENT_ABOVE // 100 + 1)
    for tile in range(cube.spec.tiles):
        maps = cube.read_maps(tile)
        brightest = max(brightest, float(np.abs(maps[names.index(INTEGRATED)]).max()))
        largest.add(maps[names.index(SAMPLING_ERROR)])
    return float(largest.values().min()) / brightest if brightest > 0.0 else 0.0
