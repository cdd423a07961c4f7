"""Units of the cube against astropy's equivalencies and its black body."""

from __future__ import annotations

import numpy as np
import pytest
from astropy import units as u
from astropy.modeling.models import BlackBody
from support.grids import grid_snapshot
from support.jobs import make_job
from support.physics import CO
from support.rendering import render_image

FREQUENCY = CO.frequency(1) * u.Hz


def images(co_file: str, **output: str) -> np.ndarray:
    rng = np.random.default_rng(5)
    density = 1e-21 * np.exp(rng.normal(0.0, 2.0, (6, 5, 4)))
    job = make_job(
        line={"molecule": co_file, "abundance": 1e-6},
        view={"pixel": "0.9 pc", "distance": "300 pc", "toward": [0.2, 0.3, -1.0]},
        output=output,
    )
    return render_image(job, grid_snapshot({"density": density}, (1.0, 1.0, 1.0)))[0].astype(float)


def test_janskys_per_steradian(co_file: str):
    kelvin, janskys = images(co_file), images(co_file, brightness="Jy/sr")
    wanted = (kelvin * u.K).to_value(u.Jy / u.sr, u.brightness_temperature(FREQUENCY))
    assert kelvin.max() > 5.0
    np.testing.assert_allclose(janskys, wanted, rtol=1e-6, atol=1e-9 * wanted.max())


def test_janskys_per_pixel(co_file: str):
    # A pixel of 0.9 pc at 300 pc is 0.003 rad: 9e-6 sr.
    kelvin, janskys = images(co_file), images(co_file, brightness="Jy/pixel")
    wanted = (kelvin * u.K).to_value(u.Jy / u.sr, u.brightness_temperature(FREQUENCY)) * 9e-6
    np.testing.assert_allclose(janskys, wanted, rtol=1e-6, atol=1e-9 * wanted.max())


@pytest.mark.parametrize("brightness", ["K", "Jy/sr"])
def test_background_that_is_kept(co_file: str, brightness: str):
    above = images(co_file, brightness=brightness)
    whole = images(co_file, brightness=brightness, background="kept")
    sky = BlackBody(2.725 * u.K)(FREQUENCY)
    if brightness == "K":
        wanted = sky.to_value(u.K, u.brightness_temperature(FREQUENCY))
        # By hand: h nu / k = 5.532 K, and 5.532 / (exp(5.532 / 2.725) - 1) = 0.836.
        assert wanted == pytest.approx(0.836, abs=1e-3)
    else:
        wanted = sky.to_value(u.Jy / u.sr)
    np.testing.assert_allclose(whole - above, wanted, rtol=0.0, atol=2e-7 * whole.max())


def test_an_opaque_line_reaches_the_black_body_of_the_gas(co_file: str):
    job = make_job(
        gas={"temperature": "15 K"},
        line={"molecule": co_file},
        view={"size": [1, 1]},
        output={"brightness": "Jy/sr", "background": "kept"},
    )
    image, _, _ = render_image(job, grid_snapshot({"density": np.full((1, 1, 8), 1e-18)}, (1.0, 1.0, 1.0)))
    wanted = BlackBody(15.0 * u.K)(FREQUENCY).to_value(u.Jy / u.sr)
    assert image.max() == pytest.approx(wanted, rel=1e-6)
