"""What the commands show when all goes well."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from click.testing import CliRunner
from support.renders import cli, contents, demo_cloud, write_job

from cubeforge.cli import main

HEAVY = ("numba", "dask", "distributed", "astropy", "zarr", "matplotlib", "numpy", "rich")


@pytest.fixture(scope="module")
def cloud(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return demo_cloud(tmp_path_factory.mktemp("cloud"))


@pytest.fixture
def job(tmp_path: Path, cloud: Path) -> Path:
    return write_job(
        tmp_path / "clump.toml",
        snapshot={"path": str(cloud)},
        view={"pixel": "240 arcsec"},
        channels={"width": "0.5 km/s"},
    )


def run(*words: str | Path) -> str:
    result = CliRunner().invoke(main, [str(word) for word in words], catch_exceptions=False)
    assert result.exit_code == 0, result.stderr
    assert result.stderr == ""
    return result.stdout


@pytest.mark.parametrize("words", [[], ["--version"], *([[verb] for verb in main.commands])])
def test_help_loads_nothing_heavy(words: list[str]):
    # Loading them takes seconds, and people ask for help often.
    script = (
        "import sys; from cubeforge.cli import main\n"
        "try: main(sys.argv[1:])\n"
        f"except SystemExit: print([name for name in {HEAVY} if name in sys.modules], file=sys.stderr)"
    )
    arguments = words if words == ["--version"] else [*words, "--help"]
    result = subprocess.run(
        [sys.executable, "-c", script, *arguments], capture_output=True, text=True, check=True, timeout=30
    )
    assert result.stderr.strip() == "[]"
    assert result.stdout.startswith("cubeforge " if words == ["--version"] else "Usage: ")


def test_inspect(cloud: Path):
    shown = run("inspect", cloud)
    for name in ("density", "temperature", "x_velocity", str(cloud)):
        assert name in shown
    numbers = json.loads(run("inspect", cloud, "--json"))
    # Hand count: level 0 is one patch of 16 x 16 x 16 cells.
    level = numbers["levels"][0]
    assert (level["patches"], level["cells"], level["filled"]) == (1, 4096, 1.0)
    assert len(numbers["levels"]) == 3
    volume = sum(each["leaf_cells"] * np.prod(each["cell_size"]) for each in numbers["levels"])
    assert volume == pytest.approx(np.prod(numbers["extent"]), rel=1e-12)
    assert {field["name"] for field in numbers["fields"]} == {
        "density", "temperature", "x_velocity", "y_velocity", "z_velocity",
    }  # fmt: skip
    # 5 fields of 4 bytes in each cell, and headers.
    cells = sum(each["cells"] for each in numbers["levels"])
    assert 20 * cells < numbers["bytes"] < 20 * cells * 1.2


def test_plan(job: Path):
    shown = run("plan", job)
    assert "13CO 1-0" in shown
    numbers = json.loads(run("plan", job, "--json"))
    assert numbers["tiles"] == 4
    assert numbers["spec"]["shape"] == [17, 16, 16]
    assert numbers["channels"] == 17
    assert numbers["cube_bytes"] == 4 * 17 * 16 * 16 + 8 * 16 * 16
    assert numbers["fits_bytes"] == 7 * 2880 + 2 * 2880
    assert (
        json.loads(run("plan", job, "--json", "--threads", "3"))["least_memory"]
        == 3 * numbers["least_memory"]
    )


def test_render_and_export(job: Path, tmp_path: Path):
    shown = run("render", job, "--workers", "0", "--no-picture", "--quiet")
    cube = tmp_path / "clump.zarr"
    assert str(cube) in shown
    assert "4 rendered" in shown
    assert "0 rendered" in run("render", job, "--workers", "0", "--no-picture", "--quiet")
    assert run("export", cube, tmp_path / "clump.fits", "--maps").strip() == str(tmp_path / "clump.fits")
    wanted = contents(cube)
    with fits.open(tmp_path / "clump.fits", checksum=True) as written:
        np.testing.assert_array_equal(written[0].data, wanted.intensity)
        np.testing.assert_array_equal(written["column"].data, wanted.maps[0])
        written.verify("exception")
    assert (tmp_path / "clump.fits").stat().st_size >= json.loads(run("plan", job, "--json"))["fits_bytes"]


def test_picture(job: Path, tmp_path: Path):
    shown = run("render", job, "--workers", "0", "--quiet")
    picture = tmp_path / "clump.png"
    assert str(picture) in shown
    assert picture.read_bytes().startswith(b"\x89PNG")


@pytest.mark.slow
def test_demo_renders(tmp_path: Path):
    shown = run("demo", tmp_path / "demo", "--levels", "2")
    job = tmp_path / "demo" / "clump.toml"
    assert shown.splitlines()[0] == str(job)
    # The last line is a command to copy.
    words = shown.splitlines()[-1].removeprefix("next: cubeforge ").split()
    result = cli(*words, "--workers", "2", "--quiet")
    assert result.returncode == 0, result.stderr
    assert result.stderr == ""
    peak = np.nanmax(contents(tmp_path / "demo" / "clump.zarr").intensity)
    assert 1.0 < peak < 60.0
