"""Tiles in and out of the store, creation, and the plan that a cube belongs to."""

from __future__ import annotations

import dataclasses
import os
import pickle
import signal
import subprocess
import sys
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numcodecs.blosc
import numpy as np
import pytest

from cubeforge.cube.spec import CubeSpec
from cubeforge.cube.store import create_cube, open_cube
from cubeforge.cube.tiles import tile_checksum
from cubeforge.errors import CubeError


def _files(folder: Path) -> set[str]:
    return {str(path.relative_to(folder)) for path in folder.rglob("*") if path.is_file()}


def test_every_tile_comes_back(filled: Callable[..., Any]) -> None:
    made = filled()
    for tile in range(made.cube.spec.tiles):
        intensity, maps = open_cube(made.cube.path).read_tile(tile)
        here = (slice(None), *made.cube.spec.tile_slices(tile))
        assert intensity.tobytes() == made.intensity[here].tobytes()
        assert maps.tobytes() == made.maps[here].tobytes()


def test_one_object_a_tile_and_array(filled: Callable[..., Any]) -> None:
    made = filled()
    for name in ("intensity", "maps"):
        found = _files(made.cube.path / name / "c")
        assert found == {f"0/{row}/{column}" for row in range(3) for column in range(3)}


def test_unwritten_tiles_are_nan_and_not_stored(filled: Callable[..., Any]) -> None:
    cube = filled(skip=(4,)).cube
    intensity, maps = cube.read_tile(4)
    assert np.isnan(intensity).all()
    assert np.isnan(maps).all()
    assert np.flatnonzero(~cube.stored_tiles()).tolist() == [4]
    assert not cube.stored(4)


@pytest.mark.parametrize("value", [0.0, -0.0, np.nan, np.inf])
def test_uniform_tiles_are_stored(filled: Callable[..., Any], value: float) -> None:
    cube = filled(skip=(0, 8)).cube
    for tile in (0, 8):
        shape = cube.spec.tile_shape(tile)
        intensity, maps = np.full((7, *shape), value, np.float32), np.full((2, *shape), value)
        cube.write_tile(tile, intensity, maps)
        assert cube.stored(tile)
        assert cube.read_tile(tile)[0].tobytes() == intensity.tobytes()
        assert cube.read_tile(tile)[1].tobytes() == maps.tobytes()


def test_a_tile_is_read_and_written_without_touching_others(filled: Callable[..., Any]) -> None:
    made = filled()
    cube = made.cube
    for tile in range(cube.spec.tiles):
        if tile != 8:
            cube.object_path("intensity", tile).write_bytes(b"not a chunk")
            cube.object_path("maps", tile).write_bytes(b"not a chunk")
    here = (slice(None), *cube.spec.tile_slices(8))
    assert np.array_equal(cube.read_tile(8)[0], made.intensity[here])
    # A tile at the edge fills its chunk partly; the old, damaged object must not matter.
    cube.object_path("intensity", 8).write_bytes(b"not a chunk")
    cube.write_tile(8, made.intensity[here], made.maps[here])
    assert np.array_equal(cube.read_tile(8)[0], made.intensity[here])
    with pytest.raises(CubeError, match=r"/c/0/0/1: tile 1 cannot be decoded .* delete this file"):
        cube.read_tile(1)


def test_checksum_sees_every_byte_and_both_arrays() -> None:
    rng = np.random.default_rng(1)
    intensity, maps = rng.standard_normal((2, 3, 4)).astype("f4"), rng.standard_normal((1, 3, 4))
    reference = tile_checksum(intensity, maps)
    assert tile_checksum(intensity.astype(">f4"), maps.astype(">f8")) == reference
    assert tile_checksum(np.asfortranarray(intensity), maps) == reference
    for array in (intensity, maps):
        for index in range(array.nbytes):
            array.view("u1").reshape(-1)[index] ^= 1
            assert tile_checksum(intensity, maps) != reference
            array.view("u1").reshape(-1)[index] ^= 1


def _crc32(data: bytes) -> int:
    """CRC-32 bit by bit, straight from its definition: reflected polynomial 0xEDB88320 (ITU-T V.42)."""
    crc = 0xFFFFFFFF
    for byte in data:
        crc ^= byte
        for _ in range(8):
            crc = (crc >> 1) ^ (0xEDB88320 if crc & 1 else 0)
    return crc ^ 0xFFFFFFFF


