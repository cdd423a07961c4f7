"""Pixel means of smooth flows converge at second order in the cell size, to an integral that knows no cells.

Cells hold means over their volume, as simulations do: values at the centres are off by a second-order term of their
own. Density and temperature vary too, and stay constant inside a cell, which is of second order in a pixel's mean.
The domain is larger than what is rendered, so that no slope is taken at its edge. Without slopes the
order is the same once a cell's step is far below a line width; the error is several times larger before that.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest
from support.flows import FLOW_FIELDS, Flow, SlowSky, expansion, flow_snapshot, infall, rotation, uniform
from support.jobs import channel_centres, make_job
from support.physics import KM_S
from support.rendering import render_image
from support.slow_march import sky_axes

PIXEL = 0.25
"""As wide as the largest cells, pc."""
REACH = 0.75
"""Half of the depth that is rendered of a domain from -1 to 1, pc."""
FINE = ((-0.25, -0.5, 0.0), (0.75, 0.5, 0.75))
"""What the finer level covers: half of the sky, and in front of part of the coarser gas."""
VIEWS = {
    "axis": ({"toward": "-z", "size": [6, 6]}, sky_axes((0, 0, -1), (0, 1, 0))),
    "oblique": (
        {"toward": [0.8, -0.5, 0.6], "north": [0.2, 0.3, 1.0], "position_angle": "25 deg", "size": [2, 2]},
        sky_axes((0.8, -0.5, 0.6), (0.2, 0.3, 1.0), math.radians(25.0)),
    ),
}
RAYS = {"axis": 32, "oblique": 96}
"""A side of a pixel: along an axis they lie evenly in the cells, at a slant they have to be denser."""
FLOWS = {
    "rotation": rotation((3.0, 4.0, -2.0)),
    "expansion": expansion(3.0),
    "infall": infall(2.5, 0.35),
}
"""km/s; over b = 0.27 km/s a cell of 0.25 pc has velocity steps of up to 3 or 4 b, one of 0.06 pc of 1 b."""


def density(x, y, z):
    """Line-centre depths of some tenths at the rim to about 10."""
    blob = np.exp(-2.0 * ((x - 0.1) ** 2 + (y + 0.15) ** 2 + (z - 0.2) ** 2))
    return 1.0e-21 * blob * (1.0 + 0.3 * np.sin(3.0 * x + 2.0 * z - y))


def temperature(x, y, z):
    return 15.0 + 4.0 * np.sin(2.0 * x + 1.5 * y) * np.cos(2.0 * z)


def job_for(co_file: str, view: str, reconstruction: str) -> dict:
    corner = [f"{REACH} pc"] * 3
    whole = {"box": {"lo": [f"-{REACH} pc"] * 3, "hi": corner}}
    ball = {"sphere": {"centre": ["0 pc"] * 3, "radius": f"{REACH} pc"}}
    return make_job(
        gas={"temperature": "temperature", "velocity": list(FLOW_FIELDS[2:]), "microturbulence": {"b": "0.25 km/s"}},
        line={"molecule": co_file},
        view={"pixel": f"{PIXEL} pc", **VIEWS[view][0]},
        region=whole if view == "axis" else ball,
        channels={"first": "-3.6 km/s", "last": "3.6 km/s", "width": "0.2 km/s"},
        rays={"per_side": RAYS[view]},
        march={"reconstruction": reconstruction},
    )  # fmt: skip


@cache
def expected(view: str, flow: str) -> np.ndarray:
    channels = np.array(channel_centres(job_for("CO", view, "linear"))) * KM_S
    sky = SlowSky(VIEWS[view][1], REACH, channels, 0.25 * KM_S, sphere=view == "oblique")
    size = VIEWS[view][0]["size"]
    return sky.image(Flow(density, temperature, FLOWS[flow]), PIXEL, (size[0], size[1]))


def errors(co_file: str, view: str, flow: str, reconstruction: str, sizes, **levels) -> np.ndarray:
    """Root mean square and largest error, relative to the peak, for each number of cells a side."""
    wanted = expected(view, flow)
    out = []
    for cells in sizes:
        snapshot = flow_snapshot(Flow(density, temperature, FLOWS[flow]), cells, **levels)
        image, _, _ = render_image(job_for(co_file, view, reconstruction), snapshot)
        off = image - wanted
        out.append((math.sqrt((off**2).mean()), np.abs(off).max()))
    return np.array(out) / np.abs(wanted).max()


LEVELS = {
    "one level": {},
    "ratio 2": {"fine_box": FINE, "ratio": 2},
    "ratio 4": {"fine_box": FINE, "ratio": 4},
}
CASES = [("axis", levels) for levels in LEVELS] + [("oblique", "one level"), ("oblique", "ratio 2")]


@pytest.mark.slow
@pytest.mark.parametrize(("view", "levels"), CASES)
@pytest.mark.parametrize("flow", FLOWS)
def test_order(co_file: str, flow: str, view: str, levels: str):
    linear = errors(co_file, view, flow, "linear", (8, 16, 32), **LEVELS[levels])
    constant = errors(co_file, view, flow, "constant", (8, 16), **LEVELS[levels])
    order = np.log2(linear[:-1] / linear[1:])
    assert order[:, 0].min() >= 1.8, (order, linear)
    assert np.log2(linear[0] / linear[2]).min() >= 2 * 1.8, (order, linear)
    assert linear[2].max() < 0.005
    # The flow is steep enough for slopes to matter: without them the error is several times as large.
    assert (constant[:, 0] / linear[:2, 0]).min() > 1.8, (constant, linear)
    assert constant[0, 0] / linear[0, 0] > 3.5, (constant, linear)


@pytest.mark.parametrize("flow", ["infall", "rotation"])
def test_order_along_a_single_ray(co_file: str, flow: str):
    # In gas of one density only the velocity is reconstructed. x and y are a third or two thirds from a side of the
    # cells of every size: the same distance from their middle, in cells.
    x, y = 0.25 + 0.125 / 3.0, 0.125 + 0.125 / 3.0
    gas = Flow(uniform(3e-22), uniform(15.0), FLOWS[flow])
    axes = VIEWS["axis"][1]
    job = job_for(co_file, "axis", "linear")
    job["rays"] = {"per_side": 1}
    job["view"].update(pixel="1e-6 pc", size=[1, 1], centre=[f"{x!r} pc", f"{y!r} pc", "0 pc"])
    sky = SlowSky(axes, REACH, np.array(channel_centres(job)) * KM_S, 0.25 * KM_S, steps=1000)
    at = np.array([x, y, 0.0])
    wanted = sky.rays(gas, np.array([at @ axes[1]]), np.array([at @ axes[2]]))[0]
    off = []
    for reconstruction in ("linear", "constant"):
        job["march"] = {"reconstruction": reconstruction}
        for cells in (16, 32, 64):
            image, _, _ = render_image(job, flow_snapshot(gas, cells))
            off.append(np.abs(image[:, 0, 0] - wanted).max() / wanted.max())
    linear, constant = np.array(off).reshape(2, 3)
    assert 0.8 < 0.5 * np.log2(constant[0] / constant[2]) < 1.3, constant
    assert constant[2] > 0.01
    if flow == "rotation":
        # A linear field is met exactly, whatever the cells.
        assert linear.max() < 1e-5, linear
    else:
        assert 0.5 * np.log2(linear[0] / linear[2]) >= 1.8, linear
        assert linear[2] < 0.03 * constant[2]
