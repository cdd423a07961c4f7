"""A plan's numbers against counts by hand, and what its fingerprint depends on."""

from __future__ import annotations

import copy
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from pydantic import BaseModel
from support.grids import boxes_snapshot, grid_snapshot
from support.jobs import make_job
from support.physics import CO

from cubeforge.engine.plan import Plan, cell_bytes, fingerprint_parts, make_plan, tile_area
from cubeforge.engine.setup import Setup, build_setup
from cubeforge.errors import PlanError
from cubeforge.job import Job, parse_job
from cubeforge.quantities import show_bytes
from cubeforge.snapshots.base import Snapshot


def cloud(scale: float = 1.0, patch: int = 8, dtype: Any = np.float64) -> Snapshot:
    """A cube of 16 x 16 x 16 cells of 1 pc."""
    return grid_snapshot(
        {"density": np.full((16, 16, 16), 1e-20 * scale, dtype)}, (1.0, 1.0, 1.0), patch=patch
    )


def set_up(snapshot: Snapshot, **sections: Any) -> Setup:
    return build_setup(parse_job(make_job(**sections)), snapshot)


def plan_of(snapshot: Snapshot, **sections: Any) -> Plan:
    return make_plan(set_up(snapshot, **sections))


def test_counts_by_hand():
    # Pixels of 0.8 pc: 20 x 20 of them, in 3 x 3 tiles of at most 8 pixels. The 2 x 2 x 2 patches meet at pixel 10,
    # in the middle tile of each row; a corner tile has 2 patches behind it, one at an edge 4, the middle one 8.
    plan = plan_of(cloud(), view={"pixel": "0.8 pc"}, output={"tile": 8})
    assert plan.spec.shape == (41, 20, 20)
    assert plan.tiles == 9
    assert plan.tile == 8
    assert plan.patches == 8
    assert plan.patches_of_tile == (2, 4, 8)
    # Of the fields, the density alone is stored: 8 bytes a cell.
    assert plan.read_bytes == 8 * 16**3
    assert plan.optical_bytes == 16**3 * cell_bytes(1)
    assert plan.group_bytes == 16**3 * cell_bytes(1)
    assert plan.block_bytes == plan.group_bytes
    # float32 for each channel and float64 for the map of the column.
    assert plan.cube_bytes == 20 * 20 * (4 * 41 + 8)
    # 65600 bytes of data are 23 blocks of 2880.
    assert plan.fits_bytes == (23 + 2) * 2880


def test_patches_of_a_smaller_view():
    # 4 x 4 pixels of 1 pc in a corner: the 2 patches there.
    view = {"pixel": "1 pc", "size": [4, 4], "centre": ["3 pc", "3 pc", "8 pc"]}
    plan = plan_of(cloud(), view=view, output={"tile": 8})
    assert (plan.tiles, plan.patches, plan.patches_of_tile) == (1, 2, (2, 2, 2))
    assert plan.read_bytes == 2 * 8 * 8**3


def test_patches_that_finer_ones_cover_are_not_read():
    fine = {"density": np.full((16, 16, 16), 1e-20)}
    coarse = {"density": np.full((8, 8, 8), 1e-20)}
    boxes = [[((0, 0, 0), (4, 8, 8)), ((4, 0, 0), (4, 8, 8))], [((0, 0, 0), (8, 16, 16))]]
    snapshot = boxes_snapshot([coarse, fine], boxes, (1.0, 1.0, 1.0), ratio=[(2, 2, 2)])
    plan = plan_of(snapshot, view={"pixel": "1 pc"}, output={"tile": 8})
    assert plan.patches == 2
    assert plan.read_bytes == 8 * (4 * 8 * 8 + 8 * 16 * 16)


def test_copies_of_a_periodic_domain_are_read_once():
    box = {"lo": ["-16 pc", "0 pc", "0 pc"], "hi": ["32 pc", "16 pc", "16 pc"]}
    plan = plan_of(
        cloud(), view={"pixel": "0.8 pc"}, region={"box": box, "periodic": ["x"]}, output={"tile": 64}
    )
    assert plan.spec.shape[2] == 60
    assert plan.patches == 8
    assert plan.read_bytes == 8 * 16**3
    assert plan.group_bytes == 16**3 * cell_bytes(1)


def test_tiles_cover_the_image_once():
    setup = set_up(cloud(), view={"pixel": "0.8 pc"}, output={"tile": 8})
    seen = np.zeros((20, 20), dtype=int)
    for tile in range(9):
        x0, x1, y0, y1 = tile_area(setup, tile)
        seen[y0:y1, x0:x1] += 1
    assert (seen == 1).all()
    # Ids run along x first, as in the cube.
    assert tile_area(setup, 2) == (16, 20, 0, 8)
    assert tile_area(setup, 3) == (0, 8, 8, 16)


