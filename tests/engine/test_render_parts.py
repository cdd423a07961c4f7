"""What a render is put together from: what is left to do, what workers share, how errors come back."""

from __future__ import annotations

import json
import math
import os
import pickle
import signal
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from support.grids import boxes_snapshot, grid_snapshot
from support.jobs import FLOW
from support.jobs import make_job as memory_job
from support.physics import KM_S
from support.renders import booked, demo_cloud, make_job

from cubeforge import errors
from cubeforge.cube.lease import Lease
from cubeforge.cube.ledger import LedgerWriter, TileRecord
from cubeforge.cube.store import create_cube, open_cube
from cubeforge.engine import shared as shared_module
from cubeforge.engine.batches import Batches
from cubeforge.engine.executors import SerialExecutor
from cubeforge.engine.interrupts import hold_interrupts, stop_on_sigterm
from cubeforge.engine.outside import allow_outside, check_outside
from cubeforge.engine.plan import make_plan
from cubeforge.engine.render import Progress, render, tiles_left
from cubeforge.engine.setup import build_setup
from cubeforge.engine.shared import Renderer, Shared, forget, run_batch, sweep_shared
from cubeforge.engine.systemic import systemic_velocity
from cubeforge.errors import CubeError, CubeforgeError, EngineError, JobError
from cubeforge.excitation.base import ExcitationError
from cubeforge.job import parse_job


