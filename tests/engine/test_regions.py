"""Crops, periodic domains, and views that see nothing."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from support.grids import grid_snapshot
from support.jobs import FLOW, TINY_UNITS, make_job
from support.physics import PARSEC
from support.plotfile import read_flat
from support.rendering import render_image

from cubeforge.engine.setup import build_setup
from cubeforge.errors import PlanError
from cubeforge.job import parse_job


def tiny_job(path: Path, **sections: dict) -> dict:
    return make_job(
        snapshot={"path": str(path), "units": TINY_UNITS},
        channels={"first": "0 km/s", "last": "0 km/s"},
        **sections,
    )


def rendered_mass(job: dict) -> float:
    """In units of 1e-20 g/cm3 pc3."""
    _, maps, setup = render_image(job)
    return float(maps[0].sum()) * setup.view.pixel**2 / (1e-20 * PARSEC)


def mass_inside(path: Path, inside, parts: int) -> float:
    """Sum over the finest cells, each cut into `parts`^3 pieces that are in or out by their centres."""
    grid = read_flat(path)
    total = 0.0
    shape = grid.level.shape
    offsets = (np.arange(parts) + 0.5) / parts
    axes = [grid.lo[a] + grid.cell[a] * (np.arange(shape[a])[:, None] + offsets).ravel() for a in range(3)]
    y, z = np.meshgrid(axes[1], axes[2], indexing="ij")
    for index, x in enumerate(axes[0]):
        plane = inside(x, y, z).reshape(shape[1], parts, shape[2], parts).sum(axis=(1, 3))
        total += float((plane * grid.fields["density"][index // parts]).sum())
    return total * float(np.prod(grid.cell)) / parts**3


@pytest.mark.parametrize("toward", ["+x", "-y", "+z"])
def test_mass_inside_a_box(tiny_snapshot: Path, toward: str):
    # Edges at any place: each cell at the edge counts by the part of it that is inside.
    lo, hi = (0.13, 0.31, 0.02), (0.61, 0.77, 0.53)
    grid = read_flat(tiny_snapshot)
    share = []
    for axis in range(3):
        edges = grid.lo[axis] + grid.cell[axis] * np.arange(grid.level.shape[axis] + 1)
        share.append(np.clip(np.minimum(edges[1:], hi[axis]) - np.maximum(edges[:-1], lo[axis]), 0.0, None))
    wanted = np.einsum("xyz,x,y,z->", grid.fields["density"], *share)
    # All edges are whole hundredths of a parsec, so pixels of 0.01 pc fit the box; 4 rays a side see cells of 1/64.
    region = {"box": {"lo": [f"{v} pc" for v in lo], "hi": [f"{v} pc" for v in hi]}}
    job = tiny_job(
        tiny_snapshot, view={"toward": toward, "pixel": "0.01 pc"}, rays={"per_side": 8}, region=region
    )
    assert rendered_mass(job) == pytest.approx(wanted, rel=1e-3)


def test_box_along_the_line_of_sight_is_exact(tiny_snapshot: Path):
    # Across the line of sight the box ends at faces of cells and each cell has one ray in its middle.
    region = {"box": {"lo": ["0.25 pc", "0.5 pc", "0.137 pc"], "hi": ["0.75 pc", "1 pc", "0.7211 pc"]}}
    grid = read_flat(tiny_snapshot)
    edges = np.arange(65) / 64
    inside = np.clip(np.minimum(edges[1:], 0.7211) - np.maximum(edges[:-1], 0.137), 0.0, None)
    wanted = (grid.fields["density"][16:48, 32:64] * inside).sum() / 64**2
    job = tiny_job(tiny_snapshot, view={"pixel": f"{1 / 64!r} pc"}, region=region)
    assert rendered_mass(job) == pytest.approx(wanted, rel=1e-6)


@pytest.mark.parametrize("toward", ["-z", [1.0, -0.4, 0.3]])
def test_mass_inside_a_sphere(tiny_snapshot: Path, toward):
    centre, radius = (0.45, 0.52, 0.38), 0.3
    wanted = mass_inside(
        tiny_snapshot,
        lambda x, y, z: (x - centre[0]) ** 2 + (y - centre[1]) ** 2 + (z - centre[2]) ** 2 < radius**2,
        parts=6,
    )
    region = {"sphere": {"centre": [f"{v} pc" for v in centre], "radius": f"{radius} pc"}}
    job = tiny_job(
        tiny_snapshot, view={"toward": toward, "pixel": "0.01 pc"}, rays={"per_side": 3}, region=region
    )
    assert rendered_mass(job) == pytest.approx(wanted, rel=5e-4)


def test_box_and_sphere_keep_what_both_hold(tiny_snapshot: Path):
    # Half a sphere: the box ends at its centre, which is a face of the finest cells.
    region = {
        "sphere": {"centre": ["0.45 pc", "0.52 pc", "0.375 pc"], "radius": "0.3 pc"},
        "box": {"lo": ["0 pc", "0 pc", "0 pc"], "hi": ["1 pc", "1 pc", "0.375 pc"]},
    }
    wanted = mass_inside(
        tiny_snapshot,
        lambda x, y, z: ((x - 0.45) ** 2 + (y - 0.52) ** 2 + (z - 0.375) ** 2 < 0.09) & (z < 0.375),
        parts=6,
    )
    job = tiny_job(
        tiny_snapshot, view={"toward": "+x", "pixel": "0.01 pc"}, rays={"per_side": 3}, region=region
    )
    assert rendered_mass(job) == pytest.approx(wanted, rel=5e-4)


def torus_fields(shape=(16, 12, 8)) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(11)
    fields = {"density": 1e-21 * np.exp(rng.normal(0.0, 1.0, shape)), "Temp": rng.uniform(8.0, 20.0, shape)}
    return fields | {name: rng.normal(0.0, 0.5, shape) for name in FLOW}


@pytest.mark.parametrize("view", [{"toward": "+x"}, {"toward": [0.5, 0.7, -0.6], "position_angle": "15 deg"}])
@pytest.mark.parametrize("patch", [5, 64])
def test_periodic_crop_is_the_crop_of_a_shifted_snapshot(view: dict, patch: int):
    fields = torus_fields()
    shifted = {
        name: values.take(range(-6, 14), axis=0, mode="wrap").take(range(5, 15), axis=1, mode="wrap")
        for name, values in fields.items()
    }
    changes = {
        "gas": {"temperature": "Temp", "velocity": FLOW},
        "view": {**view, "pixel": "0.43 pc"},
        "line": {"abundance": 1e-6},
    }
    box = {"lo": ["-6 pc", "5 pc", "0 pc"], "hi": ["14 pc", "15 pc", "8 pc"]}
    periodic = make_job(region={"box": box, "periodic": ["x", "y"]}, **changes)
    image, maps, _ = render_image(periodic, grid_snapshot(fields, (1.0,) * 3, patch=patch))
    wanted, wanted_maps, _ = render_image(
        make_job(**changes), grid_snapshot(shifted, (1.0,) * 3, (-6.0, 5.0, 0.0))
    )
    np.testing.assert_allclose(image, wanted, rtol=0.0, atol=1e-6 * wanted.max())
    np.testing.assert_allclose(maps, wanted_maps, rtol=0.0, atol=1e-12 * wanted_maps.max())


def test_a_domain_that_does_not_repeat_ends_at_its_edge():
    fields = torus_fields()
    box = {"lo": ["-6 pc", "5 pc", "0 pc"], "hi": ["14 pc", "15 pc", "8 pc"]}
    inside = {"lo": ["0 pc", "5 pc", "0 pc"], "hi": ["14 pc", "12 pc", "8 pc"]}
    snapshot = grid_snapshot(fields, (1.0,) * 3)
    image, _, _ = render_image(make_job(gas={"temperature": "Temp"}, region={"box": box}), snapshot)
    wanted, _, _ = render_image(make_job(gas={"temperature": "Temp"}, region={"box": inside}), snapshot)
    np.testing.assert_array_equal(image, wanted)


@pytest.mark.parametrize(
    "region",
    [
        {"box": {"lo": ["2 pc", "0 pc", "0 pc"], "hi": ["3 pc", "1 pc", "1 pc"]}},
        {"sphere": {"centre": ["0.5 pc", "-0.4 pc", "0.5 pc"], "radius": "0.3 pc"}},
        {"box": {"lo": ["0 pc", "0 pc", "1.2 pc"], "hi": ["1 pc", "1 pc", "1.4 pc"]}, "periodic": ["x", "y"]},
    ],
    ids=["box", "sphere", "beyond an axis that does not repeat"],
)
def test_a_region_outside_the_snapshot_is_refused(tiny_snapshot: Path, region: dict):
    with pytest.raises(PlanError, match="region"):
        build_setup(parse_job(tiny_job(tiny_snapshot, view={"pixel": "0.05 pc"}, region=region)))


@pytest.mark.parametrize("centre", [["3 pc", "0.5 pc", "0.5 pc"], ["0.5 pc", "-9 pc", "0.5 pc"]])
def test_a_view_past_the_snapshot_is_refused(tiny_snapshot: Path, centre: list[str]):
    view = {"pixel": "0.05 pc", "size": [8, 8], "centre": centre}
    with pytest.raises(PlanError, match="past the snapshot"):
        build_setup(parse_job(tiny_job(tiny_snapshot, view=view)))