# -- memory -----------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def plan() -> Plan:
    return plan_of(cloud(), view={"pixel": "0.8 pc"}, output={"tile": 8})


def test_least_memory_is_for_each_thread(plan: Plan):
    one = plan.tile_bytes + plan.block_bytes + plan.build_bytes
    assert [plan.least_memory(threads) for threads in (1, 2, 7)] == [one, 2 * one, 7 * one]


@pytest.mark.parametrize("threads", [1, 2, 7])
@pytest.mark.parametrize("times", [1.0, 1.3, 2.0, 50.0])
def test_shares_are_within_the_memory(plan: Plan, threads: int, times: float):
    memory = int(plan.least_memory(threads) * times)
    cache, held = plan.share(memory, threads)
    assert cache >= 0
    assert plan.block_bytes <= held <= plan.group_bytes
    assert cache + threads * (held + plan.tile_bytes + plan.build_bytes) <= memory
    # Nothing given is left unused.
    assert cache + threads * (held + plan.tile_bytes + plan.build_bytes) == memory


@pytest.mark.parametrize("threads", [1, 4])
def test_too_little_memory_is_refused_with_numbers(plan: Plan, threads: int):
    least = plan.least_memory(threads)
    plan.share(least, threads)
    with pytest.raises(PlanError) as caught:
        plan.share(least - 1, threads)
    message = str(caught.value)
    for number in (least - 1, least, plan.tile_bytes, plan.block_bytes, plan.build_bytes):
        assert show_bytes(number) in message
    assert f"threads: {threads}" in message
    assert "fewer threads, smaller tiles or fewer channels" in message


# -- fingerprint ------------------------------------------------------------------------------------------------

BASE: dict[str, Any] = {
    "snapshot": {"units": {"length": "1 pc", "density": "1 g/cm3", "velocity": "1 km/s", "temperature": "1 K",
                           "momentum": "1 g/(cm2 s)", "pressure": "1 dyn/cm2"}},
    "view": {"pixel": "1 pc"},
    "output": {"tile": 8},
}  # fmt: skip
CHANGES: dict[str, Any] = {
    "snapshot.units.length": "2 pc",
    "snapshot.units.density": "2 g/cm3",
    "snapshot.units.velocity": "2 km/s",
    "snapshot.units.temperature": "2 K",
    "snapshot.units.momentum": "2 g/(cm2 s)",
    "snapshot.units.pressure": "2 dyn/cm2",
    "gas.density": "pressure",
    "gas.temperature": "temperature",
    "gas.pressure": "pressure",
    "gas.velocity": ["1 km/s", "0 km/s", "0 km/s"],
    "gas.momentum": ["0 g/(cm2 s)", "0 g/(cm2 s)", "momentum"],
    "gas.hydrogen_fraction": 0.7,
    "gas.mean_molecular_weight": 2.4,
    "gas.microturbulence.sigma": "0.2 km/s",
    "gas.microturbulence.b": "0.2 km/s",
    "gas.microturbulence.fwhm": "0.2 km/s",
    "line.transition": "2-1",
    "line.abundance": 2e-4,
    "line.background": "3 K",
    "view.toward": "+x",
    "view.north": "+x",
    "view.position_angle": "5 deg",
    "view.distance": "150 pc",
    "view.pixel": "2 pc",
    "view.size": [4, 4],
    "view.centre": ["5 pc", "5 pc", "5 pc"],
    "view.sky.longitude": "3 deg",
    "view.sky.latitude": "3 deg",
    "channels.first": "-1.9 km/s",
    "channels.last": "1.9 km/s",
    "channels.width": "0.2 km/s",
    "channels.systemic": "mean",
    "channels.sampling": "mean",
    "region.box": {"lo": ["0 pc", "0 pc", "0 pc"], "hi": ["9 pc", "9 pc", "9 pc"]},
    "region.sphere": {"centre": ["8 pc", "8 pc", "8 pc"], "radius": "5 pc"},
    "region.periodic": ["z"],
    "rays.per_side": "auto",
    "rays.most": 8,
    "rays.spacing": 0.4,
    "rays.error": True,
    "march.reconstruction": "linear",
    "march.limiter": "minmod",
    "output.brightness": "Jy/sr",
    "output.background": "kept",
    "output.tile": 16,
}
"""A change of each key that changes pixels, or what they mean."""
INSTEAD = {"gas.pressure": "gas.temperature", "gas.momentum": "gas.velocity",
           "gas.microturbulence.sigma": "gas.microturbulence.b",
           "gas.microturbulence.fwhm": "gas.microturbulence.b"}  # fmt: skip
