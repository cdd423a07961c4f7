"""One crossing whose velocity changes evenly: the line's shape from none to 20 widths to either side.

Each pixel looks through one cell. The cell's slope comes from its two neighbours along the ray, which are cut away.
"""

from __future__ import annotations

import numpy as np
import pytest
from support.grids import grid_snapshot
from support.jobs import channel_centres, make_job
from support.physics import CO, KM_S
from support.rendering import render_image
from support.sweeps import density_of, excess, swept_depth

from cubeforge.transfer.gather_kernels import MOST_CUTS, WIDEST

KELVIN = 15.0
WIDTH = float(CO.width(KELVIN, 0.3 * KM_S))
SPANS = np.array([0.0, 0.01, 0.03, 0.05, 0.1, 0.2, 0.3, 0.34, 0.3499, 0.3501, 0.36, 0.5, 0.69, 0.71, 1.0, 1.5, 2.0,
                  3.0, 4.9, 7.0, 10.0, 14.0, 17.3, 20.0])  # fmt: skip
"""Half spans of the velocity, in line widths."""
DEPTHS = np.array([1e-6, 1e-3, 0.04, 0.06, 0.3, 0.9, 1.1, 5.0, 30.0, 1e2, 1e3, 1e4])
"""Line-centre depths that the crossings would have without a span."""

BOUND = np.where(DEPTHS <= 30.0, 1e-5, np.sqrt(DEPTHS) * 2e-6)
"""Relative to the peak. In deeper lines the far wings show: 2e-4 at 1e4, a tenth of that at 100."""


def render_crossings(co_file: str, first: float, sign: float) -> tuple[np.ndarray, np.ndarray]:
    """Spectra of all spans (x) and depths (y), rendered and exact; `first` is the velocity of channel 0, km/s."""
    shape = (len(SPANS), len(DEPTHS), 3)
    middle = 0.013 * KM_S * np.arange(len(SPANS))
    away = sign * 2.0 * SPANS * WIDTH
    speed = np.stack([middle - away, middle, middle + away], axis=-1)
    opacity = DEPTHS * np.sqrt(np.pi) * WIDTH
    density = np.array([density_of(o, KELVIN) for o in opacity])
    fields = {
        "density": np.broadcast_to(density[None, :, None], shape),
        "speed": np.broadcast_to(speed[:, None, :] / KM_S, shape),
    }
    job = make_job(
        gas={"velocity": ["0 km/s", "0 km/s", "speed"]},
        line={"molecule": co_file},
        view={"toward": "+z", "north": [0.0, 1.0, 0.0], "size": list(shape[:2])},
        region={"box": {"lo": ["0 pc", "0 pc", "1 pc"], "hi": ["24 pc", "12 pc", "2 pc"]}},
        channels={"first": f"{first} km/s", "last": f"{first + 16.0} km/s", "width": "0.05 km/s"},
        march={"reconstruction": "linear"},
    )
    image, _, _ = render_image(job, grid_snapshot(fields, (1.0, 1.0, 1.0)))
    channels = np.array(channel_centres(job))[:, None, None] * KM_S
    start, end = middle - 0.5 * away, middle + 0.5 * away
    depth = swept_depth(channels, opacity[:, None], start, end, 1.0, WIDTH)
    # Looking along +z with y up, x grows to the left.
    return image[:, :, ::-1], -excess(KELVIN) * np.expm1(-depth)


@pytest.mark.parametrize(("first", "sign"), [(-8.0, 1.0), (-8.0, -1.0), (0.0, 1.0)])
def test_shape(co_file: str, first: float, sign: float):
    assert int(SPANS.max() / WIDEST) < MOST_CUTS
    found, wanted = render_crossings(co_file, first, sign)
    off = np.abs(found - wanted).max(axis=0) / wanted.max(axis=0)
    assert np.all(wanted.max(axis=0) > 0.03 * excess(KELVIN) * np.minimum(DEPTHS, 1.0)[:, None])
    assert np.all(off < BOUND[:, None]), (off / BOUND[:, None]).max()
