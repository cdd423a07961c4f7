"""Channel means of narrow and wide lines, thin and opaque, and the far wings of many faint crossings."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import erf
from support.grids import grid_snapshot
from support.jobs import FLOW, make_job
from support.physics import CO, KM_S, PARSEC, equivalent_temperature, h2_density
from support.rendering import render_image

from cubeforge.errors import PlanError
from cubeforge.transfer.channels import make_band

KELVIN, CHANNEL = 10.0, 1.0
OFFSETS = np.linspace(-0.5, 0.5, 41)
"""Of the line from the middle of a channel, in channels."""
HALF_BAND = 6


def density_for(depth: float, width: float, path_pc: float = 1.0) -> float:
    """Mass density (g/cm3) for a line-centre depth, at 10 K."""
    per_density = CO.opacity(1e-4 * h2_density(1.0), KELVIN) / (math.sqrt(math.pi) * width)
    return depth / float(per_density * path_pc * PARSEC)


def rendered(b: float, depth: float, co_file: str) -> np.ndarray:
    """Spectra (channels, offsets) of one cell each: lines `b` channels wide at `OFFSETS`."""
    thermal = float(CO.width(KELVIN)) / KM_S
    shape = (len(OFFSETS), 1, 1)
    fields = {name: np.zeros(shape) for name in FLOW}
    fields["z_velocity"] = -OFFSETS.reshape(shape) * CHANNEL
    fields["density"] = np.full(shape, density_for(depth, b * CHANNEL * KM_S))
    job = make_job(
        gas={
            "temperature": f"{KELVIN} K",
            "velocity": FLOW,
            "microturbulence": {"b": f"{math.sqrt((b * CHANNEL) ** 2 - thermal**2)!r} km/s"},
        },
        line={"molecule": co_file},
        view={"toward": "-z"},
        channels={"first": f"{-HALF_BAND} km/s", "last": f"{HALF_BAND} km/s", "width": "1 km/s",
                  "sampling": "mean"},
    )  # fmt: skip
    image, _, _ = render_image(job, grid_snapshot(fields, (1.0, 1.0, 1.0)))
    return image[:, 0, :].astype(float)


def excess() -> float:
    nu = CO.frequency(1)
    return float(equivalent_temperature(nu, KELVIN) - equivalent_temperature(nu, 2.725))


def edges(b: float) -> tuple[np.ndarray, np.ndarray]:
    """Edges of the channels from the line's centre, in b: shapes (channels, offsets)."""
    centres = np.arange(-HALF_BAND, HALF_BAND + 1)[:, np.newaxis] - OFFSETS
    return (centres - 0.5) / b, (centres + 0.5) / b


@pytest.mark.parametrize(
    "b", [0.1, 0.13, 0.2, 0.3, 0.45, 0.7, 0.99, 1.0, 1.5, 1.99, 2.0, 2.9, 3.0, 3.99, 4.0, 10.0]
)
def test_thin_lines_are_the_integral_of_a_gaussian(b: float, co_file: str):
    low, high = edges(b)
    depth = 1e-4
    # To first order in the depth; the second is depth / 4 of it.
    wanted = excess() * depth * 0.5 * math.sqrt(math.pi) * b * (erf(high) - erf(low))
    found = rendered(b, depth, co_file)
    np.testing.assert_allclose(found, wanted, rtol=0.0, atol=(1e-4 + depth / 2) * wanted.max())


@pytest.mark.parametrize("depth", [1.0, 30.0, 1e3, 1e4])
@pytest.mark.parametrize("b", [0.1, 0.2, 0.45, 0.99, 1.0, 2.0, 3.0, 4.0, 10.0])
def test_opaque_lines_against_fine_quadrature(b: float, depth: float, co_file: str):
    low, _ = edges(b)
    points = (np.arange(4000) + 0.5) / 4000
    x = low[..., np.newaxis] + points / b
    wanted = excess() * -np.expm1(-depth * np.exp(-(x**2))).mean(axis=-1)
    found = rendered(b, depth, co_file)
    np.testing.assert_allclose(found, wanted, rtol=0.0, atol=1e-3 * wanted.max())


