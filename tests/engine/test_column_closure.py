"""Mass on the sky against the AMR framework's own integral of the density over leaf cells."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from support.jobs import TINY_UNITS, make_job
from support.physics import PARSEC
from support.rendering import render_image

OBLIQUE = [
    {"toward": [1.0, -0.4, 0.3], "position_angle": "35 deg"},
    {"toward": [1.0, 1.0, 1.0]},
    {"toward": [-0.02, 0.01, 1.0]},
]


def framework_total(path: Path) -> float:
    """Integral of the density in code units, from the file that the framework's tool wrote beside the data."""
    text = path.with_name(path.name + ".totals.txt").read_text()
    return float(re.search(r"integral of density = (\S+)", text).group(1))


def rendered_total(path: Path, view: dict, rays: int | str) -> float:
    """Sum of the column over the image, in the same units (pc^3 of 1e-20 g/cm3)."""
    job = make_job(
        snapshot={"path": str(path), "units": TINY_UNITS},
        view={"size": None, **view},
        channels={"first": "0 km/s", "last": "0 km/s"},
        rays={"per_side": rays},
        output={"tile": 64},
    )
    _, maps, setup = render_image(job)
    return float(maps[0].sum()) * setup.view.pixel**2 / (1e-20 * PARSEC)


@pytest.mark.parametrize("toward", ["+x", "-y", "-z"])
def test_along_an_axis(tiny_snapshot: Path, toward: str):
    found = rendered_total(tiny_snapshot, {"toward": toward, "pixel": f"{1 / 64!r} pc"}, 1)
    assert found == pytest.approx(framework_total(tiny_snapshot), rel=1e-6)


@pytest.mark.parametrize("view", OBLIQUE, ids=["oblique", "corner on", "nearly an axis"])
def test_at_a_slant(tiny_snapshot: Path, view: dict):
    found = rendered_total(tiny_snapshot, {**view, "pixel": "0.02 pc"}, 4)
    assert found == pytest.approx(framework_total(tiny_snapshot), rel=1e-4)


@pytest.mark.parametrize("pixel", [0.02, 0.06, 0.3])
@pytest.mark.parametrize("view", OBLIQUE[:2], ids=["oblique", "corner on"])
def test_as_many_rays_as_cells_ask_for(tiny_snapshot: Path, view: dict, pixel: float):
    # From a third of the coarsest cell to twenty times the finest.
    found = rendered_total(tiny_snapshot, {**view, "pixel": f"{pixel} pc"}, "auto")
    assert found == pytest.approx(framework_total(tiny_snapshot), rel=1e-4)


def test_as_many_rays_as_cells_ask_for_nearly_along_an_axis(tiny_snapshot: Path):
    # Rows of rays nearly along rows of cells: what each row misses at the cells' edges adds up.
    found = rendered_total(tiny_snapshot, {**OBLIQUE[2], "pixel": "0.06 pc"}, "auto")
    assert found == pytest.approx(framework_total(tiny_snapshot), rel=1e-3)


@pytest.mark.slow
@pytest.mark.parametrize("pixel", [0.02, 0.06, 0.3])
@pytest.mark.parametrize("view", OBLIQUE[:2], ids=["oblique", "corner on"])
@pytest.mark.parametrize("data", ["small", "ratio4"])
def test_as_many_rays_as_cells_of_larger_data_ask_for(real_data: Path, data: str, view: dict, pixel: float):
    found = rendered_total(real_data / data, {**view, "pixel": f"{pixel} pc"}, "auto")
    assert found == pytest.approx(framework_total(real_data / data), rel=1e-4)


@pytest.mark.slow
@pytest.mark.parametrize("toward", ["+x", "-y", "-z"])
@pytest.mark.parametrize(("data", "cell"), [("small", 1 / 128), ("ratio4", 0.00625)])
def test_larger_data_along_an_axis(real_data: Path, data: str, cell: float, toward: str):
    found = rendered_total(real_data / data, {"toward": toward, "pixel": f"{cell!r} pc"}, 1)
    assert found == pytest.approx(framework_total(real_data / data), rel=1e-6)


@pytest.mark.slow
@pytest.mark.parametrize("view", OBLIQUE, ids=["oblique", "corner on", "nearly an axis"])
@pytest.mark.parametrize("data", ["small", "ratio4"])
def test_larger_data_at_a_slant(real_data: Path, data: str, view: dict):
    found = rendered_total(real_data / data, {**view, "pixel": "0.02 pc"}, 4)
    assert found == pytest.approx(framework_total(real_data / data), rel=1e-4)
