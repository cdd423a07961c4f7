"""Moments, spectra and maps against closed forms, and against numpy on the whole array."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from astropy import constants
from astropy import units as u
from astropy.modeling.models import BlackBody
from scipy.special import erf

from cubeforge.cube.store import Cube
from cubeforge.errors import CubeError
from cubeforge.observe import maps
from cubeforge.observe.maps import background_brightness, line_channels, significant, summarise

Store = Callable[..., Cube]

EDGES = -2.05 + 0.1 * np.arange(42)
CENTRES = 0.5 * (EDGES[1:] + EDGES[:-1])
SIGMA = 0.23


def rotating(ny: int = 21, nx: int = 37) -> tuple[Any, Any, Any]:
    """Lines whose peak and velocity vary over the sky, as means over channels; peaks; velocities in km/s."""
    y, x = np.mgrid[:ny, :nx]
    peak = 1.0 + 4.0 * np.exp(-(((x - 11.0) / 9.0) ** 2) - ((y - 13.0) / 6.0) ** 2)
    velocity = 0.3 + 0.02 * (x - 18) - 0.03 * (y - 10)
    # A channel holds the mean of the Gaussian over its width, by the error function.
    below = erf((EDGES[:, None, None] - velocity) / (np.sqrt(2) * SIGMA))
    lines = peak * SIGMA * np.sqrt(np.pi / 2) * np.diff(below, axis=0) / 0.1
    return lines, peak, velocity


def test_moments_of_gaussian_lines_are_the_closed_forms(store_cube: Store) -> None:
    lines, peak, velocity = rotating()
    summary = summarise(store_cube(lines))
    # Integral of a Gaussian: peak sigma sqrt(2 pi); float32 storage limits the agreement.
    np.testing.assert_allclose(summary.moment0, peak * SIGMA * np.sqrt(2 * np.pi), rtol=2e-6)
    np.testing.assert_allclose(summary.moment1, velocity, atol=2e-6)
    np.testing.assert_array_equal(summary.peak, lines.astype(np.float32).max(axis=0))
    np.testing.assert_allclose(summary.spectrum, lines.mean(axis=(1, 2)), rtol=1e-5, atol=1e-9)
    assert summary.block == 1
    assert summary.bad_pixels == 0
    assert summary.background == 0.0


def test_velocities_are_those_of_the_band(store_cube: Store) -> None:
    lines, _, velocity = rotating()
    summary = summarise(store_cube(lines, velocity_start=85.0e5))
    # The same channels, which begin at 85 km/s and not at -2 km/s.
    np.testing.assert_allclose(summary.moment1, velocity + 87.0, atol=2e-6)


@pytest.mark.parametrize("tile", [(1, 37), (5, 8), (16, 16), (64, 64)])
@pytest.mark.parametrize("max_side", [1000, 13, 1])
def test_tiles_and_pieces_do_not_matter(
    store_cube: Store, monkeypatch: pytest.MonkeyPatch, tile: tuple[int, int], max_side: int
) -> None:
    lines, *_ = rotating()
    column = lines.sum(axis=0) * 1e-3
    monkeypatch.setattr(maps, "PIECE", 1000)
    cube = store_cube(lines, tile=tile, maps={("column", "g cm-2"): column})
    found = summarise(cube, channels=[3, 20], max_side=max_side)
    block = -(-37 // max_side)
    assert found.block == block
    stored = lines.astype(np.float32).astype(float)

    def mean(image: Any) -> Any:
        """Block means the slow way: each block by itself."""
        starts = [range(0, length, block) for length in image.shape]
        return np.array([[image[j : j + block, i : i + block].mean() for i in starts[1]] for j in starts[0]])

    np.testing.assert_allclose(found.moment0, mean(stored.sum(axis=0) * 0.1), rtol=1e-12)
    weighted = (stored * CENTRES[:, None, None]).sum(axis=0) * 0.1
    np.testing.assert_allclose(found.moment1, mean(weighted) / found.moment0, atol=1e-12)
    np.testing.assert_allclose(found.maps["column"], mean(column), rtol=1e-12)
    for plane, channel in zip(found.channel_maps, (3, 20), strict=True):
        np.testing.assert_allclose(plane, mean(stored[channel]), rtol=1e-12)
    np.testing.assert_allclose(found.spectrum, stored.mean(axis=(1, 2)), rtol=1e-12)
    # Averaging conserves: blocks weighted by their pixels give the mean of the image.
    total = (found.moment0 * found.pixels).sum() / found.pixels.sum()
    assert total == pytest.approx(stored.sum(axis=0).mean() * 0.1, rel=1e-12)
    # A peak stays the peak of its brightest pixel.
    assert found.peak.max() == stored.max()


@pytest.mark.parametrize("unit", ["K", "Jy/sr", "Jy/pixel"])
def test_background_of_an_absolute_cube_is_taken_off(store_cube: Store, unit: str) -> None:
    lines, peak, velocity = rotating()
    frequency, pixel = 110.2013543e9, 1.0e-5
    # From astropy's black body, in SI, not from our own Planck function.
    planckian = BlackBody(temperature=2.725 * u.K)(frequency * u.Hz)
    kelvin = (2 * constants.k_B * u.K * (frequency * u.Hz) ** 2 / constants.c**2 / u.sr).to(u.Jy / u.sr).value
    scale = {"K": 1.0, "Jy/sr": kelvin, "Jy/pixel": kelvin * pixel**2}[unit]
    background = planckian.to(u.Jy / u.sr).value / kelvin * scale
    absolute = summarise(store_cube(lines * scale + background, unit=unit, absolute=True, name="absolute"))
    above = summarise(store_cube(lines * scale, unit=unit, name="above"))
    assert absolute.background == pytest.approx(background, rel=1e-6)
    np.testing.assert_allclose(absolute.moment0, above.moment0, rtol=1e-5)
    np.testing.assert_allclose(absolute.moment0, scale * peak * SIGMA * np.sqrt(2 * np.pi), rtol=1e-5)
    np.testing.assert_allclose(absolute.moment1, velocity, atol=1e-5)
    np.testing.assert_allclose(absolute.channel_maps, above.channel_maps, atol=1e-6 * background)


def test_background_in_kelvins_is_below_its_temperature(store_cube: Store) -> None:
    cube = store_cube(np.zeros((1, 1, 1)), absolute=True)
    # T0 = h nu / k = 5.29 K for 13CO 1-0; J = T0 / (exp(T0/T) - 1) (Mangum & Shirley 2015, eq. 24), by hand.
    t0 = 6.62607015e-34 * 110.2013543e9 / 1.380649e-23
    assert background_brightness(cube.spec) == pytest.approx(t0 / (np.exp(t0 / 2.725) - 1), rel=1e-9)


def test_empty_sky_of_an_absolute_cube_has_no_velocity(store_cube: Store) -> None:
    cube = store_cube(np.ones((41, 3, 3)), absolute=True)
    level = np.float32(background_brightness(cube.spec))
    # What rounding to float32 leaves is not zero, and has a sign; it must not count as emission.
    levels = np.array([np.nextafter(level, np.float32(end)) for end in (0.0, level, np.inf)])
    sky = store_cube(np.broadcast_to(levels, (41, 1, 3)), absolute=True, name="sky")
    summary = summarise(sky)
    assert summary.moment0.max() > 0.0
    assert np.all(np.abs(summary.moment0) < 1e-6)
    assert np.isnan(summary.moment1).all()


def test_absorption_has_a_negative_moment_0_and_no_moment_1(store_cube: Store) -> None:
    lines, peak, _ = rotating()
    summary = summarise(store_cube(-lines))
    np.testing.assert_allclose(summary.moment0, -peak * SIGMA * np.sqrt(2 * np.pi), rtol=2e-6)
    assert np.isnan(summary.moment1).all()
    assert np.all(summary.peak <= 0.0)
    assert all(abs(CENTRES[channel] - 0.3) < 1.0 for channel in summary.channels)


def test_emission_beside_absorption_gives_no_velocity_outside_the_band(store_cube: Store) -> None:
    profile = np.zeros(41)
    profile[[10, 30]] = 1.0, -0.99
    profile[20] = 0.001
    profile = np.stack([profile, np.abs(profile)], axis=1)[:, None, :]
    summary = summarise(store_cube(profile))
    # Unguarded, the first would be some -180 km/s in a band from -2 to 2 km/s.
    assert np.isnan(summary.moment1[0, 0])
    assert abs(summary.moment1[0, 1]) < 2.0


def test_significance_in_noise(store_cube: Store) -> None:
    rng = np.random.default_rng(2)
    noise = rng.normal(0.0, 1.0, (41, 60, 60))
    quiet = summarise(store_cube(noise, name="noise", tile=(60, 60)))
    # Three standard deviations, one-sided: 0.13 % of a normal distribution's area (handbook value).
    assert np.isfinite(quiet.moment1).mean() < 0.005
    lines, *_ = rotating(60, 60)
    loud = summarise(store_cube(noise + 20.0 * lines / lines.max(axis=0), name="loud", tile=(60, 60)))
    assert np.isfinite(loud.moment1).all()


def test_significance_counts_standard_deviations_of_noise() -> None:
    # Flat noise in 100 channels of width 1: standard deviation of the integral 10 sigma.
    integral_abs = np.full(3, 100 * np.sqrt(2 / np.pi))
    found = significant(np.array([29.9, 30.1, np.nan]), integral_abs, 100, 0.0)
    np.testing.assert_array_equal(found, [False, True, False])


def test_faint_rims_are_below_the_floor(store_cube: Store) -> None:
    lines = np.zeros((5, 1, 3))
    lines[2, 0] = 1.0, 1.1e-3, 0.9e-3
    np.testing.assert_array_equal(np.isfinite(summarise(store_cube(lines)).moment1), [[True, True, False]])


def test_unfinished_tiles_are_nan_and_do_not_dilute(store_cube: Store) -> None:
    lines = np.full((4, 32, 40), 2.0)
    lines[:, :, 16:] = 5.0
    cube = store_cube(lines, skip={1, 2}, maps={("column", "g cm-2"): lines[0]})
    # Stored but not in the ledger: a tile whose run died before it was entered. Not done, so not shown.
    cube.write_tile(1, np.full((4, 16, 16), 7, np.float32), np.full((1, 16, 16), 7.0))
    summary = summarise(cube, max_side=20)
    missing = np.zeros((16, 20), dtype=bool)
    missing[:8, 8:] = True
    missing[:8, 16:] = True
    np.testing.assert_array_equal(np.isnan(summary.moment0), missing)
    np.testing.assert_array_equal(np.isnan(summary.maps["column"]), missing)
    np.testing.assert_array_equal(np.isnan(summary.channel_maps), np.broadcast_to(missing, (4, 16, 20)))
    np.testing.assert_array_equal(summary.pixels == 0, missing)
    assert summary.tiles_done == 4
    assert summary.peak[~missing].max() == 5.0
    pixels = 2 * 256 + 16 * 16 + 16 * 8
    assert summary.spectrum == pytest.approx((2.0 * 512 + 5.0 * (pixels - 512)) / pixels)


def test_a_block_in_a_finished_and_an_unfinished_tile_is_the_mean_of_what_is_there(store_cube: Store) -> None:
    lines = np.arange(2.0 * 1 * 6).reshape(2, 1, 6)
    summary = summarise(store_cube(lines, tile=(1, 2), skip={1}), max_side=2, channels=[1])
    np.testing.assert_allclose(summary.channel_maps[0], [[6.5, 10.5]])
    np.testing.assert_array_equal(summary.pixels, [[2, 2]])


def test_nothing_finished(store_cube: Store) -> None:
    summary = summarise(store_cube(np.ones((12, 5, 5)), skip={0}))
    assert summary.tiles_done == 0
    for image in (summary.moment0, summary.moment1, summary.peak, summary.spectrum, summary.channel_maps):
        assert np.isnan(image).all()


def test_pixels_that_are_not_finite_are_left_out_and_counted(store_cube: Store) -> None:
    lines = np.ones((3, 4, 4))
    lines[1, 0, 0] = np.nan
    lines[:, 3, 3] = np.inf, -np.inf, 1.0
    column = np.ones((4, 4))
    column[2, 2] = np.nan
    summary = summarise(store_cube(lines, maps={("column", "g cm-2"): column}), max_side=2)
    assert summary.bad_pixels == 2
    np.testing.assert_array_equal(summary.pixels, [[3, 4], [4, 3]])
    np.testing.assert_allclose(summary.moment0, 0.3)
    np.testing.assert_allclose(summary.channel_maps, 1.0)
    np.testing.assert_allclose(summary.maps["column"], 1.0)
    np.testing.assert_allclose(summary.peak, 1.0)


@pytest.mark.parametrize("count", [1, 2, 5, 6, 9, 10, 41, 400])
@pytest.mark.parametrize("sigma", [0.01, 0.5, 2.0, 30.0])
@pytest.mark.parametrize("place", [0.0, 0.4, 1.0])
def test_chosen_channels_lie_over_the_line(count: int, sigma: float, place: float) -> None:
    channels = np.arange(count)
    centre = round(place * (count - 1))
    chosen = np.array(line_channels(np.exp(-0.5 * ((channels - centre) / sigma) ** 2)))
    assert min(6, count) <= len(chosen) <= 9
    assert len(set(np.diff(chosen))) <= 1
    assert chosen[0] >= 0
    assert chosen[-1] < count
    step = chosen[1] - chosen[0] if count > 1 else 1
    # The centre of the line is at most a step away, and none but neighbours are far out in its wings.
    assert np.abs(chosen - centre).min() <= step
    if step > 1:
        assert np.abs(chosen - centre).max() <= 2 * sigma + step


def test_chosen_channels_without_a_line_spread_over_the_band() -> None:
    chosen = line_channels(np.zeros(81))
    assert (chosen[0], chosen[-1], len(chosen)) == (0, 80, 9)


def test_wishes_that_cannot_be(store_cube: Store) -> None:
    cube = store_cube(np.ones((3, 2, 2)))
    with pytest.raises(CubeError, match="no channel 3: the cube has 0 to 2"):
        summarise(cube, channels=[0, 3])
    with pytest.raises(CubeError, match="max_side is 0"):
        summarise(cube, max_side=0)
    assert summarise(cube, channels=[]).channel_maps.shape == (0, 2, 2)
