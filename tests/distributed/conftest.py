"""Fixtures for renders of several processes."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from support.renders import demo_cloud, wait_for


@pytest.fixture(scope="session")
def cloud(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The demonstration cloud on disk; not to be changed."""
    return demo_cloud(tmp_path_factory.mktemp("cloud"))


@dataclass
class Scheduler:
    """A dask scheduler and its workers, each a process."""

    file: Path
    scheduler: subprocess.Popen[bytes]
    workers: list[subprocess.Popen[bytes]]


@pytest.fixture
def scheduler(tmp_path: Path) -> Iterator[Callable[..., Scheduler]]:
    """Starts a scheduler with workers on the loopback address; all are stopped at the end."""
    running: list[subprocess.Popen[bytes]] = []

    def run(*words: str, **options: Any) -> subprocess.Popen[bytes]:
        log = (tmp_path / f"dask-{len(running)}.log").open("wb")
        with log:
            process = subprocess.Popen(
                [sys.executable, "-m", *words],
                stdout=log,
                stderr=log,
                cwd=tmp_path,
                start_new_session=True,
                **options,
            )
        running.append(process)
        return process

    def start(workers: int, threads: int, **options: Any) -> Scheduler:
        file = tmp_path / "scheduler.json"
        place = ("--host", "127.0.0.1", "--dashboard-address", "127.0.0.1:0", "--scheduler-file", str(file))
        leader = run("distributed.cli.dask_scheduler", "--port", "0", *place, **options)
        wait_for(file.is_file, 30)
        words = ("--nthreads", str(threads), "--local-directory", str(tmp_path), "--death-timeout", "30")
        followers = [run("distributed.cli.dask_worker", *place, *words, **options) for _ in range(workers)]
        return Scheduler(file, leader, followers)

    yield start
    for process in reversed(running):
        process.terminate()
    for process in running:
        try:
            process.wait(10)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait(10)
