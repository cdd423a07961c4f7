"""Velocities that grow evenly with place, against exact spectra: rotation, an expanding slab, an expanding sphere.

Such fields are the same in every cell, so only the arithmetic is left to be wrong.

Cells at the edge of the domain have no slope across it: what is rendered stays inside by one cell or more.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from support.flows import FLOW_FIELDS, Flow, expansion, flow_snapshot, linear, rotation, uniform
from support.jobs import channel_centres, make_job
from support.physics import CO, KM_S
from support.rendering import render_image
from support.slow_march import sky_axes
from support.sweeps import density_of, excess, opacity_of, swept_depth

KELVIN, TURBULENT_B = 15.0, 0.25 * KM_S
WIDTH = float(CO.width(KELVIN, TURBULENT_B))
CELL = 0.125
"""Sixteen a side of a domain from -1 to 1 pc."""
SLANT = (0.5, -0.3, 0.8)


def check(found, wanted, depth: float, far: bool = False) -> None:
    """1e-5 of the peak up to a swept depth of 100; beyond, the far wings of the line's shape are seen: 6e-5.

    So it is for velocities `far` from the band's middle, by a thousand widths: float32 places them to 7e-5 of a width.
    """
    bound = 1e-5 if depth <= 100.0 and not far else 6e-5
    np.testing.assert_allclose(found, wanted, rtol=0.0, atol=bound * np.abs(wanted).max())


def flow_job(co_file: str, half_band: float, width: str = "0.1 km/s", **sections) -> dict:
    gas = {
        "temperature": "temperature",
        "velocity": list(FLOW_FIELDS[2:]),
        "microturbulence": {"b": "0.25 km/s"},
    }
    band = {"first": f"-{half_band} km/s", "last": f"{half_band} km/s", "width": width}
    return make_job(
        gas=gas, line={"molecule": co_file}, channels=band,
        **{"march": {"reconstruction": "linear"}, **sections},
    )  # fmt: skip


def slab_job(co_file: str, toward, half_band: float, reconstruction: str = "linear") -> dict:
    return flow_job(
        co_file,
        half_band,
        view={"toward": list(toward), "pixel": "1e-6 pc", "size": [1, 1], "centre": ["0.03 pc", "-0.02 pc", "0 pc"]},
        region={"box": {"lo": ["-1 pc", "-1 pc", "-0.75 pc"], "hi": ["1 pc", "1 pc", "0.75 pc"]}},
        march={"reconstruction": reconstruction},
    )  # fmt: skip


@pytest.mark.parametrize("depth", [1e-4, 1.0, 30.0, 1e4])
@pytest.mark.parametrize("step", [0.3, 1.0, 3.0, 10.0])
@pytest.mark.parametrize("toward", [(0.0, 0.0, -1.0), SLANT])
def test_expanding_slab(co_file: str, step: float, depth: float, toward):
    """`step`: line widths a cell along z; `depth`: where the line has been swept across a velocity."""
    gradient = step * WIDTH / CELL
    n = np.array(toward) / np.linalg.norm(toward)
    length = 1.5 / abs(n[2])
    # v.n grows from one face to the other by (gradient * 1.5) * n_z in the direction of n.
    ends = math.copysign(1.0, n[2]) * n[2] * 0.75 * gradient * np.array([-1.0, 1.0])
    opacity = depth * abs(ends[1] - ends[0]) / length
    gas = Flow(
        uniform(density_of(opacity, KELVIN)), uniform(KELVIN),
        (uniform(0.0), uniform(0.0), linear((0.0, 0.0, gradient / KM_S))),
    )  # fmt: skip
    job = slab_job(co_file, toward, math.ceil(7.5 * step * WIDTH / KM_S + 3.0))
    image, _, _ = render_image(job, flow_snapshot(gas, 16))
    channels = np.array(channel_centres(job)) * KM_S
    wanted = -excess(KELVIN) * np.expm1(-swept_depth(channels, opacity, *ends, length, WIDTH))
    check(image[:, 0, 0], wanted, depth)
    if depth < 1e-3 and step >= 3.0:
        flat = image[np.abs(channels) < abs(ends[1]) - 4.0 * WIDTH, 0, 0]
        assert len(flat) > 10
        np.testing.assert_allclose(flat[1:] / flat[:-1], 1.0, rtol=0.0, atol=1e-3)


@pytest.mark.parametrize("depth", [1e-3, 1.0, 100.0])
@pytest.mark.parametrize("step", [3.0, 10.0])
def test_expanding_layers(co_file: str, step: float, depth: float):
    # Density, temperature and width jump from cell to cell while the velocity grows evenly: order matters.
    rng = np.random.default_rng(3)
    kelvin = rng.uniform(8.0, 30.0, 16)
    rho = density_of(depth * step * WIDTH / CELL, KELVIN) * rng.uniform(0.2, 3.0, 16)
    gradient = step * WIDTH / CELL

    def layer(table):
        return lambda x, y, z: table[np.floor((z + 1.0) / CELL).astype(int)] + 0.0 * (x + y)

    gas = Flow(layer(rho), layer(kelvin), (uniform(0.0), uniform(0.0), linear((0.0, 0.0, gradient / KM_S))))
    job = slab_job(co_file, (0.0, 0.0, 1.0), math.ceil(7.5 * step * WIDTH / KM_S + 3.0))
    image, _, _ = render_image(job, flow_snapshot(gas, 16))
    channels = np.array(channel_centres(job))[::7] * KM_S
    state = np.zeros(2 * len(channels))
    for index in range(2, 14):
        width = float(CO.width(kelvin[index], TURBULENT_B))
        opacity = float(opacity_of(rho[index], kelvin[index]))
        bright = float(excess(kelvin[index]))

        def change(z, state, width=width, opacity=opacity, bright=bright):
            profile = np.exp(-(((channels - gradient * z) / width) ** 2)) / (math.sqrt(math.pi) * width)
            return np.concatenate(
                [opacity * profile, bright * opacity * profile * np.exp(-state[: len(channels)])]
            )

        near = -1.0 + CELL * index
        tolerance = {"rtol": 1e-8, "atol": 1e-9 * min(depth, 1.0), "max_step": CELL / 10.0}
        state = solve_ivp(change, (near, near + CELL), state, method="DOP853", **tolerance).y[:, -1]
    wanted = state[len(channels) :]
    check(image[::7, 0, 0], wanted, depth)


@pytest.mark.parametrize("depth", [1e-4, 1.0, 1e3])
@pytest.mark.parametrize("step", [0.5, 4.0, 200.0])
def test_expanding_sphere(co_file: str, step: float, depth: float):
    """Rays past the centre at 0.05 to 0.65 pc of a sphere of 0.7 pc.

    At 200 widths a cell every crossing is cut into hundreds of pieces, and the middle rays have thousands.
    """
    rate = step * WIDTH / CELL
    opacity = depth * rate
    gas = Flow(uniform(density_of(opacity, KELVIN)), uniform(KELVIN), expansion(rate / KM_S))
    job = flow_job(
        co_file,
        math.ceil(0.7 * rate / KM_S + 1.5),
        "0.1 km/s" if step < 100.0 else "1 km/s",
        view={"toward": list(SLANT), "pixel": "0.1 pc", "size": [14, 1]},
        region={"sphere": {"centre": ["0 pc"] * 3, "radius": "0.7 pc"}},
    )
    image, _, _ = render_image(job, flow_snapshot(gas, 16))
    channels = np.array(channel_centres(job))[:, None] * KM_S
    half = np.sqrt(0.7**2 - (0.1 * (np.arange(14) - 6.5)) ** 2)
    wanted = -excess(KELVIN) * np.expm1(
        -swept_depth(channels, opacity, -rate * half, rate * half, 2.0 * half, WIDTH)
    )
    check(image[:, 0], wanted, depth, far=step > 100.0)


@pytest.mark.parametrize("depth", [1e-4, 3.0])
@pytest.mark.parametrize("toward", [(0.0, 0.0, -1.0), SLANT])
def test_solid_rotation(co_file: str, depth: float, toward):
    """The velocity along a line of sight is the same all along it: its slope there is 0, those across make it."""
    omega = np.array([6.0, 4.0, -3.0])
    opacity = depth * WIDTH / 0.5
    gas = Flow(uniform(density_of(opacity, KELVIN)), uniform(KELVIN), rotation(omega))
    job = flow_job(
        co_file,
        7.0,
        view={"toward": list(toward), "north": [0.1, 1.0, 0.2], "pixel": "0.16 pc", "size": [8, 8]},
        region={"sphere": {"centre": ["0 pc"] * 3, "radius": "0.8 pc"}},
        rays={"per_side": 2},
    )
    n, right, up = sky_axes(toward, (0.1, 1.0, 0.2))
    side = 0.08 * (np.arange(16) - 7.5)
    x, y = np.meshgrid(side, side)
    half = np.sqrt(np.clip(0.8**2 - x**2 - y**2, 0.0, None))
    speed = sum(np.cross(omega, axis) @ n * place for axis, place in ((right, x), (up, y))) * KM_S
    channels = np.array(channel_centres(job))[:, None, None] * KM_S
    rays = -excess(KELVIN) * np.expm1(-swept_depth(channels, opacity, speed, speed, 2.0 * half, WIDTH))
    wanted = rays.reshape(-1, 8, 2, 8, 2).mean(axis=(2, 4))
    image, _, _ = render_image(job, flow_snapshot(gas, 16))
    check(image, wanted, depth)
    job["march"] = {"reconstruction": "constant"}
    image, _, _ = render_image(job, flow_snapshot(gas, 16))
    assert np.abs(image - wanted).max() > 0.1 * wanted.max()
