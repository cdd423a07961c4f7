"""A worker stays within the memory that it was given: fresh processes, resident memory at its highest."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from support.renders import write_job

from cubeforge.engine.plan import BUILD_NUMBERS, make_plan
from cubeforge.engine.setup import build_setup
from cubeforge.job import load_job
from cubeforge.mesh.hierarchy import Hierarchy, build_hierarchy, cut_boxes
from cubeforge.snapshots.amrex_write import write_amrex

FIELDS = ("density", "temperature", "x_velocity", "y_velocity", "z_velocity")
UNITS = {"length": "1 cm", "density": "1 g/cm3", "velocity": "1 cm/s", "temperature": "1 K",
         "momentum": "1e-21 g/(cm2 s)", "pressure": "1e-13 dyn/cm2"}  # fmt: skip
PARSEC = 3.0857e18


def write_grid(path: Path, shape: tuple[int, int, int], patch: int, real: str = "f4") -> None:
    """A uniform grid of 0.02 pc cells, in patches of `patch` cells a side: waves of density and velocity."""
    lo, size, _ = cut_boxes([(0, 0, 0)], [shape], patch)
    cell = 0.02 * PARSEC
    hierarchy: Hierarchy = build_hierarchy((0.0, 0.0, 0.0), (cell,) * 3, shape, [], [(lo, size)])

    def read(index: int) -> dict[str, Any]:
        first, count = hierarchy.lo[index], hierarchy.shape[index]
        x, y, z = np.meshgrid(
            *(np.arange(a, a + n) / 16.0 for a, n in zip(first, count, strict=True)), indexing="ij"
        )
        density = 1e-21 * (1.1 + np.sin(x) * np.sin(y + z))
        flow = [1e5 * np.sin(x + y), 1e5 * np.cos(y - z), 1e5 * np.sin(z)]
        return dict(zip(FIELDS, [density, 12.0 + 2.0 * np.sin(x), *flow], strict=True))

    write_amrex(path, hierarchy, FIELDS, read, real=real, files=2)


@pytest.fixture(scope="module")
def grid(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """128 x 128 x 192 cells in 96 patches of 32 x 32 x 32."""
    path = tmp_path_factory.mktemp("grid") / "clump.plotfile"
    write_grid(path, (128, 128, 192), 32)
    return path


def measure(*words: str | Path) -> dict[str, Any]:
    # One arena: what threads free is free for all, as the budget takes it.
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(sys.path), "MALLOC_ARENA_MAX": "1"}
    result = subprocess.run(
        [sys.executable, "-m", "support.peak_memory", *map(str, words)],
        capture_output=True,
        text=True,
        env=environment,
        timeout=300,
        check=True,
    )
    found: dict[str, Any] = json.loads(result.stdout)
    return found


def job_for(folder: Path, snapshot: Path, toward: Any, reconstruction: str, gas: Any = None) -> Path:
    return write_job(
        folder / "clump.toml",
        snapshot={"path": str(snapshot), "units": UNITS},
        gas=gas or {},
        view={"toward": toward, "pixel": "0.04 pc"},
        channels={"width": "0.1 km/s"},
        rays={"per_side": 1},
        march={"reconstruction": reconstruction},
        output={"tile": 32},
    )


@pytest.mark.slow
@pytest.mark.parametrize(
    ("reconstruction", "times", "threads"),
    [("linear", 1.0, 1), ("linear", 1.0, 2), ("linear", 2.0, 2), ("constant", 1.0, 1), ("constant", 2.0, 1)],
)
def test_worker_stays_within_its_memory(
    tmp_path: Path, grid: Path, reconstruction: str, times: float, threads: int
):
    job = job_for(tmp_path, grid, [0.3, 0.2, -1.0], reconstruction)
    least = make_plan(build_setup(load_job(job))).least_memory(threads)
    memory = int(times * least)
    found = measure("tiles", job, memory, threads)
    assert found["done"] == found["tiles"] > 4
    assert found["optical"] > 2 * least / threads, "the snapshot should not fit"
    assert found["read"] > found["to_read"]
    assert found["peak"] <= memory
    # It takes what it is given: a budget that is far too careful would show here.
    assert found["peak"] > memory / 4


@pytest.fixture(scope="module")
def large_patches(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Patches of 64 x 64 x 64 cells, the largest there are, stored with 64 bits."""
    path = tmp_path_factory.mktemp("large") / "clump.plotfile"
    write_grid(path, (192, 64, 64), 64, real="f8")
    return path


CONSERVED = {"velocity": None, "momentum": list(FIELDS[2:]), "temperature": None, "pressure": "temperature"}
"""Momenta and a pressure (the numbers don't matter), which take more steps."""


@pytest.mark.slow
@pytest.mark.parametrize("gas", [{}, CONSERVED], ids=["velocity", "momentum"])
@pytest.mark.parametrize("reconstruction", ["linear", "constant"])
def test_numbers_to_build_a_patch(
    tmp_path: Path, large_patches: Path, gas: dict[str, Any], reconstruction: str
):
    found = measure("patch", job_for(tmp_path, large_patches, [0.3, 0.2, -1.0], reconstruction, gas))
    assert found["cells"] == 64**3
    numbers = found["peak"] / (8 * found["cells"])
    # The finished patch counts too: it is in memory before others are dropped for it.
    assert 0.8 * BUILD_NUMBERS[reconstruction] < numbers <= BUILD_NUMBERS[reconstruction]