def test_checksum_is_two_crc32() -> None:
    # The published check value of this CRC (Williams 1993, A painless guide to CRC error detection).
    assert _crc32(b"123456789") == 0xCBF43926
    intensity, maps = np.arange(6, dtype="<f4").reshape(1, 2, 3), np.arange(6, dtype="<f8").reshape(1, 2, 3)
    assert tile_checksum(intensity, maps) == _crc32(intensity.tobytes()) | _crc32(maps.tobytes()) << 32


def test_equal_tiles_are_equal_files(filled: Callable[..., Any]) -> None:
    first, second = filled("first.zarr"), filled("second.zarr")
    assert not numcodecs.blosc.use_threads
    names = {name for name in _files(first.cube.path) if not name.startswith("ledger")}
    assert len(names) > 18
    for name in names:
        assert (first.cube.path / name).read_bytes() == (second.cube.path / name).read_bytes()


def test_many_threads_write_at_once(tmp_path: Path, spec: CubeSpec) -> None:
    small = dataclasses.replace(spec, tile=(4, 4))
    create_cube(tmp_path / "c", small)
    cube = open_cube(tmp_path / "c")
    rng = np.random.default_rng(2)
    intensity = rng.standard_normal(small.shape).astype("f4")
    maps = rng.standard_normal((2, *small.shape[1:]))

    def write(tile: int) -> int:
        here = (slice(None), *small.tile_slices(tile))
        return cube.write_tile(tile, intensity[here], maps[here])

    with ThreadPoolExecutor(16) as pool:
        checksums = list(pool.map(write, range(small.tiles)))
    assert cube.stored_tiles().all()
    assert checksums == [tile_checksum(*cube.read_tile(tile)) for tile in range(small.tiles)]


def test_pickle_is_small_and_works(filled: Callable[..., Any]) -> None:
    made = filled()
    text = pickle.dumps(made.cube)
    assert len(text) < 8000
    again = pickle.loads(text)
    assert np.array_equal(again.read_tile(3)[0], made.cube.read_tile(3)[0])
    here = (slice(None), *made.cube.spec.tile_slices(3))
    again.write_tile(3, made.intensity[here], made.maps[here])


def test_wrong_shape_or_type_is_refused(filled: Callable[..., Any]) -> None:
    cube = filled().cube
    good, maps = np.zeros((7, 16, 32), "f4"), np.zeros((2, 16, 32))
    for intensity, by_products, message in (
        (good[:, :13], maps, r"intensity of tile 0 is float32 \(7, 13, 32\); wanted float32 \(7, 16, 32\)"),
        (good.astype("f8"), maps, "float64"),
        (good, maps[:1], r"maps of tile 0 is float64 \(1, 16, 32\)"),
        (good, None, r"maps of tile 0 is float64 \(0, 16, 32\)"),
    ):
        with pytest.raises(CubeError, match=message):
            cube.write_tile(0, intensity, by_products)


def test_a_cube_without_maps(filled: Callable[..., Any]) -> None:
    made = filled(maps=())
    assert made.cube.read_tile(0)[1].shape == (0, 16, 32)
    assert not (made.cube.path / "maps").exists()
    assert made.cube.stored_tiles().all()


# -- creation -----------------------------------------------------------------------------------------------


def test_spec_comes_back(tmp_path: Path, spec: CubeSpec) -> None:
    create_cube(tmp_path / "sub" / "c.zarr", spec)
    assert open_cube(tmp_path / "sub" / "c.zarr").spec == spec
    assert [path.name for path in (tmp_path / "sub").iterdir()] == ["c.zarr"]


def test_an_existing_cube_is_not_replaced(filled: Callable[..., Any]) -> None:
    cube = filled().cube
    with pytest.raises(CubeError, match="a cube is there already; resume it"):
        create_cube(cube.path, cube.spec)
    assert cube.stored_tiles().all()


def test_foreign_data_are_not_touched(tmp_path: Path, spec: CubeSpec) -> None:
    folder, file = tmp_path / "folder", tmp_path / "file"
    folder.mkdir()
    (folder / "thesis.tex").write_text("years of work")
    file.write_text("more")
    for path in (folder, file):
        with pytest.raises(CubeError, match="nothing was touched"):
            create_cube(path, spec)
        with pytest.raises(CubeError, match="is not a cube"):
            open_cube(path)
    assert (folder / "thesis.tex").read_text() == "years of work"
    assert file.read_text() == "more"


