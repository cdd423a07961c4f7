"""How much memory a worker takes at most: run as a program, in a fresh process.

``python -m support.peak_memory tiles JOB MEMORY THREADS`` or ``... patch JOB``; JSON on stdout.
"""

from __future__ import annotations

import ctypes
import gc
import json
import queue
import sys
import threading
from pathlib import Path

from cubeforge.cube.lease import Lease
from cubeforge.cube.ledger import read_ledger
from cubeforge.cube.store import create_cube, open_cube
from cubeforge.engine.patches import PatchMaker
from cubeforge.engine.plan import make_plan
from cubeforge.engine.setup import build_setup
from cubeforge.engine.shared import Renderer, Shared
from cubeforge.job import load_job


def resident(which: str) -> int:
    """Bytes: VmRSS for now, VmHWM for the most since `settle`."""
    lines = Path("/proc/self/status").read_text().splitlines()
    return next(int(line.split()[1]) * 1024 for line in lines if line.startswith(which))


def settle() -> int:
    """Give back what is free, forget the most so far, and say what is resident (Linux: proc(5), glibc)."""
    gc.collect()
    ctypes.CDLL(None).malloc_trim(0)
    Path("/proc/self/clear_refs").write_text("5")
    return resident("VmRSS")


def render_tiles(renderer: Renderer, tiles: range, threads: int) -> None:
    """As a worker does it: each thread takes a tile, renders, stores and books it."""
    left: queue.SimpleQueue[int] = queue.SimpleQueue()
    for tile in tiles:
        left.put(tile)

    def work() -> None:
        while True:
            try:
                tile = left.get_nowait()
            except queue.Empty:
                return
            result = renderer.run([tile])
            if result.error:
                raise result.error

    running = [threading.Thread(target=work) for _ in range(threads)]
    for thread in running:
        thread.start()
    for thread in running:
        thread.join()


def renderer_for(path: Path, cube: Path, memory: int | None, threads: int, lease: Lease) -> Renderer:
    job = load_job(path)
    shared = Shared(job.raw, job.folder, str(cube), lease.run, make_plan(build_setup(job)).spec.fingerprint, 0.0,
                    memory, threads)  # fmt: skip
    return Renderer(shared)


def measure_tiles(path: Path, memory: int, threads: int) -> dict[str, int]:
    plan = make_plan(build_setup(load_job(path)))
    out = {"optical": plan.optical_bytes, "tiles": plan.tiles, "least": plan.least_memory(threads)}
    for turn in ("warm-up", "measured"):
        # The warm-up loads kernels and libraries; it renders one tile, and its patches are dropped.
        cube = path.parent / f"{turn}.zarr"
        create_cube(cube, plan.spec)
        with Lease(cube) as lease:
            renderer = renderer_for(path, cube, memory, threads, lease)
            if turn == "warm-up":
                renderer.run([0])
                del renderer
                continue
            before = settle()
            render_tiles(renderer, range(plan.tiles), threads)
            out["peak"] = resident("VmHWM") - before
            state = read_ledger(open_cube(cube).ledger)
            out["done"] = len(state.tiles)
            out["read"] = int(state.records["read_bytes"].sum())
            out["to_read"] = plan.read_bytes
    return out


def measure_patch(path: Path) -> dict[str, float]:
    setup = build_setup(load_job(path))
    maker = PatchMaker(setup, 0.0, 0)
    maker.make(0)
    # The patch in the middle has neighbours on all sides.
    patch = setup.hierarchy.patches // 2
    before = settle()
    cells, _ = maker.make(patch)
    peak = resident("VmHWM") - before
    return {"peak": peak, "cells": int(setup.hierarchy.cells([patch])[0]), "kept": cells.nbytes}


if __name__ == "__main__":
    what, job, *rest = sys.argv[1:]
    found = measure_patch(Path(job)) if what == "patch" else measure_tiles(Path(job), *map(int, rest))
    print(json.dumps(found))
