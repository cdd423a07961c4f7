"""What all tasks of a render share, written once beside the cube's ledger and read once by each process."""

from __future__ import annotations

import json
import os
import threading
import time
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from cubeforge.cube.ledger import LedgerWriter, TileRecord
from cubeforge.cube.store import open_cube
from cubeforge.engine.plan import Plan, make_plan
from cubeforge.engine.setup import build_setup
from cubeforge.engine.worker import TILE_STATISTICS, TileWorker
from cubeforge.errors import EngineError
from cubeforge.job import parse_job


@dataclass(frozen=True)
class Shared:
    """Everything a worker process needs to render tiles.

    Attributes
    ----------
    job : dict
        The job as its file says it.
    folder : str
        Where the job's relative paths start.
    cube : str
        Path of the cube.
    run : str
        Id of the run, which holds the lease.
    fingerprint : str
        Of the plan; a worker that finds another one refuses to work.
    systemic : float
        cm/s.
    memory : int or None
        Bytes for patches and tiles in each worker process.
    threads : int
        Threads of each worker process.
    """

    job: dict[str, Any]
    folder: str
    cube: str
    run: str
    fingerprint: str
    systemic: float
    memory: int | None
    threads: int

    @property
    def path(self) -> Path:
        """File that `write` makes."""
        return Path(self.cube) / "ledger" / f"run-{self.run}.json"

    def write(self) -> Path:
        """Put it where the workers find it."""
        beside = self.path.with_suffix(".new")
        beside.write_text(json.dumps(asdict(self)))
        os.replace(beside, self.path)
        return self.path


class Renderer:
    """Renders batches of tiles in one process and books them; safe from several threads."""

    def __init__(self, shared: Shared) -> None:
        setup = build_setup(parse_job(shared.job, folder=shared.folder))
        plan: Plan = make_plan(setup)
        if plan.spec.fingerprint != shared.fingerprint:
            raise EngineError(
                f"{shared.cube}: this worker makes another plan of the same job ({plan.spec.fingerprint[:12]} against "
                f"{shared.fingerprint[:12]}): the snapshot, the molecule's file or the version of cubeforge differ "
                "between the machines or changed during the render; make them equal and run again"
            )
        self.worker = TileWorker(
            setup, plan, memory=shared.memory, threads=shared.threads, systemic=shared.systemic
        )
        self.cube = open_cube(shared.cube, run=shared.run)
        self.ledger = LedgerWriter(self.cube.ledger, shared.run, TILE_STATISTICS)

    def run(self, tiles: list[int]) -> list[TileRecord]:
        """Render tiles one after the other, store each, and book them together."""
        records = []
        try:
            for tile in tiles:
                began = time.perf_counter()
                result = self.worker.render(tile)
                checksum = self.cube.write_tile(tile, result.image, result.maps)
                seconds = time.perf_counter() - began
                records.append(TileRecord(tile, checksum, time.time(), seconds, result.statistics))
        finally:
            # What is durable is booked even if a later tile of the batch fails.
            if records:
                self.ledger.append(records)
        return records


_renderers: dict[str, Renderer] = {}
_lock = threading.Lock()


def run_batch(path: str, tiles: list[int]) -> list[TileRecord]:
    """Render a batch in this process; the task that executors send.

    Parameters
    ----------
    path : str
        What `Shared.write` returned.
    tiles : list of int
    """
    with _lock:
        renderer = _renderers.get(path)
        if renderer is None:
            # One render at a time has its patches in memory.
            _renderers.clear()
            renderer = _renderers[path] = Renderer(Shared(**json.loads(Path(path).read_text())))
    return renderer.run(tiles)


def forget(path: str) -> None:
    """Drop what `run_batch` keeps for a render in this process."""
    with _lock:
        renderer = _renderers.pop(path, None)
    if renderer is not None:
        renderer.ledger.close()
