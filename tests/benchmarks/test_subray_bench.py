"""Sub-rays where the cells are fine, against sub-rays everywhere."""

from __future__ import annotations

import time

import numpy as np
import pytest
from support.jobs import make_job

from cubeforge.engine.plan import make_plan, tile_area
from cubeforge.engine.setup import Setup, build_setup
from cubeforge.engine.worker import TILE_STATISTICS, TileWorker
from cubeforge.job import parse_job
from cubeforge.mesh.hierarchy import build_hierarchy, cut_boxes
from cubeforge.snapshots.memory import MemorySnapshot

BASE = 32
SIDES = (32, 44, 52, 52, 52)
"""Cells a side of the refined cube of each level: the finest, 52 / 512 of the domain, fills 1 % of the sky."""


def nested_snapshot() -> MemorySnapshot:
    """Five levels of cubes around one point, of gas that gathers there."""
    boxes = []
    for level, side in enumerate(SIDES):
        first = (BASE * 2**level - side) // 2
        lo, shape, _ = cut_boxes([(first,) * 3], [(side,) * 3], 32)
        boxes.append((lo, shape))
    hierarchy = build_hierarchy((0.0,) * 3, (1.0 / BASE,) * 3, (BASE,) * 3, [(2, 2, 2)] * 4, boxes)
    data = []
    for level, lo, shape in zip(hierarchy.level, hierarchy.lo, hierarchy.shape, strict=True):
        cell = hierarchy.cell_size[level, 0]
        axes = [cell * (a + 0.5 + np.arange(n)) - 0.5 for a, n in zip(lo, shape, strict=True)]
        x, y, z = np.meshgrid(*axes, indexing="ij")
        square = x**2 + y**2 + z**2
        data.append({"density": 3e-22 / (1.0 + square / 0.05**2), "vz": 2.0 * x + z})
    return MemorySnapshot(hierarchy, data)


def set_up(snapshot: MemorySnapshot, **rays: object) -> Setup:
    job = make_job(
        gas={"velocity": ["0 km/s", "0 km/s", "vz"]},
        line={"abundance": 1e-5},
        view={"toward": [0.3, -0.2, -1.0], "pixel": f"{1 / BASE!r} pc", "size": [BASE, BASE]},
        rays=rays,
    )
    return build_setup(parse_job(job), snapshot)


def march(setup: Setup) -> tuple[np.ndarray, dict[str, float], float]:
    """Column map, statistics and seconds, with the patches in memory beforehand."""
    plan = make_plan(setup)
    worker = TileWorker(setup, plan)
    for patch in np.unique(setup.scene.patch):
        worker.cache.get(int(patch))
    column, sums = np.zeros((BASE, BASE)), np.zeros(len(TILE_STATISTICS))
    began = time.perf_counter()
    for tile in range(plan.tiles):
        x0, x1, y0, y1 = tile_area(setup, tile)
        result = worker.render(tile)
        column[y0:y1, x0:x1] = result.maps[0]
        sums += result.statistics
    return column, dict(zip(TILE_STATISTICS, sums, strict=True)), time.perf_counter() - began


@pytest.mark.slow
def test_rays_where_cells_are_fine():
    snapshot = nested_snapshot()
    adaptive, everywhere = set_up(snapshot, per_side="auto"), set_up(snapshot, per_side=32)
    march(set_up(snapshot, per_side=1))
    column, few, seconds = march(adaptive)
    truth, many, longer = march(everywhere)
    ratios = {name: many[name] / few[name] for name in ("rays", "crossings")}
    error = np.abs(column - truth).max() / truth.max()
    total = column.sum() / truth.sum() - 1.0
    print(
        f"\nwhere fine: {few['rays']:.4g} rays, {few['crossings']:.4g} crossings, {seconds:.3g} s; ", end=""
    )
    print(f"everywhere: {many['rays']:.4g} rays, {many['crossings']:.4g} crossings, {longer:.3g} s; ", end="")
    print(f"ratios {ratios['rays']:.1f}, {ratios['crossings']:.1f}, {longer / seconds:.1f}; ", end="")
    print(f"column off by {error:.1e} of the largest at the worst, in total by {total:+.1e}")
    # The cubes fill 1, 4, 16 and 47 % of the sky, and more of it where they are seen at a slant.
    assert ratios["rays"] > 10.0
    assert ratios["crossings"] > 5.0
    assert longer > 4.0 * seconds
    assert error < 5e-3
    assert abs(total) < 1e-4