@pytest.fixture(scope="module")
def cloud(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return demo_cloud(tmp_path_factory.mktemp("cloud"))


@pytest.fixture
def begun(tmp_path: Path, cloud: Path) -> Iterator[Callable[..., Shared]]:
    """A cube of 4 tiles that a run holds; called, it says what the run's workers are to know."""
    job = make_job(
        snapshot={"path": str(cloud)},
        view={"pixel": "240 arcsec"},
        channels={"width": "0.5 km/s"},
        rays={"per_side": 1},
    )
    plan = make_plan(build_setup(parse_job(job)))
    path = tmp_path / "clump.zarr"
    create_cube(path, plan.spec)
    with Lease(path) as lease:

        def make(**changes: Any) -> Shared:
            values = {"job": job, "folder": str(tmp_path), "cube": str(path), "run": lease.run,
                      "fingerprint": plan.spec.fingerprint, "systemic": 0.0, "memory": None, "threads": 1}  # fmt: skip
            return Shared(**(values | changes))

        yield make


# -- what is left -----------------------------------------------------------------------------------------------


def test_tiles_left(store_cube: Any):
    cube = store_cube(np.ones((2, 64, 64), dtype=np.float32), skip=(5, 6))
    left, done = tiles_left(cube)
    assert (left.tolist(), done) == ([6, 5], 14) or (left.tolist(), done) == ([5, 6], 14)
    # Booked, but its object is gone: it is rendered again.
    cube.object_path("intensity", 0).unlink()
    left, done = tiles_left(cube)
    assert (sorted(left), done) == ([0, 5, 6], 13)
    # Stored, but not booked: nobody knows whether it is whole.
    cube.write_tile(5, np.ones((2, 16, 16), dtype=np.float32))
    assert sorted(tiles_left(cube)[0]) == [0, 5, 6]


def test_tiles_left_are_in_the_order_of_the_curve(store_cube: Any):
    cube = store_cube(np.ones((1, 64, 64), dtype=np.float32), skip=range(16))
    assert tiles_left(cube)[0].tolist() == [0, 1, 4, 5, 2, 3, 6, 7, 8, 9, 12, 13, 10, 11, 14, 15]


def test_ledger_of_another_cube(store_cube: Any):
    cube = store_cube(np.ones((1, 32, 32), dtype=np.float32))
    with LedgerWriter(cube.ledger, "other") as ledger:
        ledger.append([TileRecord(99, 0, 1.0, 1.0)])
    with pytest.raises(CubeError, match="it names tiles 0 to 99; the cube has 0 to 3"):
        tiles_left(cube)


def test_progress_estimates():
    assert Progress(30, 100, 10, 4.0).rate == 5.0
    assert Progress(30, 100, 10, 4.0).seconds_left == 14.0
    assert Progress(10, 100, 10, 0.0).seconds_left == math.inf


def test_watcher_sees_every_tile_once(tmp_path: Path, cloud: Path):
    job = make_job(
        snapshot={"path": str(cloud)}, view={"pixel": "120 arcsec"}, output={"cube": str(tmp_path / "a.zarr")}
    )
    seen: list[Progress] = []
    render(parse_job(job), workers=0, watch=seen.append)
    assert (seen[0].done, seen[0].total, seen[0].seconds) == (0, 16, 0.0)
    assert [each.done for each in seen] == sorted({each.done for each in seen})
    assert seen[-1].done == 16
    assert all(each.begun == 0 for each in seen)


# -- what workers share -----------------------------------------------------------------------------------------


def test_shared_survives_the_file(begun: Callable[..., Shared]):
    shared = begun(memory=12345, threads=3, systemic=0.1 + 0.2)
    assert Shared(**json.loads(shared.write().read_text())) == shared


def test_worker_renders_and_books(begun: Callable[..., Shared]):
    shared = begun()
    path = str(shared.write())
    result = run_batch(path, [2, 0])
    assert result.error is None
    assert [record.tile for record in result.records] == [2, 0]
    assert booked(Path(shared.cube)) == [2, 0]
    assert [tile for tile in range(4) if open_cube(shared.cube).stored(tile)] == [0, 2]
    forget(path)
    assert path not in shared_module._renderers


@pytest.mark.parametrize("change", [{"view": {"position_angle": "1 deg"}}, {"line": {"abundance": 1e-6}}])
def test_worker_with_another_plan_refuses(begun: Callable[..., Shared], change: Any):
    shared = begun()
    job = {name: {**section, **change.get(name, {})} for name, section in shared.job.items()}
    with pytest.raises(EngineError, match="this worker makes another plan of the same job"):
        Renderer(begun(job=job))
    assert run_batch(str(begun(job=job).write()), [0]).records == []
    assert booked(Path(shared.cube)) == []


def test_worker_that_cannot_see_the_cube(tmp_path: Path):
    result = run_batch(str(tmp_path / "elsewhere.json"), [0])
    assert isinstance(result.error, EngineError)
    assert "a file system that all workers share" in str(result.error)


def test_worker_with_too_little_memory(begun: Callable[..., Shared]):
    result = run_batch(str(begun(memory=1000).write()), [0])
    assert "1000 B is too little for a worker" in str(result.error)


def test_tiles_before_an_error_are_booked(begun: Callable[..., Shared], monkeypatch: pytest.MonkeyPatch):
    shared = begun()
    path = str(shared.write())
    renderer = shared_module._renderer(path)
    real = renderer.worker.render

    def fails(tile: int) -> Any:
        if tile == 3:
            raise errors.SnapshotError("file.dat: truncated")
        return real(tile)

    monkeypatch.setattr(renderer.worker, "render", fails)
    result = run_batch(path, [1, 3, 0])
    assert [record.tile for record in result.records] == [1]
    assert booked(Path(shared.cube)) == [1]
    with pytest.raises(errors.SnapshotError, match="truncated"):
        list(SerialExecutor().run(Path(path), Batches([3, 0])))


def test_running_out_of_memory_is_told(begun: Callable[..., Shared], monkeypatch: pytest.MonkeyPatch):
    path = str(begun().write())
    renderer = shared_module._renderer(path)

    def fails(tile: int) -> Any:
        raise MemoryError

    monkeypatch.setattr(renderer.worker, "render", fails)
    assert "ran out of memory" in str(run_batch(path, [0]).error)


def test_run_files_of_killed_runs_are_swept(begun: Callable[..., Shared]):
    shared = begun()
    (Path(shared.cube) / "ledger" / "run-20200101T000000-dead.json").write_text("{}")
    run_batch(str(shared.write()), [0])
    sweep_shared(Path(shared.cube) / "ledger")
    assert list((Path(shared.cube) / "ledger").glob("run-*")) == []
    assert booked(Path(shared.cube)) == [0]


def test_run_that_lost_the_cube_stops(begun: Callable[..., Shared]):
    with pytest.raises(CubeError, match="does not hold this cube"):
        begun(run="20200101T000000-dead").write()


@pytest.mark.parametrize("kind", [*CubeforgeError.__subclasses__(), ExcitationError])
def test_errors_travel_between_processes(kind: type[CubeforgeError]):
    error = kind("clump.toml: view.pixel is missing")
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is kind
    assert (str(again), again.exit_status) == (str(error), error.exit_status)


# -- the share outside the channels -----------------------------------------------------------------------------


def test_cube_says_whether_its_channels_hold_the_line(store_cube: Any):
    cube = store_cube(np.ones((1, 16, 16), dtype=np.float32))
    # Not from a render: nothing is known, and nothing is said.
    check_outside(cube)
    with Lease(cube.path) as lease:
        allow_outside(cube.ledger, lease.run, 0.01)
        with LedgerWriter(cube.ledger, lease.run, ("emission", "emission_outside")) as ledger:
            ledger.append([TileRecord(0, 0, 9.0, 1.0, (200.0, 2.0))])
            check_outside(cube)
            ledger.append([TileRecord(0, 0, 10.0, 1.0, (200.0, 3.0))])
        with pytest.raises(
            CubeError, match=r"1\.5 % of the line's emission lies outside the channels, over the 1 %"
        ):
            check_outside(cube)
        allow_outside(cube.ledger, lease.run, 0.015)
    check_outside(cube)


# -- the systemic velocity --------------------------------------------------------------------------------------


def test_systemic_velocity_is_the_jobs():
    snapshot = grid_snapshot({"density": np.ones((8, 8, 8))}, (1.0, 1.0, 1.0))
    setup = build_setup(parse_job(memory_job(channels={"systemic": "3 km/s"})), snapshot)
    assert systemic_velocity(setup) == 3.0 * KM_S


@pytest.mark.parametrize("toward", [(0.0, 0.0, -1.0), (0.6, 0.0, 0.8), (1.0, -2.0, 0.5)])
def test_mean_is_weighted_by_mass_over_leaf_cells(toward: tuple[float, float, float]):
    rng = np.random.default_rng(3)

    def fields(n: int) -> dict[str, np.ndarray]:
        flow = {name: rng.normal(size=(n, n, n)) for name in FLOW}
        return {"density": rng.uniform(0.1, 10.0, (n, n, n)), **flow}

    coarse, fine = fields(8), fields(16)
    boxes = [[((0, 0, 0), (8, 8, 8))], [((4, 4, 4), (8, 8, 8))]]
    snapshot = boxes_snapshot([coarse, fine], boxes, (1.0, 1.0, 1.0), ratio=[(2, 2, 2)])
    job = memory_job(
        gas={"velocity": FLOW},
        view={"toward": list(toward)},
        channels={"systemic": "mean"},
        output={"tile": 8},
    )
    found = systemic_velocity(build_setup(parse_job(job), snapshot))
    # By hand: coarse cells outside the fine box weigh 1, fine ones an eighth (cells of 1 and of 1/8 pc3).
    leaf = np.ones((8, 8, 8), dtype=bool)
    leaf[2:6, 2:6, 2:6] = False
    inside = (slice(4, 12),) * 3
    n = np.array(toward) / np.linalg.norm(toward)
    momentum = mass = 0.0
    for values, where, volume in ((coarse, leaf, 1.0), (fine, inside, 0.125)):
        mass += volume * values["density"][where].sum()
        along = sum(n[axis] * values[name][where] for axis, name in enumerate(FLOW))
        momentum += volume * (values["density"][where] * along).sum()
    assert abs(momentum / mass) > 1e-3
    assert found == pytest.approx(-KM_S * momentum / mass, rel=1e-12)


# -- units ------------------------------------------------------------------------------------------------------


def test_unit_that_the_format_states_is_checked():
    snapshot = grid_snapshot({"density": np.ones((8, 8, 8))}, (1.0, 1.0, 1.0))
    units = {"length": "1 pc", "velocity": "1 km/s", "temperature": "1 K"}
    job = parse_job(memory_job(snapshot={"units": units}))
    with pytest.raises(
        JobError, match=r"snapshot\.units\.density is missing: gas\.density = 'density' needs it"
    ):
        build_setup(job, snapshot)
    snapshot.units = {"density": "g/cm3"}
    assert build_setup(job, snapshot).gas.density.factor == 1.0
    snapshot.units = {"density": "cm"}
    with pytest.raises(JobError, match="unit of density: '1 cm' is in cm where a density is wanted"):
        build_setup(job, snapshot)


# -- signals ----------------------------------------------------------------------------------------------------


def interrupted(steps: list[str], error: Exception | None = None) -> None:
    with hold_interrupts():
        os.kill(os.getpid(), signal.SIGINT)
        os.kill(os.getpid(), signal.SIGINT)
        steps.append("end of the block")
        if error:
            raise error


def test_interrupt_waits_for_the_end_of_the_block():
    steps: list[str] = []
    with pytest.raises(KeyboardInterrupt):
        interrupted(steps)
    assert steps == ["end of the block"]
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler
    assert signal.SIGINT not in signal.pthread_sigmask(signal.SIG_BLOCK, set())


def test_interrupt_outdoes_what_it_causes():
    with pytest.raises(KeyboardInterrupt):
        interrupted([], RuntimeError("a worker did not start"))


def test_other_errors_pass():
    with pytest.raises(RuntimeError, match="did not start"), hold_interrupts():
        raise RuntimeError("a worker did not start")


def test_threads_started_meanwhile_are_deaf():
    masks = []
    with hold_interrupts():
        thread = threading.Thread(
            target=lambda: masks.append(signal.pthread_sigmask(signal.SIG_BLOCK, set()))
        )
        thread.start()
        thread.join()
    assert signal.SIGINT in masks[0]


def test_holding_in_another_thread_changes_nothing():
    def work() -> None:
        with hold_interrupts():
            handlers.append(signal.getsignal(signal.SIGINT))

    handlers: list[Any] = []
    thread = threading.Thread(target=work)
    thread.start()
    thread.join()
    assert handlers == [signal.default_int_handler]


def terminated() -> None:
    with stop_on_sigterm():
        os.kill(os.getpid(), signal.SIGTERM)
        signal.pause()


def test_sigterm_is_an_interrupt_for_a_while():
    before = signal.getsignal(signal.SIGTERM)
    with pytest.raises(KeyboardInterrupt):
        terminated()
    assert signal.getsignal(signal.SIGTERM) is before
