"""A uniform slab in LTE against the textbook solution, from transparent to opaque, in 1 to 10^4 cells.

I = (J(T) - J(T_bg)) (1 - exp(-tau_v)) with tau_v = tau_0 exp(-(v/b)^2) (Rybicki & Lightman 1979, eq. 1.30 for a
constant source function, the background subtracted).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from support.grids import grid_snapshot
from support.jobs import channel_centres, make_job
from support.physics import CO, KM_S, PARSEC, equivalent_temperature, h2_density
from support.rendering import render_image

KELVIN, BACKGROUND = 12.0, 2.725
TURBULENT_B = 0.25 * KM_S
DEPTHS = [10.0**power for power in range(-6, 5)]
THICKNESS = 0.5
"""Of the slab along z, pc."""


def density_for(depth: float, path_pc: float) -> float:
    """Mass density (g/cm3) at which the line centre has the optical depth `depth` over `path_pc`."""
    per_density = CO.opacity(1e-4 * h2_density(1.0), KELVIN) / (
        math.sqrt(math.pi) * CO.width(KELVIN, TURBULENT_B)
    )
    return depth / float(per_density * path_pc * PARSEC)


def slab_spectra(depths: list[float], cells: int, toward, size_across: float, across: int, co_file: str):
    """Rendered and analytic spectra of a pixel in the middle of slabs of each depth along the line of sight."""
    n = np.array(toward) / np.linalg.norm(toward)
    path = THICKNESS / abs(n[2])
    cell = (size_across / across, size_across / across, THICKNESS / cells)
    job = make_job(
        gas={"temperature": f"{KELVIN} K", "velocity": ["0.3 km/s", "-0.2 km/s", "0.5 km/s"],
             "microturbulence": {"b": "0.25 km/s"}},
        line={"molecule": co_file},
        view={"toward": list(toward), "pixel": "0.01 pc", "size": [1, 1]},
        channels={"first": "-2.05 km/s", "last": "2 km/s", "width": "0.05 km/s"},
    )  # fmt: skip
    speed = float(n @ [0.3, -0.2, 0.5]) * KM_S
    offset = (np.array(channel_centres(job)) * KM_S - speed) / CO.width(KELVIN, TURBULENT_B)
    nu = CO.frequency(1)
    excess = float(equivalent_temperature(nu, KELVIN) - equivalent_temperature(nu, BACKGROUND))
    for depth in depths:
        density = np.full((across, across, cells), density_for(depth, path))
        image, _, _ = render_image(job, grid_snapshot({"density": density}, cell))
        yield image[:, 0, 0], -excess * np.expm1(-depth * np.exp(-(offset**2)))


@pytest.mark.parametrize("cells", [1, 10, 100, 1000, 10_000])
def test_along_an_axis(cells: int, co_file: str):
    depths = DEPTHS if cells <= 1000 else DEPTHS[::2]
    for found, wanted in slab_spectra(depths, cells, (0.0, 0.0, -1.0), 1.0, 1, co_file):
        np.testing.assert_allclose(found, wanted, rtol=0.0, atol=1e-5 * wanted.max())


@pytest.mark.parametrize("cells", [1, 10, 100, 1000, 10_000])
def test_at_a_slant(cells: int, co_file: str):
    # 62 degrees from the normal: the ray crosses 0.83 pc and 0.44 pc along x and y, inside 4 pc.
    depths = DEPTHS[::2] if cells <= 1000 else DEPTHS[::5]
    for found, wanted in slab_spectra(depths, cells, (1.5, -0.8, 0.9), 4.0, 8, co_file):
        np.testing.assert_allclose(found, wanted, rtol=0.0, atol=1e-5 * wanted.max())


def test_colder_than_the_background_absorbs(co_file: str):
    nu = CO.frequency(1)
    cell = (1.0, 1.0, THICKNESS / 20)
    job = make_job(
        gas={"temperature": "3 K", "microturbulence": {"b": "0.25 km/s"}},
        line={"molecule": co_file, "background": "10 K"},
        view={"pixel": "0.01 pc", "size": [1, 1]},
    )
    density = 2e-22
    image, _, _ = render_image(job, grid_snapshot({"density": np.full((1, 1, 20), density)}, cell))
    width = float(CO.width(3.0, TURBULENT_B))
    depth = (
        float(CO.opacity(1e-4 * h2_density(density), 3.0)) * THICKNESS * PARSEC / (math.sqrt(math.pi) * width)
    )
    offset = np.array(channel_centres(job)) * KM_S / width
    excess = float(equivalent_temperature(nu, 3.0) - equivalent_temperature(nu, 10.0))
    wanted = -excess * np.expm1(-depth * np.exp(-(offset**2)))
    assert wanted.min() < -1.0
    np.testing.assert_allclose(image[:, 0, 0], wanted, rtol=0.0, atol=1e-5 * abs(wanted.min()))
