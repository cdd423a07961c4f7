"""The plan: everything about a render that is known before it runs, in numbers that can be checked."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator
from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge._version import VERSION
from cubeforge.cube.spec import CubeSpec
from cubeforge.engine.setup import Setup
from cubeforge.errors import PlanError
from cubeforge.job import Job
from cubeforge.quantities import show_bytes
from cubeforge.transfer.gather_kernels import CELL_HEAD, CELL_LINE
from cubeforge.transfer.march_kernels import BLOCK

NUMERICAL_VERSION = 2
"""Raised by every change of the code that changes pixels."""
COLUMN, INTEGRATED, SAMPLING_ERROR = "column", "integrated", "sampling_error"
"""Names of by-products: mass column; brightness above the background, integrated over velocity; its sampling error."""
BUILD_NUMBERS = {"constant": 15, "linear": 30}
"""Float64 numbers a cell that turning a patch into its optical form takes at the most, by the kind of reconstruction:
measured with stored momenta and pressure of 64 bits (`tests/memory/test_memory_budget.py`)."""
TILES_LOOKED_AT, BLOCKS_LOOKED_AT = 2000, 16
"""Tiles with the most patches whose bytes are summed, and heaviest tiles whose blocks of pixels are."""


@dataclass(frozen=True)
class Plan:
    """Numbers of a render; reads no field data.

    Attributes
    ----------
    spec : CubeSpec
        The cube to be.
    tiles : int
    tile : int
        Pixels a side.
    patches : int
        Patches in view, copies of a periodic domain counted once.
    patches_of_tile : tuple of 3 ints
        Fewest, median and most behind one tile.
    read_bytes : int
        Bytes on disk of the patches in view.
    optical_bytes : int
        Their size in memory as the march reads them.
    cube_bytes, fits_bytes : int
        Before compression, and as FITS.
    channels, nodes : int
        Channels, and velocities sampled in each.
    tile_bytes : int
        Memory of one tile under way, without patches.
    group_bytes : int
        Largest number of bytes of patches behind one tile.
    block_bytes : int
        Largest number of bytes of patches behind one block of pixels, the least that must be held at once.
    build_bytes : int
        Memory for turning one patch into its optical form.
    caveats : tuple of str
    """

    spec: CubeSpec
    tiles: int
    tile: int
    patches: int
    patches_of_tile: tuple[int, int, int]
    read_bytes: int
    optical_bytes: int
    cube_bytes: int
    fits_bytes: int
    channels: int
    nodes: int
    tile_bytes: int
    group_bytes: int
    block_bytes: int
    build_bytes: int
    caveats: tuple[str, ...] = field(default=())

    def least_memory(self, threads: int) -> int:
        """Bytes a worker with `threads` threads must be given at least."""
        return threads * (self.tile_bytes + self.block_bytes + self.build_bytes)

    def share(self, memory: int, threads: int) -> tuple[int, int]:
        """Split a worker's memory: bytes for the cache, and bytes of patches that one thread may hold.

        Raises
        ------
        PlanError
            The memory is too small, with what would do.
        """
        free = memory - threads * (self.tile_bytes + self.build_bytes)
        if memory < self.least_memory(threads):
            raise PlanError(
                f"memory: {show_bytes(memory)} is too little for a worker (threads: {threads}); this render needs "
                f"{show_bytes(self.least_memory(threads))}: for each thread {show_bytes(self.tile_bytes)} for a "
                f"tile, {show_bytes(self.block_bytes)} for the patches behind {BLOCK} x {BLOCK} pixels and "
                f"{show_bytes(self.build_bytes)} to prepare a patch; fewer threads, smaller tiles or fewer "
                "channels would do with less"
            )
        held = min(self.group_bytes, max(self.block_bytes, free // (2 * threads)))
        return free - threads * held, held

    def summary(self) -> dict[str, Any]:
        """Plain numbers, for JSON."""
        out = asdict(self)
        out["spec"] = json.loads(self.spec.to_json())
        return out


def tile_area(setup: Setup, tile: int) -> tuple[int, int, int, int]:
    """Pixels ``x0, x1, y0, y1`` of a tile; ids run along x first."""
    size = setup.tile
    columns = -(-setup.view.nx // size)
    row, column = divmod(tile, columns)
    return (
        column * size,
        min((column + 1) * size, setup.view.nx),
        row * size,
        min((row + 1) * size, setup.view.ny),
    )


def cell_bytes(lines: int) -> int:
    """Bytes of a cell of an optical patch."""
    return 4 * (CELL_HEAD + CELL_LINE * lines)


def entry_bytes(setup: Setup) -> npt.NDArray[np.int64]:
    """Optical bytes of each entry of the scene, shape (entries,)."""
    return np.asarray(setup.hierarchy.cells(setup.scene.patch) * cell_bytes(1))


def _bytes_behind(setup: Setup, sizes: npt.NDArray[np.int64], area: tuple[int, int, int, int]) -> int:
    entries = setup.sky.patches_in(*area)
    patches, first = np.unique(setup.scene.patch[entries], return_index=True)
    return int(sizes[entries[first]].sum()) if len(patches) else 0


def _behind(setup: Setup) -> tuple[int, int]:
    """Most bytes of patches behind a tile, and behind a block of pixels; looked for in the fullest tiles."""
    sizes = entry_bytes(setup)
    fullest = np.argsort(setup.sky.counts().ravel(), kind="stable")[::-1][:TILES_LOOKED_AT]
    areas = [tile_area(setup, int(tile)) for tile in fullest]
    behind = np.array([_bytes_behind(setup, sizes, area) for area in areas])
    heaviest = np.argsort(behind, kind="stable")[::-1][:BLOCKS_LOOKED_AT]
    return int(behind.max()), max(_fullest_block(setup, sizes, areas[index]) for index in heaviest)


def _fullest_block(setup: Setup, sizes: npt.NDArray[np.int64], area: tuple[int, int, int, int]) -> int:
    x0, x1, y0, y1 = area
    best = 0
    for by in range(y0 // BLOCK, (y1 - 1) // BLOCK + 1):
        for bx in range(x0 // BLOCK, (x1 - 1) // BLOCK + 1):
            block = (bx * BLOCK, bx * BLOCK + BLOCK, by * BLOCK, by * BLOCK + BLOCK)
            best = max(best, _bytes_behind(setup, sizes, block))
    return best


def _flat(value: Any, name: str) -> Iterator[tuple[str, str]]:
    """Dotted key and value of everything in nested dictionaries; what is not given is left out."""
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from _flat(inner, f"{name}.{key}")
    elif value is not None:
        yield name, json.dumps(value)


def fingerprint_parts(setup: Setup) -> dict[str, str]:
    """What changes the pixels, key by key.

    Left out are paths, and what only decides whether a cube comes about: `gas.bad_cells` and `channels.outside`.
    """
    job = setup.job
    left_out = {
        "snapshot": {"path"}, "gas": {"bad_cells"}, "line": {"molecule"}, "view": {"pixel"},
        "channels": {"outside"}, "output": {"cube", "tile"},
    }  # fmt: skip
    return dict(_flat(job.model_dump(mode="json", exclude=left_out), "job")) | {
        # As a length, however it was written.
        "job.view.pixel": json.dumps(job.view.pixel_length),
        "snapshot": setup.snapshot.identity,
        "molecule": setup.molecule.digest,
        "tile": str(setup.tile),
        "numerical version": str(NUMERICAL_VERSION),
    }


def maps_of(job: Job) -> tuple[tuple[str, str], ...]:
    """By-products of a render, name and unit."""
    maps = [(COLUMN, "g cm-2")]
    if job.rays.error:
        unit = f"{job.output.brightness} km/s"
        maps += [(INTEGRATED, unit), (SAMPLING_ERROR, unit)]
    return tuple(maps)


def cube_spec(setup: Setup) -> CubeSpec:
    """The cube that a setup will become."""
    parts = fingerprint_parts(setup)
    digest = hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()
    job, view = setup.job, setup.view
    degree = 180.0 / np.pi
    return CubeSpec(
        shape=(setup.band.count, view.ny, view.nx),
        tile=(setup.tile, setup.tile),
        velocity_start=setup.band.first,
        velocity_width=setup.band.width,
        rest_frequency=setup.line.frequency,
        pixel_rad=job.view.pixel_length / job.view.distance,
        centre_lon=job.view.sky.longitude * degree,
        centre_lat=job.view.sky.latitude * degree,
        unit=job.output.brightness,
        background_K=job.line.background,
        molecule=setup.molecule.name,
        line=setup.line.name,
        fingerprint=digest,
        fingerprint_parts=parts,
        absolute=job.output.background == "kept",
        maps=maps_of(job),
        history=(
            f"cubeforge {VERSION}",
            f"snapshot {setup.snapshot.path}",
            f"snapshot identity {setup.snapshot.identity}",
            f"molecule {setup.molecule.name} {setup.molecule.digest}",
            *(f"{name} {value}" for name, value in parts.items() if name.startswith("job.")),
        ),
    )


def make_plan(setup: Setup) -> Plan:
    """Count tiles, patches, bytes and memory."""
    spec = cube_spec(setup)
    spec.validate()
    patches = np.unique(setup.scene.patch)
    counts = np.sort(setup.sky.counts().ravel())
    group, block = _behind(setup)
    channels, ny, nx = spec.shape
    cells = setup.hierarchy.cells(patches)
    nodes = len(setup.band.nodes)
    return Plan(
        spec=spec,
        tiles=spec.tiles,
        tile=setup.tile,
        patches=len(patches),
        patches_of_tile=(int(counts[0]), int(counts[len(counts) // 2]), int(counts[-1])),
        read_bytes=int(setup.snapshot.read_bytes(patches, setup.gas.required_fields()).sum()),
        optical_bytes=int(cells.sum()) * cell_bytes(1),
        cube_bytes=spec.intensity_bytes + 8 * len(spec.maps) * ny * nx,
        fits_bytes=-(-spec.intensity_bytes // 2880) * 2880 + 2 * 2880,
        channels=channels,
        nodes=nodes,
        # The image and its copies in the unit of the cube, compressed, and on the way to disk, likewise the maps; a
        # ray's state.
        tile_bytes=(4 * 4 * channels + 8 * 4 * len(spec.maps)) * setup.tile**2 + 40 * channels * nodes,
        group_bytes=group,
        block_bytes=block,
        build_bytes=8 * BUILD_NUMBERS[setup.job.march.reconstruction] * int(cells.max(initial=0)),
        caveats=setup.caveats,
    )
