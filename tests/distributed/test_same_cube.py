"""The same cube, bit for bit, from every way to run a render."""

from __future__ import annotations

import contextlib
import socket
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from support.renders import (
    Contents,
    assert_same_cube,
    booked,
    contents,
    leftovers,
    make_job,
)

from cubeforge.engine.plan import make_plan
from cubeforge.engine.render import Outcome, render
from cubeforge.engine.setup import build_setup
from cubeforge.job import parse_job

MIB = 2**20


def run(folder: Path, cloud: Path, **options: Any) -> Outcome:
    job = make_job(snapshot={"path": str(cloud)}, output={"cube": str(folder / "clump.zarr")})
    return render(parse_job(job), **options)


@pytest.fixture(scope="module")
def serial(cloud: Path, tmp_path_factory: pytest.TempPathFactory) -> tuple[Outcome, Contents]:
    outcome = run(tmp_path_factory.mktemp("serial"), cloud, workers=0)
    return outcome, contents(outcome.cube)


def check(outcome: Outcome, serial: tuple[Outcome, Contents]) -> None:
    wanted, cube = serial
    assert outcome.rendered == outcome.tiles == 64
    assert sorted(booked(outcome.cube)) == list(range(64))
    assert leftovers(outcome.cube) == []
    # The path of the snapshot, in the history, is the same; nothing else may tell the cubes apart.
    assert_same_cube(outcome.cube, cube)
    for name, total in wanted.totals.items():
        if name != "read_bytes":
            assert outcome.totals[name] == pytest.approx(total, rel=1e-12), name


def test_serial_finds_something(serial: tuple[Outcome, Contents]):
    outcome, cube = serial
    # The gas has tens of kelvins at most; corners of the image look past the box, seen at a slant.
    assert 1.0 < cube.intensity.max() < 60.0
    assert cube.maps[0, 16:48, 16:48].min() > 0.0
    assert outcome.totals["rays"] > 64 * 64


@pytest.mark.parametrize("times", [1.0, 2.0, 100.0])
def test_serial_with_little_memory(tmp_path: Path, cloud: Path, serial: Any, times: float):
    job = make_job(snapshot={"path": str(cloud)})
    least = make_plan(build_setup(parse_job(job))).least_memory(1)
    outcome = run(tmp_path, cloud, workers=0, memory=int(least * times))
    check(outcome, serial)
    # Patches that did not stay in memory were read again.
    assert (outcome.totals["read_bytes"] > serial[0].totals["read_bytes"]) == (times < 100.0)


@pytest.mark.parametrize(
    ("workers", "threads", "memory"),
    [(1, 1, None), (2, 1, None), pytest.param(2, 2, 48 * MIB, marks=pytest.mark.slow)],
)
def test_local_cluster(
    tmp_path: Path, cloud: Path, serial: Any, workers: int, threads: int, memory: int | None
):
    check(run(tmp_path, cloud, workers=workers, threads=threads, memory=memory), serial)


@pytest.mark.slow
def test_given_scheduler(tmp_path: Path, cloud: Path, serial: Any, scheduler: Callable[..., Any]):
    started = scheduler(workers=2, threads=2)
    check(run(tmp_path, cloud, scheduler_file=started.file), serial)
    # The workers stay, and serve the next render.
    (tmp_path / "next").mkdir()
    check(run(tmp_path / "next", cloud, scheduler_file=started.file), serial)


def test_finished_cube_is_left_alone(tmp_path: Path, cloud: Path, serial: Any):
    first = run(tmp_path, cloud, workers=0)
    chunks = {path: path.stat().st_mtime_ns for path in first.cube.rglob("c/0/*/*")}
    again = run(tmp_path, cloud, workers=2)
    assert again.rendered == 0
    assert again.totals == first.totals
    assert {path: path.stat().st_mtime_ns for path in first.cube.rglob("c/0/*/*")} == chunks
    assert len(chunks) == 2 * 64


def test_next_to_another_cluster(tmp_path: Path, cloud: Path, serial: Any):
    # The port that dask prefers is taken; warnings are errors here.
    with contextlib.ExitStack() as closing:
        with contextlib.suppress(OSError):
            closing.enter_context(socket.create_server(("127.0.0.1", 8787)))
        check(run(tmp_path, cloud, workers=1), serial)
