"""Slopes of the velocity in optical patches: from velocities or momenta, across periodic edges, none in even gas."""

from __future__ import annotations

import numpy as np
import pytest
from support.flows import Flow, flow_snapshot, uniform
from support.grids import grid_snapshot
from support.jobs import FLOW, make_job
from support.rendering import render_image

from cubeforge.engine.setup import build_setup
from cubeforge.engine.worker import TileWorker
from cubeforge.job import parse_job
from cubeforge.snapshots.memory import MemorySnapshot

MOMENTUM = ["x_momentum", "y_momentum", "z_momentum"]
TOWARD = np.array([0.5, -0.3, 0.8]) / np.linalg.norm([0.5, -0.3, 0.8])
CHANNEL = 0.1
"""km/s."""


def flow_job(**sections) -> dict:
    return make_job(**{
        "gas": {"velocity": FLOW}, "march": {"reconstruction": "linear"},
        "view": {"toward": TOWARD.tolist(), "pixel": "0.3 pc"}, **sections,
    })  # fmt: skip


def patch_slopes(job: dict, snapshot) -> list[np.ndarray]:
    """Change of the line-of-sight velocity across each cell along x, y, z, in channels: (nx, ny, nz, 3) each."""
    worker = TileWorker(build_setup(parse_job(job), snapshot))
    # Patches are kept with x fastest: z, y, x, numbers of a cell.
    cells = [worker.cache.get(patch) for patch in range(snapshot.hierarchy.patches)]
    return [each[..., 1:4].transpose(2, 1, 0, 3) for each in cells]


def with_momentum(snapshot: MemorySnapshot) -> MemorySnapshot:
    """The same gas, momenta stored instead of velocities."""
    data = []
    for patch in range(snapshot.hierarchy.patches):
        cells = snapshot.read(patch, snapshot.fields)
        moved = {new: cells["density"] * cells[old] for new, old in zip(MOMENTUM, FLOW, strict=True)}
        data.append({"density": cells["density"], **moved})
    return MemorySnapshot(snapshot.hierarchy, data)


def central_slopes(speed: np.ndarray) -> np.ndarray:
    """Monotonised central slopes (van Leer 1977) of a periodic field, along each axis."""
    out = []
    for axis in range(3):
        backward, forward = speed - np.roll(speed, 1, axis), np.roll(speed, -1, axis) - speed
        three = np.stack([2.0 * backward, 2.0 * forward, 0.5 * (backward + forward)])
        smallest = np.abs(three).min(axis=0)
        out.append(np.where(backward * forward > 0.0, np.sign(forward) * smallest, 0.0))
    return np.stack(out, axis=-1)


@pytest.fixture
def noise() -> dict[str, np.ndarray]:
    """Density over two decades and velocities without order, on 12 x 10 x 8 cells."""
    rng = np.random.default_rng(11)
    fields = {name: rng.normal(0.0, 1.0, (12, 10, 8)) for name in FLOW}
    return {"density": 10.0 ** rng.uniform(-23.0, -21.0, (12, 10, 8)), **fields}


@pytest.mark.parametrize("stored", ["velocity", "momentum"])
def test_periodic_slopes(noise: dict[str, np.ndarray], stored: str):
    snapshot = grid_snapshot(noise, (0.5, 0.5, 0.5), patch=5)
    wanted = central_slopes(sum(n * noise[name] for n, name in zip(TOWARD, FLOW, strict=True))) / CHANNEL
    gas = {"velocity": FLOW}
    if stored == "momentum":
        snapshot, gas = with_momentum(snapshot), {"velocity": None, "momentum": MOMENTUM}
    job = flow_job(gas=gas, region={"periodic": ["x", "y", "z"]})
    mesh = snapshot.hierarchy
    assert mesh.patches > 8
    for found, lo, hi in zip(patch_slopes(job, snapshot), mesh.lo, mesh.hi, strict=True):
        part = wanted[lo[0] : hi[0], lo[1] : hi[1], lo[2] : hi[2]]
        np.testing.assert_allclose(found, part, rtol=1e-6, atol=1e-6 * np.abs(wanted).max())


def test_momentum_and_velocity_agree_between_levels():
    # A coarse cell under a fine patch holds mass-weighted means: momentum over mass. Only the outermost fine cells look
    # at values interpolated between coarse ones, and those of momentum over density are not those of velocity.
    def wave(a, b, c):
        return lambda x, y, z: np.sin(a * x + b * y + c * z)

    gas = Flow(lambda x, y, z: 1e-22 * np.exp(wave(3.0, 2.0, -2.0)(x, y, z)), uniform(15.0),
               (wave(4.0, 1.0, 2.0), wave(-1.0, 3.0, 1.0), wave(2.0, 2.0, -4.0)))  # fmt: skip
    snapshot = flow_snapshot(gas, 8, fine_box=((-0.5, -0.5, -0.25), (0.25, 0.5, 0.5)))
    coarse, fine = patch_slopes(flow_job(region={"periodic": ["x", "y"]}), snapshot)
    job = flow_job(gas={"velocity": None, "momentum": MOMENTUM}, region={"periodic": ["x", "y"]})
    other_coarse, other_fine = patch_slopes(job, with_momentum(snapshot))
    covered = np.zeros((8, 8, 8), dtype=bool)
    covered[2:5, 2:6, 3:6] = True
    scale = np.abs(coarse).max()
    assert scale > 1.0
    np.testing.assert_allclose(other_coarse[~covered], coarse[~covered], rtol=0.0, atol=1e-6 * scale)
    inner = (slice(1, -1),) * 3
    np.testing.assert_allclose(other_fine[inner], fine[inner], rtol=0.0, atol=1e-6 * scale)


def test_gas_that_moves_as_one_has_no_slopes(noise: dict[str, np.ndarray]):
    moving = {
        **noise,
        **{name: np.full_like(noise[name], v) for name, v in zip(FLOW, (0.3, -0.7, 0.2), strict=True)},
    }
    fine = ((0.0, 0.0, 0.0), (0.5, 0.5, 0.5))
    gas = Flow(
        lambda x, y, z: 1e-22 * np.exp(x - y * z), uniform(15.0), (uniform(0.3), uniform(-0.7), uniform(0.2))
    )
    for snapshot in (
        grid_snapshot(moving, (0.5,) * 3, patch=5),
        flow_snapshot(gas, 8, fine_box=fine, ratio=4),
    ):
        images = []
        for reconstruction in ("linear", "constant"):
            job = flow_job(march={"reconstruction": reconstruction}, rays={"per_side": 2})
            images.append(render_image(job, snapshot)[0])
        assert images[0].max() > 0.1
        np.testing.assert_array_equal(*images)
