"""Whole renders of a small demonstration cloud, through the command line or in this process."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
import tomllib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from cubeforge.cube.ledger import SUFFIX, record_dtype
from cubeforge.cube.spec import CubeSpec
from cubeforge.cube.store import open_cube
from cubeforge.snapshots.demo import write_demo_snapshot

JOB: dict[str, dict[str, Any]] = {
    "snapshot": {
        "path": "clump.plotfile",
        "units": {"length": "1 cm", "density": "1 g/cm3", "velocity": "1 cm/s", "temperature": "1 K"},
    },
    "gas": {
        "density": "density",
        "temperature": "temperature",
        "velocity": ["x_velocity", "y_velocity", "z_velocity"],
        "microturbulence": {"sigma": "0.15 km/s"},
    },
    "line": {"molecule": "13CO", "transition": "1-0", "abundance": 1.5e-6},
    "view": {"toward": [0.35, -0.25, -0.9], "north": "+y", "distance": "140 pc", "pixel": "60 arcsec"},
    "channels": {"first": "-4 km/s", "last": "4 km/s", "width": "0.2 km/s"},
    "output": {"cube": "clump.zarr", "tile": 8},
}
"""64 x 64 pixels in 64 tiles."""


def demo_cloud(folder: Path) -> Path:
    """Write the cloud: three levels over 16 x 16 x 16 cells."""
    return write_demo_snapshot(folder / "clump.plotfile", base=16, levels=3)


def make_job(**sections: dict[str, Any]) -> dict[str, Any]:
    """`JOB` with keys replaced, or added, section by section; a key given as None is left out."""
    job = {}
    for name in {**JOB, **sections}:
        merged = {**JOB.get(name, {}), **sections.get(name, {})}
        job[name] = {key: value for key, value in merged.items() if value is not None}
    return job


def write_job(path: Path, **sections: dict[str, Any]) -> Path:
    """A job file; JSON values of these kinds are TOML values."""
    rows = []
    for name, section in make_job(**sections).items():
        rows.append(f"[{name}]")
        rows += [f"{key} = {_toml(value)}" for key, value in section.items()]
    path.write_text("\n".join(rows) + "\n")
    tomllib.loads(path.read_text())
    return path


def _toml(value: Any) -> str:
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {_toml(inner)}" for key, inner in value.items()) + " }"
    return json.dumps(value)


def command(*words: str | Path) -> list[str]:
    """The command line, in a process of its own."""
    return [sys.executable, "-m", "cubeforge.cli", *map(str, words)]


def cli(*words: str | Path, timeout: float = 120.0, **options: Any) -> subprocess.CompletedProcess[str]:
    """Run the command line to its end."""
    return subprocess.run(command(*words), capture_output=True, text=True, timeout=timeout, **options)


def one_line(result: subprocess.CompletedProcess[str], status: int = 2) -> str:
    """The only line on stderr of a command that failed as it should."""
    assert result.returncode == status, result.stderr
    lines = result.stderr.splitlines()
    assert len(lines) == 1, result.stderr
    assert lines[0].startswith("cubeforge: ")
    return lines[0].removeprefix("cubeforge: ")


@dataclass(frozen=True)
class Contents:
    """What a cube holds, decoded."""

    spec: CubeSpec
    intensity: np.ndarray
    maps: np.ndarray


def contents(path: Path) -> Contents:
    """Read a whole cube."""
    cube = open_cube(path)
    return Contents(cube.spec, np.asarray(cube.intensity[:]), np.asarray(cube.maps[:]))


def assert_same_cube(found: Path, wanted: Contents) -> None:
    """Equal bits, no tile missing, equal description."""
    here = contents(found)
    assert here.spec == wanted.spec
    assert not np.isnan(here.intensity).any()
    np.testing.assert_array_equal(here.intensity.view(np.int32), wanted.intensity.view(np.int32))
    np.testing.assert_array_equal(here.maps.view(np.int64), wanted.maps.view(np.int64))


def booked(path: Path) -> list[int]:
    """Tiles in all records of a cube's ledger, repetitions included; read without the package's merging."""
    tiles = []
    for file in sorted((path / "ledger").glob(f"*{SUFFIX}")):
        header, _, body = file.read_bytes().partition(b"\n")
        size = record_dtype(json.loads(header)["statistics"]).itemsize + 4
        tiles += [int.from_bytes(body[at : at + 8], "little") for at in range(0, len(body) - size + 1, size)]
    return tiles


def stored(path: Path) -> dict[int, int]:
    """When each stored tile was written; the files are looked at, and nothing else."""
    rows = [each for each in (path / "intensity" / "c" / "0").glob("*")]
    files = {(int(row.name), int(file.name)): file for row in rows for file in row.iterdir()}
    return {y * len(rows) + x: file.stat().st_mtime_ns for (y, x), file in files.items()}


def leftovers(path: Path) -> list[str]:
    """Files in the ledger's folder that a finished render should not leave."""
    return [
        each.name for each in (path / "ledger").iterdir() if not each.name.endswith((SUFFIX, ".json"))
    ] + [each.name for each in (path / "ledger").glob("run-*")]


def processes_of(session: int) -> list[int]:
    """Processes of a session that still run (those that nobody collected are dead)."""
    found = []
    for folder in Path("/proc").iterdir():
        if folder.name.isdigit():
            try:
                status = (folder / "stat").read_text().rpartition(")")[2].split()
            except OSError:
                continue
            if int(status[3]) == session and status[0] not in "ZX":
                found.append(int(folder.name))
    return found


def kill_group(process: subprocess.Popen[Any]) -> None:
    """kill -9 of a process that was started in a session of its own, and of all that belong to its group."""
    os.killpg(process.pid, signal.SIGKILL)
    process.wait(30)


def wait_for(condition: Callable[[], object], seconds: float) -> None:
    """Wait until something is so."""
    until = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < until, "it took too long"
        time.sleep(0.02)
