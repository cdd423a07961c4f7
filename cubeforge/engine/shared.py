"""What all tasks of a render share, written once beside the cube's ledger and read once by each process."""

from __future__ import annotations

import json
import threading
import time
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from cubeforge.cube.durable import Staging
from cubeforge.cube.ledger import LedgerWriter, TileRecord
from cubeforge.cube.store import open_cube
from cubeforge.engine.plan import Plan, make_plan
from cubeforge.engine.setup import build_setup
from cubeforge.engine.worker import TILE_STATISTICS, TileWorker
from cubeforge.errors import CubeforgeError, EngineError
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
        """Put it where the workers find it; for the run that holds the lease.

        Raises
        ------
        EngineError
            The disk is full, or refuses.
        """
        staging = Staging(self.path.parent, self.run, create=False)
        staging.write(self.path, json.dumps(asdict(self)).encode())
        return self.path


def sweep_shared(ledger: Path) -> None:
    """Remove what runs that were killed have left; for the run that holds the lease, before its own `write`."""
    for left in ledger.glob("run-*.json"):
        left.unlink(missing_ok=True)


@dataclass(frozen=True)
class BatchResult:
    """Tiles of a batch that are stored and booked, and the error that stopped it, if one did."""

    records: list[TileRecord]
    error: CubeforgeError | None = None


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

    def run(self, tiles: list[int]) -> BatchResult:
        """Render tiles one after the other, store each, and book them together."""
        records: list[TileRecord] = []
        failed: CubeforgeError | None = None
        try:
            for tile in tiles:
                began = time.perf_counter()
                result = self.worker.render(tile)
                checksum = self.cube.write_tile(tile, result.image, result.maps)
                seconds = time.perf_counter() - began
                records.append(TileRecord(tile, checksum, time.time(), seconds, result.statistics))
        except CubeforgeError as error:
            failed = error
        finally:
            # What is durable is booked even if a later tile of the batch fails.
            if records:
                self.ledger.append(records)
        return BatchResult(records, failed)


_renderers: dict[str, Renderer] = {}
_lock = threading.Lock()


def run_batch(path: str, tiles: list[int]) -> BatchResult:
    """Render a batch in this process; the task that executors send.

    An error of ours is handed back, not raised: dask would write its traceback to the terminal for each batch.

    Parameters
    ----------
    path : str
        What `Shared.write` returned.
    tiles : list of int
    """
    try:
        return _renderer(path).run(tiles)
    except CubeforgeError as error:
        return BatchResult([], error)
    except MemoryError:
        found = EngineError("a worker ran out of memory; give each less to do at once (--memory, --threads)")
        return BatchResult([], found)


def _renderer(path: str) -> Renderer:
    with _lock:
        renderer = _renderers.get(path)
        if renderer is None:
            # One render at a time has its patches in memory.
            _renderers.clear()
            try:
                text = Path(path).read_text()
            except OSError as error:
                raise EngineError(
                    f"{path}: cannot be read by a worker ({error.strerror}): either the run has ended, or the cube is "
                    "not on a file system that all workers share"
                ) from error
            renderer = _renderers[path] = Renderer(Shared(**json.loads(text)))
        return renderer


def forget(path: str) -> None:
    """Drop what `run_batch` keeps for a render in this process."""
    with _lock:
        renderer = _renderers.pop(path, None)
    if renderer is not None:
        renderer.ledger.close()
