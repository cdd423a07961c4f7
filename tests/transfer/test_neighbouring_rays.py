"""Rays that march side by side through gas that moves differently: none may disturb another's line."""

from __future__ import annotations

import math

import numpy as np
import pytest
from support.grids import grid_snapshot
from support.jobs import channel_centres, make_job
from support.physics import CO, KM_S
from support.rendering import render_image
from support.sweeps import density_of, excess, swept_depth

KELVIN = 15.0
WIDTH = float(CO.width(KELVIN, 0.1 * KM_S))


@pytest.mark.parametrize("depth", [1e-3, 0.5, 100.0])
@pytest.mark.parametrize("half_span", [0.0, 0.3, 3.0])
@pytest.mark.parametrize("half_band", [3.0, 20.0])
def test_lines_far_apart(co_file: str, half_band: float, half_span: float, depth: float):
    # One column of pixels moves the other way: by 40 to 300 line widths, over 80 to 760 channels of 0.05 km/s. Each
    # pixel looks through the middle one of three cells; the others make its slope.
    middle = np.full((4, 4), half_band - 1.0)
    middle[0] = 1.03 - half_band
    away = 2.0 * half_span * WIDTH / KM_S
    speed = np.stack([middle - away, middle, middle + away], axis=-1)
    opacity = depth * math.sqrt(math.pi) * WIDTH
    job = make_job(
        gas={"velocity": ["0 km/s", "0 km/s", "speed"], "microturbulence": {"b": "0.1 km/s"}},
        line={"molecule": co_file},
        view={"toward": "+z", "size": [4, 4]},
        region={"box": {"lo": ["0 pc", "0 pc", "1 pc"], "hi": ["4 pc", "4 pc", "2 pc"]}},
        channels={"first": f"-{half_band} km/s", "last": f"{half_band} km/s", "width": "0.05 km/s"},
        march={"reconstruction": "linear"},
    )
    density = np.full((4, 4, 3), density_of(opacity, KELVIN))
    image, _, _ = render_image(job, grid_snapshot({"density": density, "speed": speed}, (1.0, 1.0, 1.0)))
    channels = np.array(channel_centres(job))[:, None, None] * KM_S
    # Looking along +z with y up, x grows to the left.
    start, end = ((middle[::-1].T + sign * 0.5 * away) * KM_S for sign in (-1.0, 1.0))
    wanted = -excess(KELVIN) * np.expm1(-swept_depth(channels, opacity, start, end, 1.0, WIDTH))
    np.testing.assert_allclose(image, wanted, rtol=0.0, atol=1e-5 * wanted.max())
