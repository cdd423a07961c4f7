"""One run at a time: the living are respected, the dead are replaced."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from cubeforge.cube.lease import Lease
from cubeforge.cube.process import alive, machine, new_run_id, started
from cubeforge.cube.store import Cube
from cubeforge.errors import CubeError

FAST: Any = {"interval": 0.05, "patience": 6}
PATIENT: Any = {"interval": 0.05, "patience": 40}
HOLDER = (
    "import sys, time\n"
    "from cubeforge.cube.lease import Lease\n"
    "with Lease(sys.argv[1], interval=0.05):\n"
    "    print('held', flush=True)\n"
    "    sys.stdin.read()\n"
)


@pytest.fixture
def cube(filled: Callable[..., Any]) -> Cube:
    made: Cube = filled().cube
    for folder in made.ledger.glob("partial-*"):
        for file in folder.iterdir():
            file.unlink()
        folder.rmdir()
    return made


def _hold(cube: Cube) -> subprocess.Popen[str]:
    run = [sys.executable, "-c", HOLDER, str(cube.path)]
    holder = subprocess.Popen(run, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    assert holder.stdout is not None
    assert holder.stdout.readline() == "held\n"
    return holder


def _end(holder: subprocess.Popen[str]) -> None:
    holder.communicate()
    assert holder.returncode is not None


def _foreign(cube: Cube, run: str, beat: int = 0) -> Path:
    """Lease of a run on another machine."""
    path = cube.ledger / f"lease-{run}"
    owner = {"run": run, "where": "node17-00000000", "pid": os.getpid(), "since": "1"}
    path.write_text(f"{beat:020d}\n{json.dumps(owner)}\n")
    (cube.ledger / f"partial-{run}").mkdir(exist_ok=True)
    (cube.ledger / f"partial-{run}" / "left").write_text("half a tile")
    return path


def _names(cube: Cube) -> set[str]:
    return {each.name for each in cube.ledger.iterdir() if each.suffix not in (".tiles", ".json")}


def test_held_and_given_back(cube: Cube) -> None:
    with Lease(cube.path, "r1", **FAST) as lease:
        assert _names(cube) == {"lease-r1", "partial-r1"}
        first = (cube.ledger / "lease-r1").read_text()
        time.sleep(0.3)
        assert (cube.ledger / "lease-r1").read_text() > first
        lease.check()
    assert _names(cube) == set()
    with Lease(cube.path, **FAST):
        pass


def test_a_living_run_on_this_machine_is_respected_at_once(cube: Cube) -> None:
    holder = _hold(cube)
    start = time.monotonic()
    with pytest.raises(CubeError, match=rf"process {holder.pid} on {machine()}.*Wait for it or stop it"):
        Lease(cube.path, interval=5).__enter__()
    assert time.monotonic() - start < 15
    assert len(_names(cube)) == 2
    _end(holder)
    assert holder.returncode == 0
    assert _names(cube) == set()


def test_a_killed_run_on_this_machine_is_replaced_at_once(cube: Cube) -> None:
    holder = _hold(cube)
    (next(cube.ledger.glob("partial-*")) / "left").write_text("half a tile")
    holder.send_signal(signal.SIGKILL)
    # Not waited for yet: a process that was killed and not collected is dead as well.
    time.sleep(0.2)
    start = time.monotonic()
    with Lease(cube.path, interval=5) as lease:
        assert time.monotonic() - start < 15
        assert lease.swept == 1
        assert _names(cube) == {f"lease-{lease.run}", f"partial-{lease.run}"}
    _end(holder)


def test_a_stopped_process_is_alive(cube: Cube) -> None:
    holder = _hold(cube)
    holder.send_signal(signal.SIGSTOP)
    with pytest.raises(CubeError, match="is writing to this cube"):
        Lease(cube.path, **FAST).__enter__()
    holder.send_signal(signal.SIGCONT)
    _end(holder)
    assert holder.returncode == 0


def test_a_silent_run_elsewhere_is_replaced_after_the_patience(cube: Cube) -> None:
    _foreign(cube, "a-first")
    start = time.monotonic()
    with Lease(cube.path, "b-second", **FAST) as lease:
        assert 0.3 <= time.monotonic() - start < 3
        assert lease.swept == 1
        assert _names(cube) == {"lease-b-second", "partial-b-second"}


@pytest.mark.parametrize("run", ["a-earlier", "z-later"])
def test_a_beating_run_elsewhere_is_respected(cube: Cube, run: str) -> None:
    path = _foreign(cube, run)
    stop = threading.Event()

    def beat() -> None:
        count = 0
        while not stop.wait(0.05):
            count += 1
            _foreign(cube, run, count)

    thread = threading.Thread(target=beat)
    thread.start()
    try:
        with pytest.raises(CubeError, match=f"run {run} .*node17.* is writing to this cube"):
            Lease(cube.path, "m-middle", **PATIENT).__enter__()
    finally:
        stop.set()
        thread.join()
    assert path.exists()
    assert _names(cube) == {f"lease-{run}", f"partial-{run}"}


def test_an_unreadable_lease_is_watched(cube: Cube) -> None:
    (cube.ledger / "lease-x").write_bytes(b"\xff\xfe")
    start = time.monotonic()
    with Lease(cube.path, **FAST):
        assert time.monotonic() - start >= 0.3
    assert _names(cube) == set()


def test_of_many_that_start_together_exactly_one_holds(cube: Cube) -> None:
    """Several rounds; runs in threads of one process count as different runs."""
    for _ in range(5):
        held: list[str] = []
        barrier, release = threading.Barrier(6), threading.Event()

        def contend(name: str, barrier: threading.Barrier, release: threading.Event, held: list[str]) -> None:
            barrier.wait()
            try:
                with Lease(cube.path, name, **PATIENT):
                    held.append(name)
                    release.wait(10)
            except CubeError:
                pass

        threads = [threading.Thread(target=contend, args=(f"r{n}", barrier, release, held)) for n in range(6)]
        for thread in threads:
            thread.start()
        # The five that give way end on their own while the sixth holds on.
        start = time.monotonic()
        while sum(thread.is_alive() for thread in threads) > 1 and time.monotonic() - start < 8:
            time.sleep(0.01)
        release.set()
        for thread in threads:
            thread.join()
        assert len(held) == 1
        assert _names(cube) == set()


def test_a_run_that_was_replaced_notices(cube: Cube) -> None:
    with Lease(cube.path, "r1", **FAST) as lease:
        (cube.ledger / "lease-r1").unlink()
        time.sleep(0.3)
        with pytest.raises(CubeError, match=r"run r1 was silent .* another run took the cube over"):
            lease.check()


def test_leftovers_without_a_lease_are_swept(cube: Cube) -> None:
    for name in ("partial-old", "swept-older-1234"):
        (cube.ledger / name).mkdir()
        (cube.ledger / name / "left").write_text("half a tile")
    with Lease(cube.path, **FAST) as lease:
        assert lease.swept == 1
        assert _names(cube) == {f"lease-{lease.run}", f"partial-{lease.run}"}


def test_not_a_cube(tmp_path: Path) -> None:
    with pytest.raises(CubeError, match="nothing to hold a lease on"):
        Lease(tmp_path).__enter__()


def test_processes() -> None:
    assert alive(os.getpid(), started(os.getpid()))
    # The id is in use, by a process that started at another time.
    assert not alive(os.getpid(), "1")
    child = subprocess.Popen([sys.executable, "-c", "pass"])
    child.wait()
    assert not alive(child.pid, "1")
    first = new_run_id()
    time.sleep(1e-4)
    assert first < new_run_id()
    assert "." not in machine().rpartition("-")[2]
