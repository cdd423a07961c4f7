"""One run at a time: a lease on a cube, with a beat that others watch.

The holder rewrites a counter in its lease file every few seconds. Whoever wants the cube watches that
counter by its own monotonic clock; clocks of two machines are never compared. Mutual exclusion: a run first
writes its own lease and only then looks for others, so of two runs at least one sees the other.
"""

from __future__ import annotations

import contextlib
import json
import logging
import os
import threading
import time
from dataclasses import dataclass
from pathlib import Path

from cubeforge.cube.durable import STAGING, Staging, fsync_folder, sweep, sweep_moved
from cubeforge.cube.process import alive, machine, new_run_id, started
from cubeforge.errors import CubeError

log = logging.getLogger(__name__)

PREFIX = "lease-"
"""Lease files are called this and the run's id."""
INTERVAL = 5.0
"""Seconds between two beats."""
PATIENCE = 6
"""Intervals without a beat after which a run counts as dead."""

_COUNTER = 20


@dataclass(frozen=True)
class _Owner:
    run: str
    where: str
    pid: int
    since: str

    def dead_here(self) -> bool | None:
        """Whether the owner is dead, if it ran on this machine; None for another machine."""
        return None if self.where != machine() else not alive(self.pid, self.since)

    def __str__(self) -> str:
        return f"run {self.run} (process {self.pid} on {self.where})"


class Lease:
    """The right to write to a cube, held while the context lasts.

    >>> with Lease(path) as lease:                       # doctest: +SKIP
    ...     cube = open_cube(path, run=lease.run)

    Parameters
    ----------
    path : path
        The cube.
    run : str, optional
        Id of this run; a new one by default.
    interval, patience : float, int
        Seconds between beats, and beats missed until another run counts as dead. All runs on a cube must
        use the same.

    Attributes
    ----------
    run : str
    swept : int
        Files of dead runs that were removed on entry.

    Raises
    ------
    CubeError
        On entry, when another run holds the cube: who, where, and what to do.
    """

    def __init__(
        self,
        path: Path | str,
        run: str | None = None,
        *,
        interval: float = INTERVAL,
        patience: int = PATIENCE,
    ) -> None:
        self.run = run or new_run_id()
        self.swept = 0
        self._cube = Path(path)
        self._folder = self._cube / "ledger"
        self._path = self._folder / f"{PREFIX}{self.run}"
        self._interval, self._patience = interval, patience
        self._stop = threading.Event()
        self._lost = threading.Event()
        self._beats = 0
        self._thread = threading.Thread(target=self._beat, name=f"lease {self.run}", daemon=True)

    def __enter__(self) -> Lease:
        if not self._folder.is_dir():
            raise CubeError(f"{self._cube}: is not a cube (it has no ledger); nothing to hold a lease on")
        self._claim()
        self._thread.start()
        try:
            self._outlast_others()
            self._sweep_orphans()
            self.check()
        except BaseException:
            self._release()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        self._release()

    def check(self) -> None:
        """Raise CubeError when this run no longer holds the cube: it stalled, and another took over."""
        if self._lost.is_set():
            raise CubeError(
                f"{self._cube}: run {self.run} was silent for over {self._interval * self._patience:g} s and "
                "another run took the cube over; this one stops. Tiles written so far are kept"
            )

    # -- holding ------------------------------------------------------------------------------------------

    def _claim(self) -> None:
        """Write the lease file, whole from its first moment."""
        pid = os.getpid()
        owner = {"run": self.run, "where": machine(), "pid": pid, "since": started(pid)}
        staging = Staging(self._folder, self.run, create=True)
        staging.write(self._path, f"{0:0{_COUNTER}d}\n{json.dumps(owner)}\n".encode())

    def _beat(self) -> None:
        # In place, not by renaming: network file systems show new content of a known file sooner.
        with contextlib.suppress(OSError), open(self._path, "r+b", buffering=0) as file:
            while not self._stop.wait(self._interval):
                self._beats += 1
                try:
                    os.pwrite(file.fileno(), f"{self._beats:0{_COUNTER}d}".encode(), 0)
                    os.fsync(file.fileno())
                    held = os.stat(self._path).st_ino == os.fstat(file.fileno()).st_ino
                except FileNotFoundError:
                    held = False
                except OSError as error:
                    # A full disk or a server away for a while: others decide by the beats that they see.
                    log.warning(
                        "%s: the beat of run %s could not be written: %s", self._path, self.run, error
                    )
                    continue
                if not held:
                    break
            else:
                return
        self._lost.set()

    def _release(self) -> None:
        self._stop.set()
        self._thread.join()
        if not self._lost.is_set():
            sweep(self._folder, self.run)
            self._path.unlink(missing_ok=True)
            fsync_folder(self._folder)

    # -- others -------------------------------------------------------------------------------------------

    def _outlast_others(self) -> None:
        """Return when every other lease is gone or dead (and swept); CubeError when one is alive."""
        seen: dict[Path, tuple[bytes, float]] = {}
        while others := [path for path in self._folder.glob(f"{PREFIX}*") if path != self._path]:
            for path in others:
                self._judge(path, seen)
            time.sleep(self._interval / 4)

    def _judge(self, path: Path, seen: dict[Path, tuple[bytes, float]]) -> None:
        try:
            content = path.read_bytes()
        except FileNotFoundError:
            return
        owner, now = _parse(path, content), time.monotonic()
        dead = owner.dead_here()
        if path not in seen:
            seen[path] = (content, now)
            if dead is None:
                log.warning(
                    "%s: %s left a lease; watching up to %g s whether it beats",
                    self._cube, owner, self._interval * self._patience,
                )  # fmt: skip
        before, since = seen[path]
        silent = now - since >= self._interval * self._patience
        if dead or (dead is None and content == before and silent):
            self._take_over(path, owner)
        elif dead is None and content == before:
            return
        # Of two runs that start together, the later id gives way at once and the earlier one waits for that.
        elif owner.run < self.run or silent:
            raise CubeError(
                f"{self._cube}: {owner} is writing to this cube. Wait for it or stop it, then resume; "
                f"a run that died is noticed after {self._interval * self._patience:g} s"
            )

    def _take_over(self, path: Path, owner: _Owner) -> None:
        log.warning("%s: %s is dead; taking the cube over", self._cube, owner)
        # The lease goes last: a take-over that is cut short is then done again.
        self.swept += sweep(self._folder, owner.run)
        path.unlink(missing_ok=True)
        fsync_folder(self._folder)

    def _sweep_orphans(self) -> None:
        """Remove what is left of runs that have no lease file (they ended, or were half swept)."""
        sweep_moved(self._folder)
        for folder in self._folder.glob(f"{STAGING}*"):
            run = folder.name.removeprefix(STAGING)
            if run != self.run and not (self._folder / f"{PREFIX}{run}").exists():
                self.swept += sweep(self._folder, run)


def _parse(path: Path, content: bytes) -> _Owner:
    """Who wrote a lease file; one that cannot be read belongs to nobody here, and is watched."""
    try:
        owner = json.loads(content.partition(b"\n")[2])
        return _Owner(str(owner["run"]), str(owner["where"]), int(owner["pid"]), str(owner["since"]))
    except (ValueError, KeyError, TypeError):
        return _Owner(path.name.removeprefix(PREFIX), "an unknown machine", 0, "")
