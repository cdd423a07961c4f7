"""A user's mistake is one line on stderr and exit status 2, and nothing is lost by it."""

from __future__ import annotations

import json
import shutil
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner
from support.renders import booked, cli, contents, demo_cloud, one_line, write_job

from cubeforge.cli import main
from cubeforge.quantities import parse
from cubeforge.snapshots.amrex_write import write_amrex
from cubeforge.snapshots.demo import FIELDS, demo_snapshot

SMALL: dict[str, dict[str, Any]] = {
    "view": {"pixel": "240 arcsec"},
    "channels": {"width": "0.5 km/s"},
    "rays": {"per_side": 1},
}
"""16 x 16 pixels in 4 tiles, 17 channels."""
QUIET = ("--workers", "0", "--no-picture", "--quiet")


@pytest.fixture(scope="module")
def cloud(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The demonstration cloud on disk; not to be changed."""
    return demo_cloud(tmp_path_factory.mktemp("cloud"))


@pytest.fixture
def job(tmp_path: Path, cloud: Path) -> Callable[..., Path]:
    """Writes a job file whose cube is `clump.zarr` beside it."""

    def write(**sections: dict[str, Any]) -> Path:
        merged = {name: {**SMALL.get(name, {}), **sections.get(name, {})} for name in {**SMALL, **sections}}
        merged["snapshot"] = {"path": str(cloud), **sections.get("snapshot", {})}
        return write_job(tmp_path / "clump.toml", **merged)

    return write


def call(*words: str | Path, status: int = 2) -> str:
    """The one line that a command fails with; run in this process."""
    result = CliRunner().invoke(main, [str(word) for word in words])
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    run = subprocess.CompletedProcess(words, result.exit_code, result.stdout, result.stderr)
    return one_line(run, status)


def succeed(*words: str | Path) -> str:
    """What a command that goes well writes on stdout."""
    result = CliRunner().invoke(main, [str(word) for word in words], catch_exceptions=False)
    assert result.exit_code == 0, result.stderr
    return result.stdout


# -- the job file -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("verb", ["plan", "render"])
def test_no_job_file(tmp_path: Path, verb: str):
    assert call(verb, tmp_path / "none.toml") == f"{tmp_path}/none.toml: there is no such job file"
    assert call(verb, tmp_path) == f"{tmp_path}: is a folder; a job file (TOML) is wanted"


def test_not_toml(tmp_path: Path):
    job = tmp_path / "job.toml"
    job.write_text("[view\npixel = 3\n")
    assert call("plan", job).startswith(f"{job}: not a TOML file: ")
    job.write_bytes(b"\xff\xfe\x00")
    assert call("plan", job).startswith(f"{job}: not a TOML file: ")


@pytest.mark.parametrize(
    ("section", "key", "value", "words"),
    [
        ("view", "pixle", "1 pc", ["unknown key 'view.pixle'", 'did you mean "pixel"?']),
        ("channels", "lst", "1 km/s", ["unknown key 'channels.lst'", 'did you mean "last"?']),
        ("veiw", "pixel", "1 pc", ["unknown key 'veiw'", 'did you mean "view"?']),
        (
            "view",
            "distance",
            "140 km/s",
            ["view.distance", "'140 km/s' is in km / s where a length is wanted"],
        ),
        ("view", "distance", 140, ["view.distance", "140 has no unit; a length is wanted"]),
        ("view", "distance", "-3 pc", ["view.distance", "not positive"]),
        ("channels", "width", "0.2 pc", ["channels.width", "is in pc where a velocity is wanted"]),
        ("channels", "width", "0.3 km/s", ["channels", "26.6667 widths", "a whole number is wanted"]),
        ("line", "abundance", "1e-4 cm", ["line.abundance", "a plain number is wanted"]),
        ("gas", "density", "3 km", ["gas.density", "where a density is wanted"]),
        ("gas", "bad_cells", "skip", ["gas.bad_cells", "'skip' is not one of 'stop' or 'clear'"]),
        (
            "output",
            "brightness",
            "mK",
            ["output.brightness", "'mK' is not one of 'K', 'Jy/sr' or 'Jy/pixel'"],
        ),
        ("view", "distance", None, ["view.distance is missing"]),
    ],
)
def test_job_file_says_something_else(
    job: Callable[..., Path], section: str, key: str, value: Any, words: list[str]
):
    path = job(**{section: {key: value}})
    message = call("plan", path)
    assert message.startswith(f"{path}: ")
    for word in words:
        assert word in message
    assert call("render", path) == message


def test_each_mistake_has_its_line(job: Callable[..., Path]):
    path = job(view={"pixle": "1 pc"}, line={"abundance": None})
    result = CliRunner().invoke(main, ["plan", str(path)])
    assert result.exit_code == 2
    lines = result.stderr.splitlines()
    assert len(lines) == 2
    assert all(line.startswith(f"cubeforge: {path}: ") for line in lines)


# -- the job and the snapshot -----------------------------------------------------------------------------------


def test_unknown_field_lists_those_there_are(job: Callable[..., Path]):
    message = call("plan", job(gas={"density": "mass"}))
    assert "gas.density: the snapshot has no field 'mass'" in message
    assert "known: density, temperature, x_velocity, y_velocity, z_velocity" in message
    assert 'did you mean "density"?' in call("plan", job(gas={"density": "desnity"}))


def test_missing_unit(job: Callable[..., Path]):
    units = {"length": "1 cm", "density": "1 g/cm3", "velocity": "1 cm/s"}
    message = call("plan", job(snapshot={"units": units}))
    assert message.startswith(
        "snapshot.units.temperature is missing: gas.temperature = 'temperature' needs it"
    )
    assert 'temperature = "1 K"' in message


def test_unknown_molecule_and_transition(job: Callable[..., Path], tmp_path: Path):
    assert 'did you mean "13CO"?' in call("plan", job(line={"molecule": "13C0"}))
    message = call("plan", job(line={"transition": "1-3"}))
    assert "13CO has no transition '1-3'" in message
    assert '1: "1-0" (110.20' in message
    (tmp_path / "co.dat").write_text("!MOLECULE\nCO\nnonsense\n")
    assert "co.dat" in call("plan", job(line={"molecule": "co.dat"}))


def test_view_past_the_data(job: Callable[..., Path]):
    message = call("plan", job(view={"centre": ["40 pc", "0 pc", "0 pc"], "size": [16, 16]}))
    assert message.startswith("view: it looks past the snapshot")
    message = call("plan", job(region={"sphere": {"centre": ["90 pc", "0 pc", "0 pc"], "radius": "1 pc"}}))
    assert message.startswith("region: nothing of the snapshot is inside it along x")


@pytest.mark.parametrize("verb", ["inspect", "plan", "render"])
def test_no_snapshot(job: Callable[..., Path], tmp_path: Path, verb: str):
    words = tmp_path / "none" if verb == "inspect" else job(snapshot={"path": str(tmp_path / "none")})
    assert str(tmp_path / "none") in call(verb, words)


def damaged(cloud: Path, folder: Path) -> Path:
    return Path(shutil.copytree(cloud, folder / "damaged.plotfile"))


def test_data_file_missing(job: Callable[..., Path], cloud: Path, tmp_path: Path):
    path = damaged(cloud, tmp_path)
    lost = sorted(path.glob("Level_1/Cell_D_*"))[0]
    lost.unlink()
    message = call("render", job(snapshot={"path": str(path)}), *QUIET)
    assert message == f"{lost}: the data file is missing"
    assert not (tmp_path / "clump.zarr").exists()


def test_data_file_truncated(job: Callable[..., Path], cloud: Path, tmp_path: Path):
    path = damaged(cloud, tmp_path)
    short = sorted(path.glob("Level_2/Cell_D_*"))[0]
    with short.open("r+b") as file:
        file.truncate(short.stat().st_size - 8)
    message = call("render", job(snapshot={"path": str(path)}), *QUIET)
    assert message.startswith(f"{short}: the data file is truncated")
    assert not (tmp_path / "clump.zarr").exists()


@pytest.mark.parametrize("verb", ["inspect", "plan", "render"])
def test_level_that_the_header_promises(job: Callable[..., Path], cloud: Path, tmp_path: Path, verb: str):
    path = damaged(cloud, tmp_path)
    shutil.rmtree(path / "Level_2")
    message = call(verb, path if verb == "inspect" else job(snapshot={"path": str(path)}))
    assert str(path / "Level_2") in message


# -- bad cells --------------------------------------------------------------------------------------------------


@pytest.fixture
def bad_cloud(tmp_path: Path) -> tuple[Path, int]:
    """The cloud with NaN in three leaf cells of one patch and a negative density in one of another."""
    good = demo_snapshot(base=16, levels=3)
    # Patches of the finest level hold leaf cells only.
    first, last = (int(n) for n in good.hierarchy.first[-2:])
    spoilt = {first: ("temperature", (slice(2, 5), 1, 6), np.nan), last - 1: ("density", (0, 7, 3), -1e-20)}

    def read(patch: int) -> dict[str, Any]:
        cells = good.read(patch, FIELDS)
        if patch in spoilt:
            field, where, value = spoilt[patch]
            cells[field][where] = value
        return cells

    path = tmp_path / "bad.plotfile"
    write_amrex(path, good.hierarchy, FIELDS, read, real="f4", files=2)
    return path, 4


def test_bad_cells_stop_the_render(job: Callable[..., Path], bad_cloud: tuple[Path, int]):
    message = call("render", job(snapshot={"path": str(bad_cloud[0])}), *QUIET)
    assert message.startswith(f"{bad_cloud[0]}: level 2, patch ")
    assert (
        "temperature is not finite in 3 leaf cells, first at (2, 1, 6) (nan)" in message
        or "density is not positive in 1 leaf cell, first at (0, 7, 3) (-1e-20)" in message
    )
    assert 'bad_cells = "clear"' in message


def test_bad_cells_can_be_cleared(job: Callable[..., Path], bad_cloud: tuple[Path, int], tmp_path: Path):
    path, count = bad_cloud
    stopped = job(snapshot={"path": str(path)})
    call("render", stopped, *QUIET)
    # The cube that was begun goes on: no tile that is done holds a bad cell.
    out = succeed("render", job(snapshot={"path": str(path)}, gas={"bad_cells": "clear"}), *QUIET)
    assert f"{count} cells with bad values were made transparent" in out
    assert np.isfinite(contents(tmp_path / "clump.zarr").intensity).all()


def test_cleared_cells_are_counted_once(job: Callable[..., Path], bad_cloud: tuple[Path, int]):
    # Little memory: patches are read again and again, and are behind several tiles anyway.
    path = job(snapshot={"path": str(bad_cloud[0])}, gas={"bad_cells": "clear"}, view={"pixel": "60 arcsec"})
    least = json.loads(succeed("plan", path, "--json"))["least_memory"]
    out = succeed("render", path, *QUIET, "--memory", f"{least} byte")
    assert f"{bad_cloud[1]} cells with bad values were made transparent" in out


# -- the output -------------------------------------------------------------------------------------------------


def test_cube_of_another_plan(job: Callable[..., Path], tmp_path: Path):
    succeed("render", job(), *QUIET)
    before = contents(tmp_path / "clump.zarr")
    result = CliRunner().invoke(main, ["render", str(job(view={"position_angle": "10 deg"})), *QUIET])
    assert result.exit_code == 2
    assert f"{tmp_path}/clump.zarr: this cube was begun with another plan" in result.stderr
    differing = [line for line in result.stderr.splitlines() if ": the cube has " in line]
    assert len(differing) == 1
    assert "job.view.position_angle" in differing[0]
    assert contents(tmp_path / "clump.zarr").spec == before.spec


def test_output_is_something_else(job: Callable[..., Path], tmp_path: Path):
    path = job(output={"cube": "thesis"})
    (tmp_path / "thesis").mkdir()
    (tmp_path / "thesis" / "chapter1.tex").write_text("precious")
    assert str(tmp_path / "thesis") in call("render", path, *QUIET)
    assert (tmp_path / "thesis" / "chapter1.tex").read_text() == "precious"
    path = job(output={"cube": "notes.txt"})
    (tmp_path / "notes.txt").write_text("precious")
    assert str(tmp_path / "notes.txt") in call("render", path, *QUIET)
    assert (tmp_path / "notes.txt").read_text() == "precious"
    # An empty folder is nothing that could be lost.
    (tmp_path / "empty").mkdir()
    succeed("render", job(output={"cube": "empty"}), *QUIET)
    assert contents(tmp_path / "empty").spec.tiles == 4


def test_output_in_a_folder_that_cannot_be_made(job: Callable[..., Path], tmp_path: Path):
    (tmp_path / "notes.txt").write_text("precious")
    message = call("render", job(output={"cube": "notes.txt/clump.zarr"}), *QUIET, status=3)
    assert message.startswith(f"{tmp_path}/notes.txt/clump.zarr: cannot be written")


def test_emission_outside_the_channels(job: Callable[..., Path], tmp_path: Path):
    narrow = {"first": "0.5 km/s", "last": "2 km/s"}
    path = job(channels=narrow)
    message = call("render", path, *QUIET)
    cube = tmp_path / "clump.zarr"
    assert message.startswith(f"{cube}: ")
    assert "% of the line's emission lies outside the channels, over the 1 % that the job allows" in message
    assert sorted(booked(cube)) == list(range(4)), "the cube is kept"
    # The cube says so by itself, wherever it is taken.
    moved = tmp_path / "elsewhere.zarr"
    shutil.copytree(cube, moved)
    message = call("export", moved, tmp_path / "cube.fits")
    assert message.startswith(f"{moved}: ")
    assert "outside the channels" in message
    assert not (tmp_path / "cube.fits").exists()
    succeed("export", moved, tmp_path / "clipped.fits", "--clipped")
    # What the message advises works, on the cube there is.
    chunks = {chunk: chunk.stat().st_mtime_ns for chunk in cube.rglob("c/0/*/*")}
    out = succeed("render", job(channels={**narrow, "outside": 1.0}), *QUIET)
    assert "0 rendered" in out
    assert {chunk: chunk.stat().st_mtime_ns for chunk in cube.rglob("c/0/*/*")} == chunks
    succeed("export", cube, tmp_path / "cube.fits")
    assert (tmp_path / "cube.fits").read_bytes() == (tmp_path / "clipped.fits").read_bytes()


def test_export_mistakes(job: Callable[..., Path], cloud: Path, tmp_path: Path):
    fits = tmp_path / "cube.fits"
    assert call("export", tmp_path / "none.zarr", fits).startswith(f"{tmp_path}/none.zarr: does not exist")
    assert call("export", cloud, fits).startswith(f"{cloud}: is not a cube")
    succeed("render", job(), *QUIET)
    cube = tmp_path / "clump.zarr"
    fits.write_text("precious")
    assert call("export", cube, fits).startswith(f"{fits}: exists already")
    assert fits.read_text() == "precious"
    (cube / "intensity" / "c" / "0" / "1" / "0").unlink()
    message = call("export", cube, tmp_path / "part.fits")
    assert message.startswith(f"{cube}: 1 of 4 tiles are not done")
    succeed("export", cube, tmp_path / "part.fits", "--partial")


def test_demo_is_there_already(tmp_path: Path):
    (tmp_path / "clump.toml").write_text("precious")
    assert call("demo", tmp_path).startswith(f"{tmp_path}/clump.toml: is there already")
    assert (tmp_path / "clump.toml").read_text() == "precious"


# -- options ----------------------------------------------------------------------------------------------------


def test_memory_too_small(job: Callable[..., Path], tmp_path: Path):
    message = call("render", job(), *QUIET, "--memory", "64 KiB")
    assert message.startswith("memory: 64.0 KiB is too little for a worker (threads: 1)")
    least = json.loads(succeed("plan", job(), "--json"))["least_memory"]
    shown = message.partition("this render needs ")[2].partition(":")[0]
    # The number is rounded for reading, to a tenth of its unit.
    assert parse(shown, "memory", where="here") == pytest.approx(least, rel=0.06)
    assert not (tmp_path / "clump.zarr").exists()


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ("2 km", "--memory: '2 km' is in km where a memory is wanted"),
        ("2", "--memory: '2' has no unit"),
        ("lots", "--memory: 'lots' is not a number with a unit"),
        ("-1 GiB", "memory: -1.0 GiB is too little"),
    ],
)
def test_memory_that_is_none(job: Callable[..., Path], given: str, words: str):
    assert words in call("render", job(), *QUIET, "--memory", given)


# -- in processes of their own ----------------------------------------------------------------------------------


def test_status_and_streams_of_the_process(job: Callable[..., Path], cloud: Path, tmp_path: Path):
    result = cli("plan", job(gas={"density": "mass"}))
    assert "known: density" in one_line(result)
    assert result.stdout == ""
    assert "Traceback" not in result.stderr
    result = cli("--debug", "plan", tmp_path / "none.toml")
    assert result.returncode == 2
    assert "Traceback (most recent call last)" in result.stderr
    assert result.stderr.splitlines()[-1] == f"cubeforge: {tmp_path}/none.toml: there is no such job file"


def test_error_in_a_worker(job: Callable[..., Path], bad_cloud: tuple[Path, int]):
    words = ("render", job(snapshot={"path": str(bad_cloud[0])}), "--workers", "2", "--no-picture", "--quiet")
    message = one_line(cli(*words))
    assert message.startswith(f"{bad_cloud[0]}: level 2, patch ")
    result = cli("--debug", *words)
    assert result.returncode == 2
    # The traceback reaches into the worker.
    assert "engine/worker.py" in result.stderr
