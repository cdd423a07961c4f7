"""Three ways to run batches of tiles behind one interface: here, on a local cluster, on a given scheduler."""

from __future__ import annotations

import contextlib
import logging
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, Protocol

from cubeforge.cube.ledger import TileRecord
from cubeforge.engine.batches import Batches
from cubeforge.engine.interrupts import hold_interrupts
from cubeforge.engine.machine import free_memory
from cubeforge.engine.shared import BatchResult, forget, run_batch
from cubeforge.errors import EngineError, PlanError

WINDOW = 3
"""Batches under way for each thread: enough that none waits for the next."""
WAIT_FOR_SCHEDULER = 60.0
"""Seconds to wait for a given scheduler to answer."""
MEMORY_SHARE = 0.6
"""Of a worker's memory limit, what patches and tiles get by default: dask pauses a worker at 0.8."""
WAIT_FOR_WORKERS = 60.0
"""Seconds to wait for its first worker."""
SILENT = logging.CRITICAL
"""Level below which dask's log is dropped."""


class Executor(Protocol):
    """Runs batches of tiles."""

    @property
    def threads(self) -> int:
        """Threads of each worker process."""
        ...

    def usual_memory(self) -> int:
        """Bytes that a worker may use for patches and tiles when nobody says how many.

        Raises
        ------
        PlanError
            Nobody can tell.
        """
        ...

    def run(self, path: Path, batches: Batches) -> Iterator[list[TileRecord]]:
        """Render all batches of the render described at `path` (see `shared.Shared`), in any order."""
        ...


def _booked(result: BatchResult, batches: Batches) -> list[TileRecord]:
    """The records of a batch, after which the next can be sized; raises the error that stopped it."""
    if result.error is not None:
        raise result.error
    batches.learn(result.records)
    return result.records


class SerialExecutor:
    """One thread, in this process, without dask."""

    threads = 1

    def usual_memory(self) -> int:
        """See `Executor`."""
        return free_memory() * 3 // 4

    def run(self, path: Path, batches: Batches) -> Iterator[list[TileRecord]]:
        """See `Executor`."""
        try:
            while tiles := batches.take(1):
                yield _booked(run_batch(str(path), tiles), batches)
        finally:
            forget(str(path))


def _remote_task() -> Callable[[str, list[int]], BatchResult]:
    """`run_batch` as a task that says so when a worker lacks the package.

    A nested function travels by value. One that travels by its name takes the worker's connection down where the name
    is unknown, and the scheduler tries again for ever.
    """

    def task(path: str, tiles: list[int]) -> BatchResult:
        from importlib import import_module

        result: BatchResult = import_module("cubeforge.engine.shared").run_batch(path, tiles)
        return result

    return task


class DaskExecutor:
    """Workers of a dask scheduler; futures in a bounded window, so that a million tiles need no million futures."""

    def __init__(self, client: Any) -> None:
        self._client = client
        self.threads = max(each["nthreads"] for each in self._workers().values())

    def usual_memory(self) -> int:
        """Of what the smallest worker was started with, a share that leaves room for the program itself."""
        limits = [int(each["memory_limit"] or 0) for each in self._workers().values()]
        if min(limits) <= 0:
            raise PlanError(
                f"memory: workers of the scheduler at {self._client.scheduler.address} were started without a memory "
                'limit; say what each may use for patches and tiles, such as --memory "2 GiB"'
            )
        return int(MEMORY_SHARE * min(limits))

    def _workers(self) -> dict[str, Any]:
        workers: dict[str, Any] = self._client.scheduler_info(n_workers=-1)["workers"]
        if not workers:
            try:
                self._client.wait_for_workers(1, timeout=WAIT_FOR_WORKERS)
            except TimeoutError:
                raise EngineError(
                    f"scheduler {self._client.scheduler.address}: no worker joined within {WAIT_FOR_WORKERS:.0f} s; "
                    "start workers for it and run again"
                ) from None
            workers = self._client.scheduler_info(n_workers=-1)["workers"]
        return workers

    def run(self, path: Path, batches: Batches) -> Iterator[list[TileRecord]]:
        """See `Executor`."""
        from distributed import as_completed  # costs 0.4 s at start-up

        slots = sum(each["nthreads"] for each in self._workers().values())
        task = _remote_task()
        flow = as_completed()
        under_way = 0

        def feed() -> int:
            tiles = batches.take(slots)
            if not tiles:
                return 0
            flow.add(self._client.submit(task, str(path), tiles, pure=False))
            return 1

        for _ in range(WINDOW * slots):
            under_way += feed()
        try:
            while under_way:
                future = next(flow)
                records = _booked(self._result(future), batches)
                under_way += feed() - 1
                yield records
            # The workers of a given scheduler live on, and should not keep a cube's patches in memory.
            self._client.run(forget, str(path), on_error="ignore")
        finally:
            # Whatever is still queued when the render stops is of no use to anyone.
            with contextlib.suppress(Exception):
                self._client.cancel(list(flow.futures))

    @staticmethod
    def _result(future: Any) -> BatchResult:
        from distributed import CancelledError, KilledWorker  # costs 0.4 s at start-up

        try:
            result: BatchResult = future.result()
        except KilledWorker as error:
            raise EngineError(
                f"{error.allowed_failures + 1} workers died, one after the other, over the same batch of tiles: out "
                "of memory, most likely; give them more of it, or less to do at once (--threads, --memory), and run "
                "again: it goes on where it stopped"
            ) from error
        except ImportError as error:
            raise EngineError(
                f"a worker cannot load cubeforge ({error}); install the same version wherever workers run"
            ) from error
        except (CancelledError, OSError) as error:
            raise EngineError(
                "the dask scheduler or its workers went away; what they had finished is kept, and the same command "
                "goes on from there"
            ) from error
        return result


