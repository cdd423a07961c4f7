"""The tile worker: a pure function of a setup and a tile's number, giving the tile's pixels."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.engine.cache import Patch, PatchCache
from cubeforge.engine.patches import PATCH_STATISTICS, PatchMaker
from cubeforge.engine.plan import COLUMN, INTEGRATED, SAMPLING_ERROR, Plan, entry_bytes, make_plan, tile_area
from cubeforge.engine.sampling import sampling
from cubeforge.engine.setup import Setup
from cubeforge.quantities import JANSKY, KM_S, planck, rayleigh_jeans_factor
from cubeforge.transfer.gather_kernels import STATISTICS
from cubeforge.transfer.march_kernels import BLOCK, march_tile
from cubeforge.transfer.pointers import addresses

Area = tuple[int, int, int, int]


@dataclass(frozen=True)
class TileResult:
    """Pixels of one tile.

    Attributes
    ----------
    image : ndarray, shape (channels, y, x), float32
        In the cube's unit.
    maps : ndarray, shape (maps, y, x), float64
    statistics : tuple of float
        See `TILE_STATISTICS`.
    """

    image: npt.NDArray[np.float32]
    maps: npt.NDArray[np.float64]
    statistics: tuple[float, ...]


TILE_STATISTICS = (*STATISTICS, *PATCH_STATISTICS)
"""Statistics of a tile: what the march counts; what was counted in the patches whose first tile it is, so that a sum
over the tiles has each patch once; and the bytes that were read meanwhile."""

READ = PATCH_STATISTICS.index("read_bytes")


class TileWorker:
    """Renders tiles of one setup in one process; safe from several threads.

    Parameters
    ----------
    setup : Setup
    plan : Plan, optional
        Made from the setup if not given.
    memory : int, optional
        Bytes for patches and tiles together; unbounded without.
    threads : int
        Threads that will call `render` at the same time.
    systemic : float, optional
        Velocity added to the gas, cm/s; the job's number by default.

    Raises
    ------
    PlanError
        The memory is too small.
    """

    def __init__(
        self,
        setup: Setup,
        plan: Plan | None = None,
        *,
        memory: int | None = None,
        threads: int = 1,
        systemic: float | None = None,
    ) -> None:
        self.setup = setup
        self.plan = plan or make_plan(setup)
        cache, self._held = (2**62, 2**62) if memory is None else self.plan.share(memory, threads)
        given = setup.job.channels.systemic
        self._systemic = float(systemic if systemic is not None else (0.0 if given == "mean" else given))
        raw = cache // 4 if setup.job.march.reconstruction == "linear" else 0
        self._maker = PatchMaker(setup, self._systemic, raw)
        self._entry_bytes = entry_bytes(setup)
        self._sampling = sampling(setup)
        self._counts = np.zeros((setup.hierarchy.patches, len(PATCH_STATISTICS)))
        self._read: list[float] = []
        self.cache = PatchCache(self._load, cache - raw)

    def _load(self, patch: int) -> Patch:
        cells, self._counts[patch] = self._maker.make(patch)
        self._read.append(float(self._counts[patch, READ]))
        return cells

    def _groups(self, area: Area) -> Iterator[tuple[Area, npt.NDArray[np.int64]]]:
        """Cut an area until the patches behind each part fit; down to a block of pixels, never across one."""
        entries = self.setup.sky.patches_in(*area)
        _, first = np.unique(self.setup.scene.patch[entries], return_index=True)
        x0, x1, y0, y1 = area
        wide, high = (x1 - 1) // BLOCK > x0 // BLOCK, (y1 - 1) // BLOCK > y0 // BLOCK
        if self._entry_bytes[entries[first]].sum() <= self._held or not (wide or high):
            yield area, entries
            return
        if wide and (x1 - x0 >= y1 - y0 or not high):
            cut = max(x0 // BLOCK + 1, (x0 + x1) // (2 * BLOCK)) * BLOCK
            parts = ((x0, cut, y0, y1), (cut, x1, y0, y1))
        else:
            cut = max(y0 // BLOCK + 1, (y0 + y1) // (2 * BLOCK)) * BLOCK
            parts = ((x0, x1, y0, cut), (x0, x1, cut, y1))
        for part in parts:
            yield from self._groups(part)

    def _march(
        self, area: Area, entries: npt.NDArray[np.int64], statistics: npt.NDArray[Any]
    ) -> tuple[Any, Any, Any]:
        """Image, column and contrast of one group of pixels (see `march_tile`), in kelvins above the background."""
        scene, band = self.setup.scene, self.setup.band
        x0, x1, y0, y1 = area
        image = np.zeros((band.count, y1 - y0, x1 - x0), dtype=np.float32)
        column, contrast = np.zeros((2, y1 - y0, x1 - x0))
        rays = self._sampling
        patches = [self.cache.get(int(patch)) for patch in scene.patch[entries]]
        march_tile(
            np.array(area, dtype=np.int64), rays.lattice, rays.least, rays.most, rays.limit, scene.start,
            scene.step_x, scene.step_y, scene.direction, scene.box, scene.sphere, scene.cell, scene.lo[entries],
            scene.hi[entries], scene.level[entries], scene.scale, scene.rect[entries], addresses(patches), 1,
            np.zeros(1), band.nodes, band.weights, band.count, band.reach, band.cut, image, column,
            contrast, statistics,
        )  # fmt: skip
        return image, column, contrast

    def render(self, tile: int) -> TileResult:
        """Render one tile.

        Raises
        ------
        SnapshotError, GasError, ExcitationError
            A patch behind the tile cannot be read or used; the message names it.
        """
        x0, x1, y0, y1 = tile_area(self.setup, tile)
        image = np.zeros((self.setup.band.count, y1 - y0, x1 - x0), dtype=np.float32)
        column, contrast = np.zeros((2, y1 - y0, x1 - x0))
        statistics = np.zeros(len(STATISTICS))
        for area, entries in self._groups((x0, x1, y0, y1)):
            rows, columns = slice(area[2] - y0, area[3] - y0), slice(area[0] - x0, area[1] - x0)
            if len(entries):
                found = self._march(area, entries, statistics)
                image[:, rows, columns], column[rows, columns], contrast[rows, columns] = found
        counted = self._patch_statistics(tile, (x0, x1, y0, y1))
        maps = self._maps(image, column, contrast)
        return TileResult(self._in_unit(image), maps, (*statistics.tolist(), *counted.tolist()))

    def _maps(
        self, image: npt.NDArray[np.float32], column: npt.NDArray[Any], contrast: npt.NDArray[Any]
    ) -> npt.NDArray[np.float64]:
        """By-products in the order of the plan; `image` and `contrast` in kelvins above the background."""
        per_channel = self._per_kelvin * self.setup.band.width / KM_S
        known = {
            COLUMN: column,
            INTEGRATED: per_channel * image.sum(axis=0, dtype=np.float64),
            SAMPLING_ERROR: per_channel * np.abs(contrast),
        }
        return np.stack([known[name] for name, _ in self.plan.spec.maps])

    @property
    def _per_kelvin(self) -> float:
        """The cube's unit per kelvin of brightness."""
        spec = self.plan.spec
        if spec.unit == "K":
            return 1.0
        scale = 1.0 / (rayleigh_jeans_factor(spec.rest_frequency) * JANSKY)
        return float(scale * spec.pixel_rad**2 if spec.unit == "Jy/pixel" else scale)

    def _patch_statistics(self, tile: int, area: Area) -> npt.NDArray[np.float64]:
        """`PATCH_STATISTICS` of the patches whose first tile this is; bytes as they were read, each told once."""
        patches = np.unique(self.setup.scene.patch[self.setup.sky.patches_in(*area)])
        total: npt.NDArray[np.float64] = self._counts[patches[self.setup.home_tile[patches] == tile]].sum(
            axis=0
        )
        total[READ] = 0.0
        with contextlib.suppress(IndexError):
            while True:
                total[READ] += self._read.pop()
        return total

    def _in_unit(self, image: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
        """Kelvins above the background -> what the job asks for, in place."""
        spec = self.plan.spec
        factor = rayleigh_jeans_factor(spec.rest_frequency)
        if spec.absolute:
            image += np.float32(factor * planck(spec.rest_frequency, spec.background_K))
        if spec.unit != "K":
            image *= np.float32(self._per_kelvin)
        return image
