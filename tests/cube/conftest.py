"""Small cubes to test with."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cubeforge.cube.ledger import LedgerWriter, TileRecord
from cubeforge.cube.spec import CubeSpec
from cubeforge.cube.store import Cube, create_cube, open_cube

SPEC = CubeSpec(
    shape=(7, 45, 70),
    tile=(16, 32),
    velocity_start=-3.3e5,
    velocity_width=2.5e4,
    rest_frequency=115.2712018e9,
    pixel_rad=2.5e-5,
    centre_lon=83.8,
    centre_lat=-35.4,
    unit="K",
    background_K=2.725,
    molecule="CO",
    line="1-0",
    fingerprint="0123456789abcdef",
    fingerprint_parts={"snapshot": "aaaa", "job": "bbbb"},
    maps=(("column", "g cm-2"), ("peak_depth", "")),
    history=("snapshot of a turbulent box", "seen along the z axis"),
)


@pytest.fixture
def spec() -> CubeSpec:
    """Tiles at the far edges are 13 rows and 6 columns, not 16 and 32."""
    return SPEC


@dataclasses.dataclass
class Filled:
    """A finished cube and what was put into it."""

    cube: Cube
    intensity: Any
    maps: Any


@pytest.fixture
def filled(tmp_path: Path) -> Callable[..., Filled]:
    """Create a cube with random pixels; `skip` tiles stay unwritten, `**changes` go into the spec."""

    def make(name: str = "cube.zarr", *, skip: tuple[int, ...] = (), **changes: Any) -> Filled:
        spec = dataclasses.replace(SPEC, **changes)
        create_cube(tmp_path / name, spec)
        cube = open_cube(tmp_path / name)
        rng = np.random.default_rng(5)
        intensity = rng.standard_normal(spec.shape).astype(np.float32)
        maps = rng.standard_normal((len(spec.maps), *spec.shape[1:]))
        with LedgerWriter(cube.ledger, "run", ("peak",)) as ledger:
            for tile in range(spec.tiles):
                if tile in skip:
                    continue
                here = (slice(None), *spec.tile_slices(tile))
                checksum = cube.write_tile(tile, intensity[here], maps[here])
                ledger.append([TileRecord(tile, checksum, 1e9 + tile, 0.5, (float(tile),))])
        return Filled(cube, intensity, maps)

    return make
