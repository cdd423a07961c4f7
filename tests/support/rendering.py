"""Render a job in this process, tile by tile, without a cube on disk."""

from __future__ import annotations

from typing import Any

import numpy as np

from cubeforge.engine.plan import make_plan, tile_area
from cubeforge.engine.setup import Setup, build_setup
from cubeforge.engine.systemic import systemic_velocity
from cubeforge.engine.worker import TileWorker
from cubeforge.job import parse_job
from cubeforge.snapshots.base import Snapshot


def render_image(
    job: dict[str, Any], snapshot: Snapshot | None = None, *, memory: int | None = None
) -> tuple[np.ndarray, np.ndarray, Setup]:
    """Image (channels, ny, nx), maps (maps, ny, nx) and the setup; `memory` as `TileWorker` takes it."""
    setup = build_setup(parse_job(job), snapshot)
    plan = make_plan(setup)
    worker = TileWorker(setup, plan, memory=memory, systemic=systemic_velocity(setup))
    image = np.full(plan.spec.shape, np.nan, dtype=np.float32)
    maps = np.full((len(plan.spec.maps), *plan.spec.shape[1:]), np.nan)
    for tile in range(plan.tiles):
        x0, x1, y0, y1 = tile_area(setup, tile)
        result = worker.render(tile)
        image[:, y0:y1, x0:x1] = result.image
        maps[:, y0:y1, x0:x1] = result.maps
    return image, maps, setup
