"""Flows whose velocity changes by several line widths from cell to cell: a comb of peaks, one a cell, is an artefact.

And jumps: across a shock there is no slope, the gas on either side stays as it is.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.signal import find_peaks
from support.flows import FLOW_FIELDS, Flow, SlowSky, flow_snapshot, infall, uniform
from support.grids import grid_snapshot
from support.jobs import FLOW, channel_centres, make_job
from support.physics import CO, KM_S
from support.rendering import render_image
from support.slow_march import sky_axes
from support.sweeps import excess, opacity_of, swept_depth

TURBULENT_B = 0.25 * KM_S
COLLAPSE = infall(9.0, 0.5)


def peaks(spectrum) -> int:
    """Local maxima that stand out by more than 5 % of the highest."""
    return len(find_peaks(spectrum, prominence=0.05 * spectrum.max())[0])


@pytest.mark.parametrize("rho", [1e-25, 3e-21])
@pytest.mark.parametrize(("toward", "north"), [((0, 0, -1), (0, 1, 0)), ((0.5, -0.3, 0.8), (0, 0, 1))])
def test_collapse_has_no_comb(co_file: str, rho: float, toward, north):
    gas = Flow(uniform(rho), uniform(15.0), COLLAPSE)
    job = make_job(
        gas={"temperature": "temperature", "velocity": list(FLOW_FIELDS[2:]), "microturbulence": {"b": "0.25 km/s"}},
        line={"molecule": co_file},
        view={"toward": list(toward), "north": list(north), "pixel": "1e-6 pc", "size": [1, 1],
              "centre": ["0.04 pc", "0.15 pc", "0.02 pc"]},
        region={"box": {"lo": ["-0.8 pc"] * 3, "hi": ["0.8 pc"] * 3}},
        channels={"first": "-9 km/s", "last": "9 km/s", "width": "0.1 km/s"},
    )  # fmt: skip
    found = {}
    for reconstruction in ("linear", "constant"):
        job["march"] = {"reconstruction": reconstruction}
        found[reconstruction] = render_image(job, flow_snapshot(gas, 20))[0][:, 0, 0]
    n, right, up = sky_axes(toward, north)
    at = np.array([0.04, 0.15, 0.02])
    far = math.sqrt(3.0) * 0.8
    box = Flow(
        lambda x, y, z: rho * (np.maximum(np.maximum(abs(x), abs(y)), abs(z)) < 0.8),
        gas.temperature,
        COLLAPSE,
    )
    sky = SlowSky((n, right, up), far, np.array(channel_centres(job)) * KM_S, TURBULENT_B, steps=6000)
    wanted = sky.rays(box, np.array([at @ right]), np.array([at @ up]))[0]
    assert peaks(found["linear"]) == peaks(wanted) == 2
    np.testing.assert_allclose(found["linear"], wanted, rtol=0.0, atol=0.04 * wanted.max())
    assert peaks(found["constant"]) > 10


def shock_job(co_file: str, toward, reconstruction: str, **view) -> dict:
    return make_job(
        gas={"velocity": FLOW}, line={"molecule": co_file},
        view={"toward": list(toward), "pixel": "1 pc", **view},
        channels={"first": "-6 km/s", "last": "6 km/s", "width": "0.1 km/s"},
        # Off the cells' middle lines, where slopes across the line of sight count.
        rays={"per_side": 2},
        march={"reconstruction": reconstruction},
    )  # fmt: skip


def shock_tube(middle: bool):
    """Two states along x, 8 cells each; between them, if `middle`, one cell of a state in between."""
    jump = np.array([1.0] * 8 + [0.6] * middle + [-1.0] * 8)
    shape = (len(jump), 4, 4)
    fields = {name: np.broadcast_to((speed * jump)[:, None, None], shape)
              for name, speed in zip(FLOW, (2.0, 1.5, -3.0), strict=True)}  # fmt: skip
    density = np.where(jump > 0.0, 1e-22, 4e-22)
    return grid_snapshot(
        {"density": np.broadcast_to(density[:, None, None], shape), **fields}, (1.0,) * 3, patch=6
    )


def both(job: dict, snapshot) -> list[np.ndarray]:
    out = []
    for reconstruction in ("linear", "constant"):
        job["march"] = {"reconstruction": reconstruction}
        out.append(render_image(job, snapshot)[0])
    return out


@pytest.mark.parametrize("toward", [(1.0, 0.0, 0.0), (0.0, 0.0, 1.0), (0.7, 0.2, -0.4)])
def test_a_jump_between_two_states_stays(co_file: str, toward):
    linear, constant = both(shock_job(co_file, toward, "linear"), shock_tube(middle=False))
    assert constant.max() > 0.1
    np.testing.assert_array_equal(linear, constant)


def test_a_smeared_shock_stays_in_its_cell(co_file: str):
    # Seen along z, each column of cells is a pixel; x grows to the right or to the left, the shock is pixel 8.
    linear, constant = both(shock_job(co_file, (0.0, 0.0, 1.0), "linear", north=[0.0, 1.0, 0.0], size=[17, 4]),
                            shock_tube(middle=True))  # fmt: skip
    others = np.arange(17) != 8
    # To rounding only: rays of one packet go through the arithmetic that the steepest of them needs.
    rounding = 2e-6 * constant.max()
    np.testing.assert_allclose(linear[:, :, others], constant[:, :, others], rtol=0.0, atol=rounding)
    assert np.abs(linear - constant)[:, :, 8].max() > 1e3 * rounding


def test_the_cell_between_two_states_is_swept(co_file: str):
    # Looking along x: 2 km/s, one cell about 1.2 km/s, -2 km/s. The limiter (van Leer 1977) grants that cell twice the
    # smaller of its two steps: from 2 to 0.4 km/s.
    job = shock_job(co_file, (1.0, 0.0, 0.0), "linear", size=[1, 1])
    snapshot = shock_tube(middle=True)
    linear, constant = both(job, snapshot)
    channels = np.array(channel_centres(job)) * KM_S
    width = float(CO.width(15.0, 0.3 * KM_S))
    thick, thin = (float(opacity_of(rho, 15.0)) for rho in (4e-22, 1e-22))
    parts = [(thin, 2.0, 2.0, 8.0), (thick, -2.0, -2.0, 8.0)]
    for image, between in ((linear, (thin, 2.0, 0.4, 1.0)), (constant, (thin, 1.2, 1.2, 1.0))):
        sweeps = [
            swept_depth(channels, o, v1 * KM_S, v2 * KM_S, s, width) for o, v1, v2, s in (*parts, between)
        ]
        wanted = -excess(15.0) * np.expm1(-sum(sweeps))
        np.testing.assert_allclose(image[:, 0, 0], wanted, rtol=0.0, atol=1e-5 * wanted.max())
