"""What must not change the pixels: copied cells, other patches, other tiles, other budgets of memory."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from support.grids import boxes_snapshot, doubled, grid_snapshot
from support.jobs import FLOW, TINY_UNITS, make_job
from support.plotfile import read_flat
from support.rendering import render_image
from support.slow_march import crossings, pixel_centre, sky_axes

from cubeforge.engine.plan import make_plan

SLANTED = {"toward": [0.6, -0.35, 0.8], "position_angle": "20 deg"}


def random_fields(shape: tuple[int, int, int], seed: int) -> dict[str, np.ndarray]:
    """Gas with neighbouring cells as different as can be."""
    rng = np.random.default_rng(seed)
    fields = {"density": 1e-21 * np.exp(rng.normal(0.0, 1.5, shape)), "Temp": rng.uniform(5.0, 25.0, shape)}
    return fields | {name: rng.normal(0.0, 0.7, shape) for name in FLOW}


def gas_job(view: dict, pixel: str, tile: int = 16, abundance: float = 1e-5, **changes: dict) -> dict:
    return make_job(
        gas={"temperature": "Temp", "velocity": FLOW},
        line={"abundance": abundance},
        view={**view, "pixel": pixel},
        channels={"first": "-3 km/s", "last": "3 km/s", "width": "0.15 km/s", "sampling": "mean"},
        output={"tile": tile},
        **changes,
    )


def assert_same(found: np.ndarray, wanted: np.ndarray, share: float = 1e-5) -> None:
    np.testing.assert_allclose(found, wanted, rtol=0.0, atol=share * np.abs(wanted).max())


@pytest.mark.parametrize("view", [{"toward": "-z"}, SLANTED], ids=["axis", "slanted"])
@pytest.mark.parametrize("abundance", [1e-9, 1e-5])
def test_copying_every_cell(view: dict, abundance: float):
    fields = random_fields((13, 11, 17), seed=1)
    copied = {name: doubled(values) for name, values in fields.items()}
    job = gas_job(view, "0.047 pc", abundance=abundance)
    image, maps, _ = render_image(job, grid_snapshot(fields, (0.06,) * 3))
    again, maps_again, _ = render_image(job, grid_snapshot(copied, (0.03,) * 3))
    assert_same(again, image)
    assert_same(maps_again, maps, 1e-7)


@pytest.mark.parametrize("view", [{"toward": "+y"}, SLANTED], ids=["axis", "slanted"])
@pytest.mark.parametrize("patch", [1, 3, 5, 8])
def test_the_same_data_in_other_patches(view: dict, patch: int):
    fields = random_fields((13, 11, 17), seed=2)
    job = gas_job(view, "0.047 pc")
    image, maps, _ = render_image(job, grid_snapshot(fields, (0.06,) * 3))
    again, maps_again, _ = render_image(job, grid_snapshot(fields, (0.06,) * 3, patch=patch))
    assert_same(again, image, 1e-6)
    assert_same(maps_again, maps, 1e-12)


@pytest.mark.parametrize("view", [{"toward": "-x"}, SLANTED], ids=["axis", "slanted"])
def test_other_patches_of_a_refined_region(view: dict):
    coarse, fine = random_fields((8, 6, 7), seed=3), random_fields((16, 24, 14), seed=4)
    whole = [[((0, 0, 0), (8, 6, 7))], [((3, 5, 2), (9, 13, 8))]]
    # The refined box in nine parts of its own, coarse cells in three; finer cells of one patch alone stay the same.
    parts = [((3 + 3 * i, 5 + a, 2), (3, n, 8)) for i in range(3) for a, n in ((0, 1), (1, 7), (8, 5))]
    cut = [[((0, 0, 0), (8, 6, 3)), ((0, 0, 3), (5, 6, 4)), ((5, 0, 3), (3, 6, 4))], parts]
    ratio = [(2, 4, 2)]
    job = gas_job(view, "0.021 pc")
    image, maps, _ = render_image(job, boxes_snapshot([coarse, fine], whole, (0.1,) * 3, ratio=ratio))
    again, maps_again, _ = render_image(job, boxes_snapshot([coarse, fine], cut, (0.1,) * 3, ratio=ratio))
    assert_same(again, image, 1e-6)
    assert_same(maps_again, maps, 1e-12)


def tiny_job(path: Path, rays: dict, tile: int) -> dict:
    job = gas_job({**SLANTED, "size": [37, 41]}, "0.04 pc", tile=tile, rays=rays)
    job["snapshot"] = {"path": str(path), "units": {**TINY_UNITS, "temperature": "4 K"}}
    return job


@pytest.mark.parametrize("rays", [{"per_side": 1}, {"per_side": "auto"}], ids=["one ray", "auto"])
def test_tiles_change_no_bit(tiny_snapshot: Path, rays: dict):
    image, maps, _ = render_image(tiny_job(tiny_snapshot, rays, 64))
    assert image.max() > 1.0
    for tile in (8, 16, 24, 40):
        again, maps_again, _ = render_image(tiny_job(tiny_snapshot, rays, tile))
        np.testing.assert_array_equal(again.view(np.int32), image.view(np.int32), err_msg=f"tiles of {tile}")
        np.testing.assert_array_equal(maps_again, maps, err_msg=f"tiles of {tile}")


@pytest.mark.parametrize("tile", [24, 64])
def test_memory_changes_no_bit(tiny_snapshot: Path, tile: int):
    job = tiny_job(tiny_snapshot, {"per_side": "auto"}, tile)
    image, maps, setup = render_image(job)
    plan = make_plan(setup)
    least = plan.least_memory(1)
    assert plan.share(least, 1)[1] < plan.group_bytes, (
        "the least memory should not hold a whole tile's patches"
    )
    for memory in (least, least + plan.group_bytes // 2, 2 * least + plan.group_bytes):
        again, maps_again, _ = render_image(job, memory=memory)
        np.testing.assert_array_equal(again.view(np.int32), image.view(np.int32))
        np.testing.assert_array_equal(maps_again, maps)


def test_more_rays_tend_to_the_mean_of_the_pixel(tiny_snapshot: Path):
    # A pixel of 3 x 3 rays is the mean of the nine pixels of a third of its side: the same rays.
    coarse = tiny_job(tiny_snapshot, {"per_side": 3}, 16)
    coarse["view"] = {**coarse["view"], "size": [12, 10], "pixel": "0.09 pc"}
    fine = tiny_job(tiny_snapshot, {"per_side": 1}, 16)
    fine["view"] = {**fine["view"], "size": [36, 30], "pixel": "0.03 pc"}
    image, maps, _ = render_image(coarse)
    parts, maps_of_parts, _ = render_image(fine)
    mean = parts.astype(float).reshape(-1, 10, 3, 12, 3).mean(axis=(2, 4))
    assert_same(image, mean, 1e-6)
    assert_same(maps, maps_of_parts.reshape(-1, 10, 3, 12, 3).mean(axis=(2, 4)), 1e-9)


def test_auto_sees_the_finest_cells_behind_a_pixel(tiny_snapshot: Path):
    # Pixels of 0.04 pc: 64 rays over the finest cells (1/64 pc) stand 0.005 pc apart, as those of 8 x 8 do; over cells
    # of 1/16 pc alone there are 4.
    auto, maps, _ = render_image(tiny_job(tiny_snapshot, {"per_side": "auto"}, 64))
    eight, maps_of_eight, _ = render_image(tiny_job(tiny_snapshot, {"per_side": 8}, 64))
    grid = read_flat(tiny_snapshot)
    n, west, up = sky_axes(SLANTED["toward"], (0.0, 0.0, 1.0), math.radians(20.0))
    finest = np.zeros(auto.shape[1:], dtype=bool)
    for y, x in np.ndindex(*finest.shape):
        point = pixel_centre(np.full(3, 0.5), west, up, 0.04, (37, 41), x, y)
        index, _ = crossings(grid.lo, grid.cell, grid.level.shape, point, n)
        finest[y, x] = np.any(grid.level[tuple(index.T)] == 2)
    assert finest.sum() > 100
    np.testing.assert_allclose(maps[0][finest], maps_of_eight[0][finest], rtol=0.0, atol=2e-3 * maps[0].max())
    np.testing.assert_allclose(auto[:, finest], eight[:, finest], rtol=0.0, atol=2e-2 * eight.max())
    # What 4 rays a pixel, which miss cells, are off by.
    two, maps_of_two, _ = render_image(tiny_job(tiny_snapshot, {"per_side": 2}, 64))
    assert np.abs(maps_of_two[0] - maps_of_eight[0])[finest].max() > 3e-3 * maps[0].max()
    assert np.abs(two - eight)[:, finest].max() > 5e-2 * eight.max()
