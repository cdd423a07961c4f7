"""The description of a cube: tiles cover the image once, JSON keeps every bit, nonsense is refused."""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import numpy as np
import pytest

from cubeforge.cube.spec import CubeSpec
from cubeforge.errors import CubeError


def test_tiles_cover_each_pixel_once(spec: CubeSpec) -> None:
    count = np.zeros(spec.shape[1:], dtype=int)
    for tile in range(spec.tiles):
        along_y, along_x = spec.tile_slices(tile)
        count[along_y, along_x] += 1
        assert spec.tile_shape(tile) == count[along_y, along_x].shape
    assert spec.tiles == 9
    assert spec.tile_grid == (3, 3)
    assert np.all(count == 1)


def test_tiles_count_along_x_first(spec: CubeSpec) -> None:
    assert spec.tile_slices(1) == (slice(0, 16), slice(32, 64))
    assert spec.tile_slices(8) == (slice(32, 45), slice(64, 70))


@pytest.mark.parametrize("tile", [-1, 9])
def test_no_such_tile(spec: CubeSpec, tile: int) -> None:
    with pytest.raises(CubeError, match="tiles 0 to 8"):
        spec.tile_slices(tile)


def test_json_keeps_every_bit(spec: CubeSpec) -> None:
    odd = dataclasses.replace(spec, velocity_start=math.nextafter(-1e5, 0), pixel_rad=1 / 3e5, history=("é",))
    assert CubeSpec.from_json(odd.to_json()) == odd


@pytest.mark.parametrize("text", ["", "[]", "{}", '{"shape": 3}', "null"])
def test_damaged_json_is_refused(text: str) -> None:
    with pytest.raises(CubeError, match=r"here: .*damaged"):
        CubeSpec.from_json(text, where="here")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"shape": (0, 4, 4)}, "shape is"),
        ({"shape": (1, 4, 4.0)}, "shape is"),
        ({"tile": (4,)}, "tile is"),
        ({"velocity_width": 0.0}, "velocity_width is 0.0; wanted a positive"),
        ({"velocity_width": -1.0}, "velocity_width"),
        ({"rest_frequency": math.inf}, "rest_frequency"),
        ({"pixel_rad": math.nan}, "pixel_rad"),
        ({"velocity_start": math.nan}, "velocity_start"),
        ({"centre_lat": 91.0}, "centre_lat is 91.0; wanted -90 to 90"),
        ({"background_K": -1.0}, "background_K"),
        ({"unit": "Jy"}, "wanted one of K, Jy/sr, Jy/pixel"),
        ({"maps": (("a", ""), ("a", ""))}, "different plain words"),
        ({"maps": (("a/b", ""),)}, "different plain words"),
        ({"molecule": "CO\u207a"}, "ASCII"),
        ({"line": "1\n0"}, "ASCII"),
    ],
)
def test_nonsense_is_refused(spec: CubeSpec, change: dict[str, Any], message: str) -> None:
    with pytest.raises(CubeError, match=message):
        dataclasses.replace(spec, **change).validate()


def test_offsets_are_symmetric(spec: CubeSpec) -> None:
    for axis in (1, 2):
        offsets = spec.offsets(axis)
        np.testing.assert_allclose(offsets, -offsets[::-1], rtol=1e-14)
        np.testing.assert_allclose(np.diff(offsets), spec.pixel_rad, rtol=1e-9)
