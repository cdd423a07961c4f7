"""The estimate of the sampling error against errors that are known, and its way into the outcome."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from support.grids import grid_snapshot
from support.jobs import TINY_UNITS, make_job
from support.rendering import render_image

from cubeforge.engine.plan import INTEGRATED, SAMPLING_ERROR, maps_of
from cubeforge.engine.render import render
from cubeforge.engine.sampling import Largest, sampling_error
from cubeforge.job import parse_job


def noisy_job(**rays: object) -> dict:
    return make_job(
        line={"abundance": 1e-6},
        view={"toward": [0.5, -0.3, 0.8], "pixel": "2.3 pc", "size": [14, 14]},
        channels={"first": "-1.5 km/s", "last": "1.5 km/s", "width": "0.25 km/s"},
        rays=rays,
    )


def noisy_snapshot():
    rng = np.random.default_rng(12)
    return grid_snapshot({"density": 1e-21 * np.exp(rng.normal(0.0, 1.0, (24, 24, 24)))}, (1.0, 1.0, 1.0))


def integrated(image: np.ndarray) -> np.ndarray:
    return image.sum(axis=0, dtype=float) * 0.25


@pytest.mark.parametrize(
    "rays",
    [{"per_side": 2}, {"per_side": 3}, {"per_side": "auto", "spacing": 1.0}],
    ids=["2 x 2", "3 x 3", "auto"],
)
def test_the_estimate_bounds_the_error_and_is_of_its_size(rays: dict):
    # Cells that know nothing of each other, about two of them a pixel; the truth is what 24 x 24 rays a pixel find.
    snapshot = noisy_snapshot()
    truth, _, _ = render_image(noisy_job(per_side=24), snapshot)
    image, maps, setup = render_image(noisy_job(error=True, **rays), snapshot)
    assert [name for name, _ in maps_of(setup.job)] == ["column", INTEGRATED, SAMPLING_ERROR]
    np.testing.assert_allclose(maps[1], integrated(image), rtol=1e-6)
    error = np.abs(integrated(image) - integrated(truth))
    assert np.percentile(error, 99) > 1e-4 * maps[1].max()
    # Rays spread evenly do better together than two halves of them apart: on the safe side.
    for q in (50, 90, 99):
        assert 1.0 < np.percentile(maps[2], q) / np.percentile(error, q) < 5.0


def test_a_uniform_slab_has_no_sampling_error():
    snapshot = grid_snapshot({"density": np.full((8, 8, 8), 1e-21)}, (1.0, 1.0, 1.0))
    job = make_job(view={"pixel": "2 pc"}, rays={"per_side": "auto", "error": True})
    _, maps, _ = render_image(job, snapshot)
    assert maps[1].min() > 0.0
    assert np.all(maps[2] <= 1e-15 * maps[1].max())


@pytest.mark.parametrize("brightness", ["Jy/sr", "Jy/pixel"])
def test_units_and_background(brightness: str):
    # Maps are in the cube's unit and above the background, whatever the cube is.
    snapshot = noisy_snapshot()
    kelvin, maps, _ = render_image(noisy_job(per_side=2, error=True), snapshot)
    job = noisy_job(per_side=2, error=True)
    job["output"] |= {"brightness": brightness, "background": "kept"}
    _, other, setup = render_image(job, snapshot)
    plain = noisy_job(per_side=2, error=True)
    plain["output"] |= {"brightness": brightness}
    image, _, _ = render_image(plain, snapshot)
    assert dict(maps_of(setup.job))[SAMPLING_ERROR] == f"{brightness} km/s"
    scale = image.max() / kelvin.max()
    np.testing.assert_allclose(other[1], integrated(image), rtol=1e-6)
    np.testing.assert_allclose(other[2], maps[2] * scale, rtol=1e-5)


@pytest.mark.parametrize("count", [1, 7, 100, 2000])
def test_the_largest_of_many(count: int):
    rng = np.random.default_rng(count)
    values = rng.lognormal(0.0, 3.0, 2000)
    largest = Largest(count)
    for part in np.split(values, 40):
        largest.add(part.reshape(5, 10))
    np.testing.assert_array_equal(np.sort(largest.values()), np.sort(values)[-count:])


@pytest.mark.parametrize("size", [(5, 7), (40, 50)])
def test_the_percentile_of_a_cube(store_cube, size: tuple[int, int]):
    rng = np.random.default_rng(3)
    error, total = rng.lognormal(0.0, 2.0, size), -rng.uniform(1.0, 2.0, size)
    maps = {("column", "g cm-2"): total, (INTEGRATED, "K km/s"): total, (SAMPLING_ERROR, "K km/s"): error}
    cube = store_cube(np.zeros((1, *size)), maps=maps)
    found = sampling_error(cube) * np.abs(total).max()
    assert found == pytest.approx(np.percentile(error, 99, method="inverted_cdf"), rel=1e-12)
    assert sampling_error(store_cube(np.zeros((1, 5, 7)), name="other.zarr")) is None


@pytest.mark.parametrize("error", [False, True])
def test_the_outcome_has_it_on_request(tiny_snapshot: Path, tmp_path: Path, error: bool):
    job = make_job(
        snapshot={"path": str(tiny_snapshot), "units": TINY_UNITS},
        view={"toward": [0.6, -0.35, 0.8], "pixel": "0.08 pc"},
        rays={"per_side": "auto", "error": error},
        output={"cube": str(tmp_path / "cube.zarr")},
    )
    outcome = render(parse_job(job), workers=0)
    if not error:
        assert outcome.sampling_error is None
        return
    _, maps, _ = render_image(job)
    wanted = np.percentile(maps[2], 99, method="inverted_cdf") / maps[1].max()
    assert 1e-5 < outcome.sampling_error < 0.1
    assert outcome.sampling_error == pytest.approx(wanted, rel=1e-12)