def test_far_too_narrow_lines_are_refused():
    with pytest.raises(PlanError, match=r"channels\.width"):
        make_band(0.0, 1e5, 10, sampling="mean", narrowest=1e3, most_crossings=100)


@pytest.mark.parametrize("sampling", ["mean", "centre"])
def test_a_thousand_faint_crossings_are_one_line(sampling: str, co_file: str):
    # Depths of 1e-9 each add up to 1e-6, wings included: windows must not be drawn around each crossing's own depth.
    width = float(CO.width(KELVIN, 0.4 * KM_S))
    job = make_job(
        gas={"temperature": f"{KELVIN} K", "microturbulence": {"b": "0.4 km/s"}},
        line={"molecule": co_file},
        view={"pixel": "1 pc", "size": [1, 1]},
        channels={"first": "-2 km/s", "last": "2 km/s", "width": "0.05 km/s", "sampling": sampling},
    )
    spectra = []
    for cells in (1, 1000):
        density = np.full((1, 1, cells), density_for(1e-6, width))
        image, _, _ = render_image(job, grid_snapshot({"density": density}, (1.0, 1.0, 1.0 / cells)))
        spectra.append(image[:, 0, 0].astype(float))
    centres = np.linspace(-2.0, 2.0, 81) * KM_S
    half = 0.025 * KM_S
    if sampling == "mean":
        shape = (
            (erf((centres + half) / width) - erf((centres - half) / width))
            * width
            * math.sqrt(math.pi)
            / (4 * half)
        )
    else:
        shape = np.exp(-((centres / width) ** 2))
    wanted = excess() * 1e-6 * shape
    for spectrum in spectra:
        np.testing.assert_allclose(spectrum, wanted, rtol=0.0, atol=1e-5 * wanted.max())
    # Three widths out, where the line is 1e-4 of its peak, it is still there in both.
    wing = np.argmin(np.abs(centres - 3.0 * width))
    for spectrum in spectra:
        assert spectrum[wing] == pytest.approx(wanted[wing], rel=1e-2)


def test_a_faint_cloud_is_seen_in_front_of_and_behind_an_opaque_one(co_file: str):
    # Depths 1e-5, 1e3 and 1e-5 at three velocities: both faint lines show in full, beside the opaque one.
    width = float(CO.width(KELVIN, 0.1 * KM_S))
    speeds = np.array([-2.0, 0.0, 2.0])
    shape = (1, 1, 3)
    fields = {name: np.zeros(shape) for name in FLOW}
    fields["z_velocity"] = speeds.reshape(shape)
    fields["density"] = np.array([density_for(d, width) for d in (1e-5, 1e3, 1e-5)]).reshape(shape)
    job = make_job(
        gas={"temperature": f"{KELVIN} K", "velocity": FLOW, "microturbulence": {"b": "0.1 km/s"}},
        line={"molecule": co_file},
        view={"toward": "+z", "size": [1, 1]},
    )
    job["channels"] = {**job["channels"], "first": "-3 km/s", "last": "3 km/s"}
    image, _, _ = render_image(job, grid_snapshot(fields, (1.0, 1.0, 1.0)))
    x = (np.linspace(-3.0, 3.0, 61)[:, np.newaxis] - speeds) * KM_S / width
    wanted = excess() * -np.expm1(-(np.exp(-(x**2)) @ [1e-5, 1e3, 1e-5]))
    np.testing.assert_allclose(image[:, 0, 0], wanted, rtol=0.0, atol=1e-5 * wanted.max())
    for channel in (10, 50):
        assert image[channel, 0, 0] == pytest.approx(excess() * 1e-5, rel=1e-4)
