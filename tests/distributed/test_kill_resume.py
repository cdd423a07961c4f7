"""Renders that are killed, starved, interrupted or lose a part of themselves, and what the next run makes of it."""

from __future__ import annotations

import os
import random
import resource
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import psutil
import pytest
from support.renders import (
    Contents,
    assert_same_cube,
    booked,
    cli,
    command,
    contents,
    kill_group,
    leftovers,
    one_line,
    processes_of,
    stored,
    wait_for,
    write_job,
)

pytestmark = [pytest.mark.fault, pytest.mark.slow]

TILES = 256
SLOTS = 2
LARGEST_BATCH = -(-TILES // (4 * SLOTS))
"""No batch holds more than this share of the tiles, so that the last ones spread over all slots."""


def job_for(folder: Path, cloud: Path) -> Path:
    return write_job(
        folder / "clump.toml",
        snapshot={"path": str(cloud)},
        view={"pixel": "30 arcsec"},
        channels={"width": "0.1 km/s"},
        output={"cube": "clump.zarr"},
    )


@pytest.fixture(scope="module")
def whole(cloud: Path, tmp_path_factory: pytest.TempPathFactory) -> Contents:
    """The cube of a render that nothing disturbs."""
    folder = tmp_path_factory.mktemp("whole")
    result = cli("render", job_for(folder, cloud), "--workers", "0", "--no-picture", "--quiet")
    assert result.returncode == 0, result.stderr
    assert result.stderr == ""
    return contents(folder / "clump.zarr")


@pytest.fixture
def job(tmp_path: Path, cloud: Path) -> Path:
    return job_for(tmp_path, cloud)


@pytest.fixture
def start(job: Path) -> Iterator[Callable[..., subprocess.Popen[str]]]:
    """Starts a render in a session of its own."""
    running: list[subprocess.Popen[str]] = []

    def run(*words: str | Path, **options: Any) -> subprocess.Popen[str]:
        process = subprocess.Popen(
            command("render", job, "--no-picture", "--quiet", *words),
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            start_new_session=True,
            **options,
        )
        running.append(process)
        return process

    yield run
    for process in running:
        if process.poll() is None:
            kill_group(process)
        process.communicate()


def finish(job: Path, whole: Contents) -> None:
    """Go on to the end; the cube is the one of an undisturbed render, with nothing left behind."""
    result = cli("render", job, "--workers", "0", "--no-picture", "--quiet")
    assert result.returncode == 0, result.stderr
    cube = job.parent / "clump.zarr"
    assert set(booked(cube)) == set(range(TILES))
    assert leftovers(cube) == []
    assert [each.name for each in job.parent.iterdir() if each.name.startswith(".")] == []
    assert_same_cube(cube, whole)


def some_tiles_booked(job: Path, count: int = 1) -> Callable[[], bool]:
    return lambda: len(booked(job.parent / "clump.zarr")) >= count


def error_of(process: subprocess.Popen[str], status: int, timeout: float = 60.0) -> str:
    """The one line that a render ends with."""
    out, err = process.communicate(timeout=timeout)
    return one_line(subprocess.CompletedProcess(process.args, process.returncode, out, err), status)


def test_killed_at_any_moment(job: Path, start: Callable[..., Any], whole: Contents):
    cube = job.parent / "clump.zarr"
    draw = random.Random(20240611)
    done: dict[int, int] = {}
    kills = in_the_middle = 0

    def kill_and_look(process: subprocess.Popen[str]) -> None:
        nonlocal done, kills, in_the_middle
        kill_group(process)
        kills += 1
        if not cube.exists():
            return
        written, tiles = stored(cube), booked(cube)
        assert len(set(tiles)) == len(tiles), "a tile that was done was booked again"
        assert done.keys() <= set(tiles) <= written.keys(), "a tile that was done is lost"
        assert {tile: written[tile] for tile in done} == done, "a tile that was done was written again"
        assert len(written) - len(tiles) <= kills * SLOTS * LARGEST_BATCH
        in_the_middle += 0 < len(tiles) < TILES
        done = {tile: written[tile] for tile in tiles}

    # While it starts: before there is a cube, before there are workers, before they write.
    process = start("--workers", str(SLOTS))
    began = time.monotonic()
    wait_for(lambda: stored(cube), 60)
    starting = time.monotonic() - began
    kill_and_look(process)
    for share in (0.9, 0.6, 0.3):
        process = start("--workers", str(SLOTS))
        time.sleep(starting * (share + draw.uniform(-0.1, 0.1)))
        kill_and_look(process)
    # While it writes: after a number of tiles that is drawn, and then at any point of the next few.
    for count in sorted(draw.sample(range(8, TILES - 40), 6)):
        process = start("--workers", str(SLOTS))
        wait_for(lambda count=count: len(stored(cube)) >= count, 60)
        time.sleep(draw.uniform(0.0, 0.05))
        kill_and_look(process)
    assert kills == 10
    assert in_the_middle >= 4
    finish(job, whole)
    assert len(booked(cube)) == TILES


def test_no_process_outlives_a_killed_client(job: Path, start: Callable[..., Any], whole: Contents):
    process = start("--workers", str(SLOTS))
    wait_for(some_tiles_booked(job), 60)
    assert len(processes_of(process.pid)) > SLOTS
    # The client alone: its workers have to notice by themselves.
    process.kill()
    process.communicate()
    wait_for(lambda: not processes_of(process.pid), 20)
    finish(job, whole)


def test_killed_worker_is_replaced(job: Path, start: Callable[..., Any], whole: Contents):
    process = start("--workers", str(SLOTS))
    wait_for(some_tiles_booked(job), 60)
    workers = [pid for pid in processes_of(process.pid) if "spawn_main" in _command_line(pid)]
    assert len(workers) == SLOTS
    os.kill(workers[0], signal.SIGKILL)
    out, err = process.communicate(timeout=90)
    assert process.returncode == 0, err
    # Python tells of semaphores that a killed process could not give back; nothing else is said.
    said = [
        line for line in err.splitlines() if "resource_tracker" not in line and "warnings.warn(" not in line
    ]
    assert said == []
    assert out != ""
    tiles = booked(job.parent / "clump.zarr")
    # A batch whose records were durable before the worker could say so is rendered again.
    assert len(tiles) - len(set(tiles)) <= LARGEST_BATCH
    finish(job, whole)


def _command_line(pid: int) -> str:
    return Path(f"/proc/{pid}/cmdline").read_bytes().replace(b"\0", b" ").decode()


@pytest.mark.parametrize(
    ("number", "when"),
    [
        (signal.SIGINT, "at once"),
        (signal.SIGINT, "while workers start"),
        (signal.SIGINT, "in the middle"),
        (signal.SIGTERM, "while workers start"),
        (signal.SIGTERM, "in the middle"),
    ],
)
def test_stopped(job: Path, start: Callable[..., Any], whole: Contents, number: signal.Signals, when: str):
    process = start("--workers", str(SLOTS))
    cube = job.parent / "clump.zarr"
    if when == "at once":
        wait_for(cube.exists, 60)
    elif when == "while workers start":
        wait_for(lambda: any("spawn_main" in _command_line(pid) for pid in _living(process.pid)), 60)
        time.sleep(0.3)
    else:
        wait_for(some_tiles_booked(job), 60)
    # A terminal sends Ctrl-C to all processes of the job; a batch system stops the one that it started.
    if number == signal.SIGINT:
        os.killpg(process.pid, number)
    else:
        process.send_signal(number)
    assert error_of(process, 130) == "stopped; the same command goes on from here"
    wait_for(lambda: not processes_of(process.pid), 20)
    before = len(booked(cube)) if cube.exists() else 0
    assert before < TILES
    finish(job, whole)
    assert len(booked(cube)) == TILES


def _living(session: int) -> list[int]:
    return [pid for pid in processes_of(session) if Path(f"/proc/{pid}/cmdline").exists()]


def test_scheduler_dies(job: Path, start: Callable[..., Any], whole: Contents, scheduler: Callable[..., Any]):
    started = scheduler(workers=2, threads=1)
    process = start("--scheduler-file", started.file)
    wait_for(some_tiles_booked(job), 60)
    started.scheduler.kill()
    message = error_of(process, 3)
    assert "scheduler" in message
    assert "the same command goes on" in message
    finish(job, whole)


def test_scheduler_that_is_not_there(job: Path, tmp_path: Path):
    message = one_line(cli("render", job, "--scheduler-file", tmp_path / "none.json"), 3)
    assert message.startswith(f"{tmp_path}/none.json: there is no such scheduler file")


def test_workers_without_the_package(
    job: Path, tmp_path: Path, scheduler: Callable[..., Any], whole: Contents
):
    # As on a node where nobody installed it: not even its name is known to the scheduler and its workers.
    (tmp_path / "hidden" / "cubeforge").mkdir(parents=True)
    (tmp_path / "hidden" / "cubeforge" / "__init__.py").write_text("raise ImportError('not on this node')\n")
    environment = os.environ | {"PYTHONPATH": str(tmp_path / "hidden")}
    started = scheduler(workers=1, threads=1, env=environment)
    message = one_line(cli("render", job, "--scheduler-file", started.file, "--no-picture", "--quiet"), 3)
    assert message.startswith("a worker cannot load cubeforge (not on this node)")
    finish(job, whole)


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of 6 MiB; only root can mount it."""
    folder = tmp_path / "disk"
    folder.mkdir()
    mounted = shutil.which("mount") and subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=6m", "tmpfs", folder], capture_output=True
    )
    if not mounted or mounted.returncode:
        pytest.skip("mounting a file system takes root")
    yield folder
    subprocess.run(["umount", "-l", folder], check=True)


@pytest.mark.parametrize("workers", ["0", "2"])
def test_disk_full(small_disk: Path, cloud: Path, whole: Contents, workers: str):
    job = job_for(small_disk, cloud)
    filler = small_disk / "filler"
    filler.write_bytes(bytes(5 * 2**20))
    message = one_line(cli("render", job, "--workers", workers, "--no-picture", "--quiet"), 3)
    assert message.startswith(str(small_disk / "clump.zarr"))
    assert "the disk is full" in message
    assert "make room" in message
    assert leftovers(small_disk / "clump.zarr") == []
    kept = booked(small_disk / "clump.zarr")
    assert 0 < len(kept) < TILES
    filler.unlink()
    finish(job, whole)


def test_files_may_not_grow(job: Path, whole: Contents):
    # Every user can set this limit; tiles are larger than the descriptions.
    def limit() -> None:
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (11000, 11000))

    words = ("render", job, "--workers", "0", "--no-picture", "--quiet")
    message = one_line(cli(*words, preexec_fn=limit), 3)
    assert message.startswith(str(job.parent / "clump.zarr"))
    assert "files may not be that large" in message
    finish(job, whole)


DISTURBED = """
import sys
from pathlib import Path
from cubeforge.cli import main
from cubeforge.engine import render as engine

job, cloud, workers, after, how = sys.argv[1:]
real = engine.render

def render(job, *, watch, **options):
    def disturb(progress):
        if progress.done >= int(after):
            for file in Path(cloud).glob("Level_*/Cell_D_*"):
                if file.exists():
                    file.unlink() if how == "vanish" else file.open("r+b").truncate(1000)
    return real(job, watch=disturb, **options)

if __name__ == "__main__":
    engine.render = render
    main(["render", job, "--workers", workers, "--memory", "24 MiB", "--no-picture", "--quiet"])
"""
"""The command line, with a hand that damages the snapshot when so many tiles are done."""


@pytest.mark.parametrize("workers", ["0", "2"])
@pytest.mark.parametrize(
    ("after", "how", "words"), [(0, "vanish", "the data file is missing"), (12, "truncate", "Cell_D_0000")]
)
def test_snapshot_is_damaged_meanwhile(
    tmp_path: Path, cloud: Path, whole: Contents, workers: str, after: int, how: str, words: str
):
    copy = tmp_path / "copy.plotfile"
    shutil.copytree(cloud, copy)
    job = job_for(tmp_path, copy)
    script = tmp_path / "disturbed.py"
    script.write_text(DISTURBED)
    result = subprocess.run(
        [sys.executable, str(script), str(job), str(copy), workers, str(after), how],
        capture_output=True,
        text=True,
        timeout=60,
    )
    message = one_line(result)
    assert f"{copy}/Level_" in message
    assert words in message
    tiles = booked(tmp_path / "clump.zarr")
    assert len(tiles) >= after
    assert leftovers(tmp_path / "clump.zarr") == []
    # The snapshot is whole again: the render goes on, and what was rendered before is as good.
    shutil.rmtree(copy)
    shutil.copytree(cloud, copy)
    assert cli("render", job, "--workers", "0", "--no-picture", "--quiet").returncode == 0
    found = contents(tmp_path / "clump.zarr")
    np.testing.assert_array_equal(found.intensity, whole.intensity)
    np.testing.assert_array_equal(found.maps, whole.maps)


def test_second_render_of_the_same_cube(job: Path, start: Callable[..., Any], whole: Contents):
    process = start("--workers", str(SLOTS))
    wait_for(some_tiles_booked(job), 60)
    # The workers stand still meanwhile, or a fast machine would be done before the second render looks.
    workers = psutil.Process(process.pid).children(recursive=True)
    for worker in workers:
        worker.suspend()
    try:
        message = one_line(cli("render", job, "--workers", "0", "--no-picture", "--quiet"))
    finally:
        for worker in workers:
            worker.resume()
    assert f"process {process.pid}" in message
    assert "is writing to this cube" in message
    _, err = process.communicate(timeout=90)
    assert process.returncode == 0, err
    assert len(booked(job.parent / "clump.zarr")) == TILES
    assert_same_cube(job.parent / "clump.zarr", whole)