def test_an_empty_folder_is_taken(tmp_path: Path, spec: CubeSpec) -> None:
    (tmp_path / "c").mkdir()
    create_cube(tmp_path / "c", spec)
    assert open_cube(tmp_path / "c").spec == spec


@pytest.mark.parametrize("damage", ["missing", "foreign", "torn", "layout", "no intensity", "chunks"])
def test_damaged_cubes_are_refused(filled: Callable[..., Any], damage: str) -> None:
    path = filled().cube.path
    top, inner = path / "zarr.json", path / "intensity" / "zarr.json"
    text = top.read_text()
    message = "damaged"
    if damage == "missing":
        top.unlink()
        message = "no zarr.json"
    elif damage == "foreign":
        top.write_text('{"attributes": {}, "zarr_format": 3, "node_type": "group"}')
    elif damage == "torn":
        top.write_text(text[: len(text) // 2])
    elif damage == "layout":
        top.write_text(text.replace('"layout": 1', '"layout": 99'))
        message = "layout 99"
    elif damage == "no intensity":
        inner.unlink()
    else:
        inner.write_text(inner.read_text().replace("16,", "8,"))
        message = r"intensity has shape, chunks .* wanted"
    with pytest.raises(CubeError, match=message):
        open_cube(path)


def test_no_such_cube(tmp_path: Path) -> None:
    with pytest.raises(CubeError, match="does not exist"):
        open_cube(tmp_path / "nowhere")


@pytest.mark.fault
@pytest.mark.slow
def test_killed_creation_leaves_nothing_in_the_way(tmp_path: Path, spec: CubeSpec) -> None:
    """Killed at many different moments: a rerun succeeds each time, and cleans up."""
    path = tmp_path / "c.zarr"
    script = (
        "import os, signal, sys\n"
        "from cubeforge.cube import durable, spec, store\n"
        "left = int(sys.argv[2])\n"
        "def counted(folder, fsync=durable.fsync_folder):\n"
        "    global left\n"
        "    fsync(folder)\n"
        "    left -= 1\n"
        "    if left == 0: os.kill(os.getpid(), signal.SIGKILL)\n"
        "durable.fsync_folder = store.fsync_folder = counted\n"
        "store.create_cube(sys.argv[1], spec.CubeSpec.from_json(sys.argv[3]))\n"
    )
    killed = 0
    for moment in (1, 4, 12, 16, 40):
        run = [sys.executable, "-c", script, str(path), str(moment), spec.to_json()]
        killed += subprocess.run(run, check=False).returncode == -signal.SIGKILL
        if not path.exists():
            assert len(list(tmp_path.iterdir())) == 1
            create_cube(path, spec)
        assert open_cube(path).spec == spec
        assert [each.name for each in tmp_path.iterdir()] == ["c.zarr"]
        os.rename(path, tmp_path.parent / f"{tmp_path.name}-{moment}")
    assert killed >= 3


# -- plans --------------------------------------------------------------------------------------------------


def test_the_same_plan_passes(filled: Callable[..., Any], spec: CubeSpec) -> None:
    cube = filled().cube
    cube.check_plan(spec)
    cube.check_plan(dataclasses.replace(spec, history=("from another folder",)))


def test_another_plan_is_named(filled: Callable[..., Any], spec: CubeSpec) -> None:
    cube = filled().cube
    parts = {"snapshot": "cccc", "job": "bbbb", "molecule": "dddd"}
    other = dataclasses.replace(spec, fingerprint="ffff", fingerprint_parts=parts)
    with pytest.raises(CubeError) as error:
        cube.check_plan(other)
    text = str(error.value)
    assert "snapshot: the cube has aaaa, now cccc" in text
    assert "molecule: the cube has nothing, now dddd" in text
    assert "job:" not in text
    with pytest.raises(CubeError, match="fingerprint: the cube has 0123456789abcdef, now ffff"):
        cube.check_plan(dataclasses.replace(spec, fingerprint="ffff"))
    with pytest.raises(CubeError, match=r"tile: the cube has \(16, 32\), now \(8, 8\)"):
        cube.check_plan(dataclasses.replace(spec, tile=(8, 8)))
