"""The whole chain, file to cube, against `support.slow_march`: another reader, molecule, geometry and integrator."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from support.jobs import FLOW, TINY_UNITS, channel_centres, make_job
from support.physics import CO, KM_S, PARSEC, Rotor, equivalent_temperature, h2_density
from support.plotfile import FlatGrid, read_flat
from support.rendering import render_image
from support.slow_march import Medium, image, sky_axes

from cubeforge.snapshots.demo import write_demo_snapshot

BACKGROUND = 2.725
OBLIQUE = {"toward": [1.0, -0.4, 0.3], "north": [0.2, 0.3, 1.0], "position_angle": "35 deg"}
VIEWS = {
    "looking along -z": ({"toward": "-z"}, sky_axes((0, 0, -1), (0, 1, 0))),
    "looking along +x": ({"toward": "+x"}, sky_axes((1, 0, 0), (0, 0, 1))),
    "oblique": (OBLIQUE, sky_axes((1.0, -0.4, 0.3), (0.2, 0.3, 1.0), math.radians(35.0))),
}


def medium_of(grid: FlatGrid, units: tuple[float, float, float], temperature, abundance: float,
              turbulent_b: float, rotor: Rotor = CO, velocity=None) -> Medium:  # fmt: skip
    """Gas of a flattened plotfile; `units` are the cgs values of its length, density and velocity."""
    length, density, speed = units
    rho = grid.fields["density"] * density
    kelvin = np.broadcast_to(np.asarray(temperature, dtype=float), rho.shape)
    nu = rotor.frequency(1)
    return Medium(
        lo=grid.lo * length,
        cell=grid.cell * length,
        opacity=rotor.opacity(abundance * h2_density(rho), kelvin),
        excess=equivalent_temperature(nu, kelvin) - equivalent_temperature(nu, BACKGROUND),
        velocity=tuple(v * speed for v in velocity or [grid.fields[name] for name in FLOW]),
        width=rotor.width(kelvin, turbulent_b),
    )


def compare(
    job: dict, axes, medium: Medium, pixel_cm: float, size: tuple[int, int], step: int = 1
) -> np.ndarray:
    """Render both ways; every compared pixel and channel is right to 1e-5 of the peak. Returns the slow image."""
    fast, _, _ = render_image(job)
    centre = medium.lo + 0.5 * medium.cell * medium.opacity.shape
    channels = np.array(channel_centres(job)) * KM_S
    slow = image(medium, centre, axes, pixel_cm, size, channels, step)
    assert fast.shape == slow.shape
    wanted = slow[:, ::step, ::step]
    peak = np.abs(wanted).max()
    np.testing.assert_allclose(fast[:, ::step, ::step], wanted, rtol=0.0, atol=1e-5 * peak)
    return wanted


def tiny_job(path: Path, view: dict, co_file: str, abundance: float, temperature: str) -> dict:
    return make_job(
        snapshot={"path": str(path), "units": TINY_UNITS},
        gas={"temperature": temperature, "velocity": FLOW, "microturbulence": {"sigma": "0.2 km/s"}},
        line={"molecule": co_file, "abundance": abundance},
        view={"pixel": "0.031 pc", "size": [40, 44], **view},
        channels={"first": "-3.6 km/s", "last": "3.6 km/s", "width": "0.2 km/s"},
    )


TINY_CGS = (PARSEC, 1e-20, KM_S)
SIGMA_TO_B = math.sqrt(2.0) * 0.2 * KM_S


@pytest.mark.parametrize("name", VIEWS)
@pytest.mark.parametrize(("abundance", "depth"), [(1e-9, "thin"), (1e-4, "thick")])
def test_real_data_at_one_temperature(
    tiny_snapshot: Path, co_file: str, name: str, abundance: float, depth: str
):
    view, axes = VIEWS[name]
    medium = medium_of(read_flat(tiny_snapshot), TINY_CGS, 15.0, abundance, SIGMA_TO_B)
    job = tiny_job(tiny_snapshot, view, co_file, abundance, "15 K")
    slow = compare(job, axes, medium, 0.031 * PARSEC, (40, 44))
    # The two versions are what they say: nothing, or all, of the excess over the background is reached.
    excess = float(medium.excess.flat[0])
    assert slow.max() < 1e-2 * excess if depth == "thin" else slow.max() > 0.99 * excess


@pytest.mark.parametrize("name", VIEWS)
def test_real_data_with_its_temperature_field(tiny_snapshot: Path, co_file: str, name: str):
    # Code temperatures of 0.38 to 19 K, in units of 4 K: some gas is colder than the background (absorption).
    view, axes = VIEWS[name]
    grid = read_flat(tiny_snapshot)
    medium = medium_of(grid, TINY_CGS, 4.0 * grid.fields["Temp"], 3e-6, SIGMA_TO_B)
    job = tiny_job(tiny_snapshot, view, co_file, 3e-6, "Temp")
    job["snapshot"] = {**job["snapshot"], "units": {**TINY_UNITS, "temperature": "4 K"}}
    slow = compare(job, axes, medium, 0.031 * PARSEC, (40, 44))
    assert medium.excess.min() < 0.0 < slow.max()


def test_upper_line_of_the_ladder(tiny_snapshot: Path, co_file: str):
    view, axes = VIEWS["oblique"]
    grid = read_flat(tiny_snapshot)
    kelvin = 4.0 * grid.fields["Temp"]
    nu = CO.frequency(3)
    medium = medium_of(grid, TINY_CGS, kelvin, 1e-6, SIGMA_TO_B)
    medium.opacity = CO.opacity(1e-6 * h2_density(1e-20 * grid.fields["density"]), kelvin, upper=3)
    medium.excess = equivalent_temperature(nu, kelvin) - equivalent_temperature(nu, BACKGROUND)
    job = tiny_job(tiny_snapshot, view, co_file, 1e-6, "Temp")
    job["snapshot"] = {**job["snapshot"], "units": {**TINY_UNITS, "temperature": "4 K"}}
    job["line"] = {**job["line"], "transition": "3-2"}
    compare(job, axes, medium, 0.031 * PARSEC, (40, 44), step=3)


def test_built_in_carbon_monoxide(tiny_snapshot: Path):
    # The dipole moments of handbooks (0.1098 to 0.1101 D) differ by up to 0.6 % in the strength of the line.
    view, axes = VIEWS["looking along +x"]
    medium = medium_of(read_flat(tiny_snapshot), TINY_CGS, 15.0, 1e-9, SIGMA_TO_B)
    job = tiny_job(tiny_snapshot, view, "CO", 1e-9, "15 K")
    fast, _, _ = render_image(job)
    centre = medium.lo + 0.5 * medium.cell * medium.opacity.shape
    channels = np.array(channel_centres(job)) * KM_S
    slow = image(medium, centre, axes, 0.031 * PARSEC, (40, 44), channels, 4)[:, ::4, ::4]
    np.testing.assert_allclose(fast[:, ::4, ::4], slow, rtol=0.0, atol=6e-3 * slow.max())


@pytest.mark.parametrize("name", VIEWS)
def test_demonstration_cloud(tmp_path: Path, co_file: str, name: str):
    view, axes = VIEWS[name]
    path = tmp_path / "demo"
    write_demo_snapshot(path, base=16, levels=2, seed=3)
    grid = read_flat(path)
    assert grid.level.max() == 1
    medium = medium_of(grid, (1.0, 1.0, 1.0), grid.fields["temperature"], 1e-4, 0.3 * KM_S)
    # 31 pixels across: no ray runs along a face between two of the 32 cells.
    size, side = (28, 30), float(grid.cell[0]) * grid.fields["density"].shape[0]
    job = make_job(
        snapshot={
            "path": str(path),
            "units": {"length": "1 cm", "density": "1 g/cm3", "velocity": "1 cm/s", "temperature": "1 K"},
        },
        gas={"temperature": "temperature", "velocity": FLOW, "microturbulence": {"b": "0.3 km/s"}},
        line={"molecule": co_file},
        view={"pixel": f"{side / 31!r} cm", "size": list(size), **view},
        channels={"first": "-6 km/s", "last": "6 km/s", "width": "0.3 km/s"},
    )
    compare(job, axes, medium, side / 31, size)


LARGE = {
    "small": (["x_velocity", "y_velocity", "z_velocity"], {"velocity": FLOW}),
    "ratio4": (["xmom", "ymom", "zmom"], {"velocity": None, "momentum": ["xmom", "ymom", "zmom"]}),
}


@pytest.mark.slow
@pytest.mark.parametrize("name", VIEWS)
@pytest.mark.parametrize("data", LARGE)
def test_larger_real_data(real_data: Path, co_file: str, data: str, name: str):
    view, axes = VIEWS[name]
    names, gas = LARGE[data]
    grid = read_flat(real_data / data)
    divide = 1.0 if data == "small" else grid.fields["density"]
    velocity = [grid.fields[field] / divide for field in names]
    medium = medium_of(grid, TINY_CGS, 5.0 * grid.fields["Temp"] + 0.0, 1e-6, SIGMA_TO_B, velocity=velocity)
    job = tiny_job(real_data / data, view, co_file, 1e-6, "Temp")
    job["gas"] = {key: value for key, value in {**job["gas"], **gas}.items() if value is not None}
    job["snapshot"] = {**job["snapshot"], "units": {**TINY_UNITS, "temperature": "5 K"}}
    job["channels"] = {**job["channels"], "first": "-6 km/s", "last": "6 km/s"}
    compare(job, axes, medium, 0.031 * PARSEC, (40, 44), step=3)
