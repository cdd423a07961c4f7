"""The render: begin or resume a cube, feed the tiles to an executor, and say what came of it."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from cubeforge.cube.lease import Lease
from cubeforge.cube.ledger import TileRecord, read_ledger
from cubeforge.cube.store import Cube, create_cube, open_cube
from cubeforge.engine.batches import Batches
from cubeforge.engine.executors import (
    Executor,
    SerialExecutor,
    check_scheduler_file,
    local_executor,
    scheduler_executor,
)
from cubeforge.engine.machine import free_memory
from cubeforge.engine.order import z_order
from cubeforge.engine.outside import allow_outside, check_outside, outside_share, totals
from cubeforge.engine.plan import Plan, make_plan
from cubeforge.engine.sampling import sampling_error
from cubeforge.engine.setup import Setup, build_setup
from cubeforge.engine.shared import Shared, sweep_shared
from cubeforge.engine.systemic import systemic_velocity
from cubeforge.errors import CubeforgeError
from cubeforge.job import Job, load_job
from cubeforge.mesh.leaves import check_disjoint


@dataclass(frozen=True)
class Progress:
    """How far a render is.

    Attributes
    ----------
    done, total : int
        Tiles; those of earlier runs count as done.
    begun : int
        Tiles that were done before this run.
    seconds : float
        Since this run's first tile was handed out.
    """

    done: int
    total: int
    begun: int
    seconds: float

    @property
    def rate(self) -> float:
        """Tiles a second in this run."""
        return (self.done - self.begun) / self.seconds if self.seconds > 0.0 else 0.0

    @property
    def seconds_left(self) -> float:
        """Estimate; infinity before the first tile is done."""
        return (self.total - self.done) / self.rate if self.rate > 0.0 else np.inf


@dataclass(frozen=True)
class Outcome:
    """A finished render.

    Attributes
    ----------
    cube : Path
    tiles : int
        Tiles of the cube.
    rendered : int
        Tiles rendered by this run.
    seconds : float
    outside : float
        Share of the (optically thin) line emission that falls outside the channels.
    sampling_error : float or None
        99th percentile over the pixels of what too few rays may have done to the integrated brightness, relative to its
        largest value in the image; None when the job did not ask for it.
    totals : dict
        Sums of the tile statistics over the cube.
    caveats : tuple of str
    """

    cube: Path
    tiles: int
    rendered: int
    seconds: float
    outside: float
    sampling_error: float | None
    totals: dict[str, float]
    caveats: tuple[str, ...]


Watcher = Callable[[Progress], None]


@contextlib.contextmanager
def _executor(workers: int, threads: int, scheduler_file: Path | None) -> Iterator[Executor]:
    if scheduler_file is not None:
        with scheduler_executor(scheduler_file) as given:
            yield given
    elif workers == 0:
        yield SerialExecutor()
    else:
        with local_executor(workers, threads) as local:
            yield local


def render(
    job: Job | str | Path,
    *,
    workers: int = 1,
    threads: int = 1,
    memory: int | None = None,
    scheduler_file: str | Path | None = None,
    watch: Watcher | None = None,
) -> Outcome:
    """Render a job into its zarr cube, or go on with a render that was interrupted.

    Parameters
    ----------
    job : Job, str or Path
        A job, or the path of a job file.
    workers : int
        Processes of a local dask cluster; 0 renders in this process, without dask.
    threads : int
        Threads of each.
    memory : int, optional
        Bytes that each worker may use for patches and tiles; by default three quarters of what the machine has
        free, shared among the workers, or a share of what the smallest worker of a scheduler was started with.
    scheduler_file : path, optional
        Use the workers of a dask scheduler that is up already.
    watch : callable, optional
        Called with a `Progress` at the start and after each batch of tiles.

    Raises
    ------
    CubeforgeError
        See the message; what was done is kept, and the same call goes on from there.
    """
    if not isinstance(job, Job):
        job = load_job(job)
    if scheduler_file is not None:
        check_scheduler_file(Path(scheduler_file))
    setup = build_setup(job)
    plan = make_plan(setup)
    if memory is None and scheduler_file is None:
        memory = free_memory() * 3 // (4 * max(workers, 1))
    if memory is not None:
        plan.share(memory, threads if workers else 1)
    setup.snapshot.check_files()
    check_disjoint(setup.hierarchy)
    path = begin(job.cube_path, plan)
    with Lease(path) as lease:
        cube = open_cube(path, run=lease.run)
        sweep_shared(cube.ledger)
        allow_outside(cube.ledger, lease.run, job.channels.outside)
        left, done = tiles_left(cube)
        began = time.perf_counter()
        if len(left):
            systemic = systemic_velocity(setup)
            with _executor(workers, threads, Path(scheduler_file) if scheduler_file else None) as executor:
                memory = memory or executor.usual_memory()
                plan.share(memory, executor.threads)
                shared = Shared(
                    job=job.raw, folder=job.folder, cube=str(path), run=lease.run,
                    fingerprint=plan.spec.fingerprint, systemic=systemic, memory=memory,
                    threads=executor.threads,
                )  # fmt: skip
                _drive(executor, shared, left, done, lease, watch)
        return _finish(cube, setup, len(left), time.perf_counter() - began)


def begin(path: Path, plan: Plan) -> Path:
    """Create the cube, or check that the one there belongs to this plan.

    Raises
    ------
    CubeError
        Something else is at `path`, or a cube of another plan, naming what differs.
    """
    if path.exists() and (not path.is_dir() or any(path.iterdir())):
        open_cube(path).check_plan(plan.spec)
    else:
        create_cube(path, plan.spec)
    return path


def tiles_left(cube: Cube) -> tuple[np.ndarray, int]:
    """Tiles still to render, neighbours together, and the number of those done.

    Raises
    ------
    CubeError
        The ledger contradicts itself.
    """
    state = read_ledger(cube.ledger)
    done = state.done(cube.spec.tiles) & cube.stored_tiles()
    order = z_order(*cube.spec.tile_grid)
    return order[~done[order]], int(done.sum())


def _drive(
    executor: Executor, shared: Shared, left: np.ndarray, done: int, lease: Lease, watch: Watcher | None
) -> None:
    total, begun = done + len(left), done
    path = shared.write()
    began = time.perf_counter()
    try:
        if watch:
            watch(Progress(done, total, begun, 0.0))
        for records in executor.run(path, Batches(left.tolist())):
            lease.check()
            done += len(records)
            if watch:
                watch(Progress(done, total, begun, time.perf_counter() - began))
    finally:
        path.unlink(missing_ok=True)


def _finish(cube: Cube, setup: Setup, rendered: int, seconds: float) -> Outcome:
    sums = totals(cube)
    outside = outside_share(sums)
    check_outside(cube)
    caveats = list(setup.caveats)
    if sums.get("inverted_crossings"):
        caveats.append(f"{sums['inverted_crossings']:.0f} crossings of inverted (amplifying) gas")
    if sums.get("mended_cells"):
        caveats.append(f"{sums['mended_cells']:.0f} cells with bad values were made transparent")
    if sums.get("narrow_cells"):
        caveats.append(
            f"{sums['narrow_cells']:.0f} cells have lines narrower than {setup.narrowest / 1e5:.3g} km/s, for which "
            "the samples in each channel were chosen"
        )
    error = sampling_error(cube)
    return Outcome(cube.path, cube.spec.tiles, rendered, seconds, outside, error, sums, tuple(caveats))


__all__ = ["CubeforgeError", "Outcome", "Progress", "TileRecord", "render"]
