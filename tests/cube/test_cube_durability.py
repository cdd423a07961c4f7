"""Killed writers, full disks, runs that lost the cube: no torn tile, no lost error, no litter."""

from __future__ import annotations

import dataclasses
import os
import resource
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cubeforge.cube import durable, tiles
from cubeforge.cube.durable import Staging, sweep, write_all
from cubeforge.cube.lease import Lease
from cubeforge.cube.ledger import LedgerWriter, TileRecord, read_ledger
from cubeforge.cube.spec import CubeSpec
from cubeforge.cube.store import create_cube, open_cube
from cubeforge.cube.verify import verify
from cubeforge.errors import CubeError, EngineError

# Writes tile after tile, each full of its own number, until it is killed.
WRITER = """
import sys, time
import numpy as np
from cubeforge.cube.lease import Lease
from cubeforge.cube.ledger import LedgerWriter, TileRecord
from cubeforge.cube.store import open_cube
from cubeforge.cube.verify import verify

rng = np.random.default_rng(int(sys.argv[2]))
with Lease(sys.argv[1]) as lease, LedgerWriter(open_cube(sys.argv[1]).ledger, lease.run) as ledger:
    cube = open_cube(sys.argv[1], run=lease.run)
    print("writing", flush=True)
    while True:
        tile = int(rng.integers(cube.spec.tiles))
        ty, tx = cube.spec.tile_shape(tile)
        noise = np.random.default_rng(tile)
        intensity = noise.standard_normal((cube.spec.shape[0], ty, tx)).astype("f4")
        maps = noise.standard_normal((len(cube.spec.maps), ty, tx))
        checksum = cube.write_tile(tile, intensity, maps)
        ledger.append([TileRecord(tile, checksum, time.time(), 0.0)])
"""


@pytest.mark.fault
@pytest.mark.slow
def test_killed_writers_tear_nothing(tmp_path: Path, spec: CubeSpec) -> None:
    path = tmp_path / "c.zarr"
    create_cube(path, dataclasses.replace(spec, shape=(100, 256, 256), tile=(64, 64)))
    cube = open_cube(path)
    rng = np.random.default_rng(7)
    litter = 0
    for round_ in range(5):
        run = [sys.executable, "-c", WRITER, str(path), str(round_)]
        writer = subprocess.Popen(run, stdout=subprocess.PIPE, text=True)
        assert writer.stdout is not None
        assert writer.stdout.readline() == "writing\n"
        # A random while, and then the moment at which a temporary file is seen.
        until = time.monotonic() + rng.uniform(0.1, 0.4)
        while time.monotonic() < until or not any(cube.ledger.glob("partial-*/*")):
            pass
        writer.send_signal(signal.SIGKILL)
        writer.wait()
        writer.stdout.close()
        litter += sum(1 for _ in cube.ledger.glob("partial-*/*"))
        assert len(list(cube.ledger.glob("lease-*"))) == 1
        outcome = verify(cube)
        assert outcome.sound, outcome
    assert outcome.checked > 0
    # Also tiles that were stored and not yet recorded are whole.
    for tile in np.flatnonzero(cube.stored_tiles()):
        wanted = np.random.default_rng(tile).standard_normal((100, 64, 64)).astype("f4")
        assert np.array_equal(cube.read_tile(int(tile))[0], wanted)
    assert litter > 0, "no kill hit a write: the test has shown nothing"
    # The dead process ran here, so nobody has to wait for its beat.
    start = time.monotonic()
    with Lease(path) as lease:
        assert time.monotonic() - start < 15
        assert {each.name for each in cube.ledger.glob("partial-*")} == {f"partial-{lease.run}"}
        assert {each.name for each in cube.ledger.glob("lease-*")} == {f"lease-{lease.run}"}
    names = {each.suffix for each in cube.ledger.iterdir()}
    assert names == {".tiles", ".json"}


