"""Fixtures for tests of more than one room."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Container, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from support.fixtures import co_file, real_data, tiny_snapshot  # noqa: F401

from cubeforge.cube.ledger import LedgerWriter, TileRecord
from cubeforge.cube.spec import CubeSpec
from cubeforge.cube.store import Cube, create_cube, open_cube

SPEC = CubeSpec(
    shape=(1, 1, 1),
    tile=(16, 16),
    velocity_start=-2.0e5,
    velocity_width=0.1e5,
    rest_frequency=110.2013543e9,
    pixel_rad=1.0e-5,
    centre_lon=68.5,
    centre_lat=26.2,
    unit="K",
    background_K=2.725,
    molecule="13CO",
    line="1-0",
    fingerprint="0123456789abcdef",
)


@pytest.fixture
def store_cube(tmp_path: Path) -> Callable[..., Cube]:
    """Write `intensity` (channels, ny, nx) and by-products into a new cube, its tiles into the ledger.

    Tiles in `skip` stay unwritten; `**changes` go into the spec; `maps` is {(name, unit): image}.
    """

    def store(
        intensity: Any,
        *,
        name: str = "cube.zarr",
        maps: Mapping[tuple[str, str], Any] | None = None,
        skip: Container[int] = (),
        **changes: Any,
    ) -> Cube:
        intensity = np.asarray(intensity, dtype=np.float32)
        maps = maps or {}
        spec = dataclasses.replace(SPEC, shape=intensity.shape, maps=tuple(maps), **changes)
        planes = np.array(list(maps.values()), dtype=np.float64).reshape(-1, *spec.shape[1:])
        create_cube(tmp_path / name, spec)
        cube = open_cube(tmp_path / name)
        with LedgerWriter(cube.ledger, "testrun") as ledger:
            for tile in range(spec.tiles):
                if tile not in skip:
                    along = (slice(None), *spec.tile_slices(tile))
                    checksum = cube.write_tile(tile, intensity[along], planes[along])
                    ledger.append([TileRecord(tile, checksum, 1.0 + tile, 0.5)])
        return cube

    return store