"""Keys that a change replaces."""
ELSEWHERE = {
    "snapshot.path": "its contents count",
    "line.molecule": "its data count",
    "line.excitation": "there is one kind so far",
    "gas.bad_cells": "a cube with bad cells comes about, or not",
    "channels.outside": "a cube is accepted, or not",
    "output.cube": "a path",
}
"""Keys whose own value does not count, and why."""


def keys_of(model: type[BaseModel], prefix: str = "") -> Iterator[str]:
    """Dotted names of everything that a job file can say."""
    for name, field in model.model_fields.items():
        inner = [
            each
            for each in (field.annotation, *getattr(field.annotation, "__args__", ()))
            if isinstance(each, type) and issubclass(each, BaseModel)
        ]
        sources = (
            name in ("density", "temperature", "pressure", "box", "sphere") and prefix != "snapshot.units."
        )
        if inner and not sources:
            yield from keys_of(inner[0], f"{prefix}{name}.")
        elif f"{prefix}{name}" not in ("folder", "raw"):
            yield prefix + name


def changed(key: str, value: Any) -> dict[str, Any]:
    job = copy.deepcopy(make_job(**BASE))
    for name, new in ((INSTEAD.get(key), None), (key, value)):
        if name:
            *sections, last = name.split(".")
            place = job
            for section in sections:
                place = place.setdefault(section, {})
            place.pop(last, None)
            if new is not None:
                place[last] = new
    return job


@pytest.fixture(scope="module")
def fields() -> Snapshot:
    rho = np.full((16, 16, 16), 1e-20)
    return grid_snapshot(
        {"density": rho, "temperature": rho * 1e21, "pressure": rho * 1e9, "momentum": rho * 1e5},
        (1.0, 1.0, 1.0),
    )


def test_every_key_of_the_job_is_looked_at_here():
    assert set(keys_of(Job)) == CHANGES.keys() | ELSEWHERE.keys()


@pytest.mark.parametrize("key", CHANGES)
def test_what_changes_the_pixels_changes_the_fingerprint(fields: Snapshot, key: str):
    value = CHANGES[key]
    before = make_plan(build_setup(parse_job(make_job(**BASE)), fields)).spec
    after = make_plan(build_setup(parse_job(changed(key, value)), fields)).spec
    assert after.fingerprint != before.fingerprint
    parts = before.fingerprint_parts, after.fingerprint_parts
    differing = {
        name for name in parts[0].keys() | parts[1].keys() if parts[0].get(name) != parts[1].get(name)
    }
    # The difference is named by the key that was changed, and by what goes with it.
    said = "tile" if key == "output.tile" else f"job.{key}"
    assert any(name == said or name.startswith(f"{said}.") for name in differing), differing
    assert len(differing) <= (2 if key not in ("region.box", "region.sphere") else 7)


@pytest.mark.parametrize(
    ("key", "value"), [("gas.bad_cells", "clear"), ("channels.outside", 0.5), ("output.cube", "other.zarr")]
)
def test_what_does_not_change_the_pixels_does_not_count(fields: Snapshot, key: str, value: Any):
    before = make_plan(build_setup(parse_job(make_job(**BASE)), fields)).spec
    after = make_plan(build_setup(parse_job(changed(key, value), folder="/elsewhere"), fields)).spec
    assert after == before


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("view.pixel", "1.0 pc"),
        ("channels.width", "100 m/s"),
        ("view.toward", [0, 0, -1]),
        ("rays.per_side", 1),
        ("rays.most", 100),
    ],
)
def test_the_same_in_other_words(fields: Snapshot, key: str, value: Any):
    assert (
        make_plan(build_setup(parse_job(changed(key, value)), fields)).spec.fingerprint
        == make_plan(build_setup(parse_job(make_job(**BASE)), fields)).spec.fingerprint
    )


def test_the_snapshot_counts_by_its_contents():
    one = fingerprint_parts(set_up(cloud()))
    assert fingerprint_parts(set_up(cloud())) == one
    for other in (cloud(scale=1.0000001), cloud(patch=16), cloud(dtype=np.float32)):
        assert {name for name, value in fingerprint_parts(set_up(other)).items() if one[name] != value} == {
            "snapshot"
        }


def test_the_molecule_counts_by_its_data(tmp_path: Path):
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
    one, two = CO.write(tmp_path / "one" / "co.dat"), CO.write(tmp_path / "two" / "other.dat")
    parts = fingerprint_parts(set_up(cloud(), line={"molecule": one}))
    assert fingerprint_parts(set_up(cloud(), line={"molecule": two})) == parts
    text = Path(two).read_text()
    Path(two).write_text(text.replace("27.994915", "27.9949"))
    assert fingerprint_parts(set_up(cloud(), line={"molecule": two}))["molecule"] != parts["molecule"]