def test_every_write_is_flushed_before_and_after_its_rename(
    filled: Callable[..., Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The order that makes a file whole or absent after a power cut (common practice)."""
    cube = filled().cube
    events: list[str] = []
    fsync, replace = os.fsync, os.replace

    def watched_fsync(descriptor: int) -> None:
        name = os.readlink(f"/proc/self/fd/{descriptor}")
        events.append("flush " + ("folder " + Path(name).name if Path(name).is_dir() else "file"))
        fsync(descriptor)

    def watched_replace(old: Path, new: Path) -> None:
        events.append(f"rename {'/'.join(Path(new).parts[-5:])}")
        replace(old, new)

    monkeypatch.setattr(durable.os, "fsync", watched_fsync)
    monkeypatch.setattr(durable.os, "replace", watched_replace)
    cube.write_tile(4, np.ones((7, 16, 32), "f4"), np.ones((2, 16, 32)))
    assert events == [
        "flush file",
        "rename intensity/c/0/1/1",
        "flush folder 1",
        "flush file",
        "rename maps/c/0/1/1",
        "flush folder 1",
    ]


@pytest.fixture
def full_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of 1 MiB in memory."""
    mount = tmp_path / "small"
    mount.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(mount)]
    if subprocess.run(command, check=False, capture_output=True).returncode:
        pytest.skip("mounting a tmpfs needs root")
    yield mount
    subprocess.run(["umount", "--lazy", str(mount)], check=True)


def test_full_disk(full_disk: Path, spec: CubeSpec) -> None:
    path = full_disk / "c.zarr"
    create_cube(path, dataclasses.replace(spec, shape=(50, 256, 256), tile=(64, 64)))
    cube = open_cube(path)
    rng = np.random.default_rng(3)
    written: list[int] = []

    def fill(ledger: LedgerWriter) -> None:
        for tile in range(cube.spec.tiles):
            intensity = rng.standard_normal((50, 64, 64)).astype("f4")
            checksum = cube.write_tile(tile, intensity, np.zeros((2, 64, 64)))
            ledger.append([TileRecord(tile, checksum, 0.0, 0.0)])
            written.append(tile)

    message = r"/c/0/.*disk is full; .*KiB were to be written, .* are free"
    with LedgerWriter(cube.ledger, "run") as ledger, pytest.raises(EngineError, match=message):
        fill(ledger)
    assert 0 < len(written) < 16
    outcome = verify(cube)
    assert outcome.sound
    assert outcome.checked == len(written)
    # The tile that did not fit: nothing under its final name, nothing beside.
    assert not cube.stored(len(written))
    assert not list(cube.ledger.glob("partial-*/*"))
    # Room again: it goes on.
    cube.object_path("intensity", 0).unlink()
    cube.write_tile(len(written), np.zeros((50, 64, 64), "f4"), np.zeros((2, 64, 64)))
    assert cube.stored(len(written))


def test_full_disk_ledger(tmp_path: Path) -> None:
    """A limit on the file's size cuts a write short in the middle of a record, as a full disk does."""
    with LedgerWriter(tmp_path, "run") as ledger:
        ledger.append([TileRecord(1, 11, 0.0, 0.0)])
        size = ledger.path.stat().st_size
        soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
        resource.setrlimit(resource.RLIMIT_FSIZE, (size + 50, hard))
        try:
            with pytest.raises(EngineError, match=r"tiles: files may not be that large; 108 B were to be"):
                ledger.append([TileRecord(tile, 0, 0.0, 0.0) for tile in (2, 3, 4)])
        finally:
            resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        assert ledger.path.stat().st_size == size
        ledger.append([TileRecord(5, 55, 0.0, 0.0)])
    state = read_ledger(tmp_path)
    assert state.tiles.tolist() == [1, 5]
    assert state.torn_bytes == 0
    assert state.problems == ()


def test_short_writes_are_continued(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    write, pwrite = os.write, os.pwrite
    monkeypatch.setattr(durable.os, "write", lambda file, data: write(file, data[:7]))
    monkeypatch.setattr(durable.os, "pwrite", lambda file, data, at: pwrite(file, data[:7], at))
    with open(tmp_path / "f", "w+b", buffering=0) as file:
        write_all(file.fileno(), np.arange(10, dtype="u1"))
        write_all(file.fileno(), np.arange(10, 30, dtype="<u2"), 10)
    assert (tmp_path / "f").read_bytes() == bytes(range(10)) + np.arange(10, 30, dtype="<u2").tobytes()


def test_a_run_that_lost_the_cube_stops_writing(filled: Callable[..., Any]) -> None:
    path = filled().cube.path
    intensity, maps = np.ones((7, 16, 32), "f4"), np.ones((2, 16, 32))
    with Lease(path) as lease:
        cube = open_cube(path, run=lease.run)
        checksum = cube.write_tile(0, intensity, maps)
        sweep(cube.ledger, lease.run)
        with pytest.raises(CubeError, match=f"run {lease.run} does not hold this cube"):
            cube.write_tile(1, intensity, maps)
    with pytest.raises(CubeError, match="does not hold this cube"):
        cube.write_tile(1, intensity, maps)
    assert checksum == tiles.tile_checksum(*cube.read_tile(0))


def test_swept_between_write_and_rename(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "partial-r").mkdir()
    staging = Staging(tmp_path, "r", create=False)
    fsync = os.fsync

    def swept(descriptor: int) -> None:
        fsync(descriptor)
        monkeypatch.setattr(durable.os, "fsync", fsync)
        assert sweep(tmp_path, "r") == 1

    monkeypatch.setattr(durable.os, "fsync", swept)
    with pytest.raises(CubeError, match="run r does not hold this cube"):
        staging.write(tmp_path / "target", b"x")
    assert not (tmp_path / "target").exists()