@contextlib.contextmanager
def local_executor(workers: int, threads: int) -> Iterator[DaskExecutor]:
    """A dask cluster of processes on this machine, on the loopback address, gone at the end.

    Raises
    ------
    EngineError
        The processes don't start.
    """
    import dask  # costs 0.5 s at start-up
    from distributed import Client, LocalCluster

    # Memory is bounded by the plan, which knows what it is for; dask pausing workers would only stall them.
    unbounded = {
        f"distributed.worker.memory.{what}": False for what in ("target", "spill", "pause", "terminate")
    }
    with _quiet(), dask.config.set(unbounded), contextlib.ExitStack() as closing:
        with hold_interrupts():
            try:
                cluster = LocalCluster(
                    n_workers=workers,
                    threads_per_worker=threads,
                    processes=True,
                    host="127.0.0.1",
                    dashboard_address="127.0.0.1:0",
                    worker_dashboard_address="127.0.0.1:0",
                    silence_logs=SILENT,
                )
                closing.callback(_close, cluster)
                client = Client(cluster)
            except (RuntimeError, OSError, TimeoutError) as error:
                raise EngineError(
                    f"{workers} worker processes on this machine: they don't start ({error}); fewer of them "
                    "(--workers) may, or none: --workers 0 renders without dask"
                ) from error
            closing.callback(_close, client)
        yield DaskExecutor(client)


@contextlib.contextmanager
def _quiet() -> Iterator[None]:
    """Keep dask's log off the terminal: what goes wrong arrives as an exception, and is told in one line."""
    # One handler serves dask's loggers, some of which have levels of their own.
    levels = {handler: handler.level for handler in logging.getLogger("distributed").handlers}
    for handler in levels:
        handler.setLevel(SILENT)
    try:
        yield
    finally:
        for handler, level in levels.items():
            handler.setLevel(level)


def _close(part: Any) -> None:
    """Close a client or a cluster; tasks that still run are of no use to anyone, and nor are complaints."""
    with hold_interrupts(), contextlib.suppress(Exception):
        part.close()


def check_scheduler_file(scheduler_file: Path) -> None:
    """Raise EngineError when the file with which workers of a scheduler are found is missing."""
    if not scheduler_file.is_file():
        raise EngineError(
            f"{scheduler_file}: there is no such scheduler file; start a scheduler with it first "
            "(dask scheduler --scheduler-file ...), and workers"
        )


@contextlib.contextmanager
def scheduler_executor(scheduler_file: Path) -> Iterator[DaskExecutor]:
    """Workers of a scheduler that is up already, found through its file.

    Raises
    ------
    EngineError
        The file is missing or the scheduler doesn't answer.
    """
    from distributed import Client  # costs 0.5 s at start-up

    check_scheduler_file(scheduler_file)
    with _quiet(), contextlib.ExitStack() as closing:
        try:
            client = Client(scheduler_file=str(scheduler_file), timeout=WAIT_FOR_SCHEDULER)
        except (OSError, TimeoutError, ValueError) as error:
            raise EngineError(f"{scheduler_file}: the scheduler does not answer ({error})") from error
        closing.callback(_close, client)
        yield DaskExecutor(client)
