"""Reading a ledger of a million tiles; a cube to FITS against astropy's plain writing of the same array."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits

from cubeforge.cube.ledger import LedgerWriter, TileRecord, read_ledger
from cubeforge.cube.spec import CubeSpec
from cubeforge.cube.store import Cube, create_cube, open_cube

TILES = 10**6


@pytest.fixture(scope="module")
def ledger(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A million tiles in random order, by four workers."""
    folder = tmp_path_factory.mktemp("ledger")
    order = np.random.default_rng(1).permutation(TILES).reshape(4, 20, -1)
    for worker in order:
        with LedgerWriter(folder, "run", ("peak", "crossings", "seconds_reading")) as writer:
            for batch in worker.tolist():
                writer.append(
                    [TileRecord(tile, tile * 7, 1e9 + tile, 1.0, (1.0, 2.0, 3.0)) for tile in batch]
                )
    return folder


@pytest.mark.slow
def test_read_a_million_tiles(ledger: Path, benchmark: Any) -> None:
    """About a second."""
    state = benchmark.pedantic(read_ledger, (ledger,), rounds=3, warmup_rounds=1)
    assert state.done(TILES).all()


def _big_cube(path: Path) -> Cube:
    """256 MiB."""
    spec = CubeSpec(
        shape=(128, 512, 1024), tile=(64, 64), velocity_start=0.0, velocity_width=1e4,
        rest_frequency=1.1e11, pixel_rad=1e-6, centre_lon=0.0, centre_lat=0.0, unit="K",
        background_K=2.725, molecule="CO", line="1-0", fingerprint="f",
    )  # fmt: skip
    create_cube(path, spec)
    cube = open_cube(path)
    rng = np.random.default_rng(1)
    channel = np.arange(128.0)[:, None, None]
    with LedgerWriter(cube.ledger, "run") as writer:
        for tile in range(spec.tiles):
            centre = 64 + 8 * rng.standard_normal((64, 64))
            intensity = np.exp(-(((channel - centre) / 10) ** 2)).astype(np.float32)
            writer.append([TileRecord(tile, cube.write_tile(tile, intensity), 0.0, 0.0)])
    return cube


# A fresh process, or the peak would be that of what ran before it. Not getrusage: its peak survives exec.
EXPORT = """
import re, sys, time
from cubeforge.cube.fits import export_fits
from cubeforge.cube.store import open_cube

def peak():
    return int(re.search(r"VmHWM:\\s+(\\d+) kB", open("/proc/self/status").read())[1])

cube = open_cube(sys.argv[1])
cube.read_tile(0)
before = peak()
start = time.perf_counter()
export_fits(cube, sys.argv[2], overwrite=True)
print(time.perf_counter() - start, peak() - before)
"""


@pytest.mark.slow
def test_export_against_plain_writing(tmp_path: Path) -> None:
    cube = _big_cube(tmp_path / "c.zarr")
    whole = np.zeros(cube.spec.shape, np.float32)
    ours, plain, memory = [], [], []
    for _ in range(3):
        command = [sys.executable, "-c", EXPORT, str(cube.path), str(tmp_path / "c.fits")]
        seconds, kilobytes = subprocess.run(
            command, check=True, capture_output=True, text=True
        ).stdout.split()
        ours.append(float(seconds))
        memory.append(int(kilobytes) * 1024)
        start = time.perf_counter()
        fits.PrimaryHDU(whole).writeto(tmp_path / "p.fits", checksum=True, overwrite=True)
        with open(tmp_path / "p.fits", "r+b") as file:
            os.fsync(file.fileno())
        plain.append(time.perf_counter() - start)
    print(f"export takes {min(ours) / min(plain):.2f} of plain writing, {max(memory) / 2**20:.0f} MiB")
    # Measured 2 on two cores: it also decodes every tile and compares it with the ledger.
    assert min(ours) < 6 * min(plain)
    # A row of tiles is 32 MiB; each of four threads decodes a tile of 2 MiB.
    assert min(memory) > 32 * 2**20, "the peak was not measured"
    assert max(memory) < 0.6 * cube.spec.intensity_bytes
