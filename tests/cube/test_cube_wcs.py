"""Where pixels are, against formulas written out here and against astropy's reading of the header."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from astropy import units as u
from astropy.io import fits
from astropy.wcs import WCS

from cubeforge.cube.spec import CubeSpec
from cubeforge.cube.wcs import celestial_spectral_wcs, celestial_wcs, header, map_header
from cubeforge.errors import CubeError


def _tangent_plane(lon: np.ndarray, lat: np.ndarray, spec: CubeSpec) -> tuple[np.ndarray, np.ndarray]:
    """Offsets to the east and north in the tangent plane, in units of the distance.

    Components of the unit vector to (lon, lat) along east, north and the line of sight at the centre: the
    first two divided by the third. Plain vector algebra.
    """

    def unit(a: np.ndarray, d: np.ndarray) -> np.ndarray:
        return np.array([np.cos(d) * np.cos(a), np.cos(d) * np.sin(a), np.sin(d)])

    a0, d0 = np.radians(spec.centre_lon), np.radians(spec.centre_lat)
    east = np.array([-np.sin(a0), np.cos(a0), 0.0])
    north = np.array([-np.sin(d0) * np.cos(a0), -np.sin(d0) * np.sin(a0), np.cos(d0)])
    towards = unit(np.radians(lon), np.radians(lat))
    ahead = np.tensordot(unit(a0, d0), towards, 1)
    return np.tensordot(east, towards, 1) / ahead, np.tensordot(north, towards, 1) / ahead


@pytest.mark.parametrize("centre", [(83.8, -35.4), (0.001, 0.0), (266.4, 89.99), (359.9999, -72.0)])
@pytest.mark.parametrize("pixel", [2.5e-7, 2.5e-3])
def test_pixels_are_equally_spaced_in_distance(
    spec: CubeSpec, centre: tuple[float, float], pixel: float
) -> None:
    spec = dataclasses.replace(spec, centre_lon=centre[0], centre_lat=centre[1], pixel_rad=pixel)
    text = header(spec).tostring(sep="\n")
    read_back = WCS(fits.Header.fromstring(text, sep="\n"))
    y, x = np.mgrid[0 : spec.shape[1], 0 : spec.shape[2]].astype(float)
    for wcs in (celestial_spectral_wcs(spec), read_back):
        lon, lat, velocity = wcs.wcs_pix2world(x, y, np.full_like(x, 3.0), 0)
        east, north = _tangent_plane(lon, lat, spec)
        size = spec.pixel_rad * max(spec.shape)
        np.testing.assert_allclose(east, -np.broadcast_to(spec.offsets(2), x.shape), atol=1e-9 * size)
        np.testing.assert_allclose(
            north, np.broadcast_to(spec.offsets(1)[:, None], x.shape), atol=1e-9 * size
        )
        np.testing.assert_allclose(velocity * 100, spec.velocities[3], rtol=1e-12)
        again = wcs.wcs_world2pix(lon, lat, velocity, 0)
        # A degree has 16 digits: for tiny pixels that is what bounds the way back.
        bound = max(1e-9, 4 * np.finfo(float).eps * 360 / np.degrees(pixel))
        np.testing.assert_allclose(again, [x, y, np.full_like(x, 3.0)], atol=bound)


def test_north_is_up_and_east_is_left(spec: CubeSpec) -> None:
    wcs = celestial_wcs(spec)
    (lon_left, lon_right), _ = wcs.wcs_pix2world([20.0, 40.0], [22.0, 22.0], 0)
    _, (lat_low, lat_high) = wcs.wcs_pix2world([34.5, 34.5], [10.0, 30.0], 0)
    assert lon_left > lon_right
    assert lat_high > lat_low


def test_the_centre_of_the_image_is_the_centre(spec: CubeSpec) -> None:
    for shape in ((7, 45, 70), (7, 1, 1), (7, 2, 3)):
        one = dataclasses.replace(spec, shape=shape)
        lon, lat = celestial_wcs(one).wcs_pix2world((shape[2] - 1) / 2, (shape[1] - 1) / 2, 0)
        assert lon == pytest.approx(spec.centre_lon, abs=1e-12)
        assert lat == pytest.approx(spec.centre_lat, abs=1e-12)


def test_pixel_scale_and_frames(spec: CubeSpec) -> None:
    wcs = celestial_spectral_wcs(spec)
    scales = wcs.celestial.proj_plane_pixel_scales()
    for scale in scales:
        assert scale.to_value(u.rad) == pytest.approx(spec.pixel_rad, rel=1e-12)
    assert wcs.wcs.radesys == "ICRS"
    assert wcs.wcs.specsys == "LSRK"
    assert wcs.wcs.restfrq == spec.rest_frequency
    assert [str(unit) for unit in wcs.wcs.cunit] == ["deg", "deg", "m / s"]
    assert wcs.world_axis_physical_types == ["pos.eq.ra", "pos.eq.dec", "spect.dopplerVeloc.radio"]


def test_radio_velocity_against_frequency(spec: CubeSpec) -> None:
    """v = c (1 - nu / nu0) (FITS Standard 4.0, table 26: VRAD), through WCSLIB's own translation."""
    wcs = celestial_spectral_wcs(spec).spectral
    wcs.wcs.sptr("FREQ-???")
    frequency = wcs.wcs_pix2world(np.arange(7.0), 0)[0]
    velocity = 299792.458e5 * (1 - frequency / spec.rest_frequency)
    np.testing.assert_allclose(velocity, spec.velocities, rtol=1e-9)


@pytest.mark.parametrize("unit", ["K", "Jy/sr", "Jy/pixel"])
def test_units_follow_the_fits_rules(spec: CubeSpec, unit: str) -> None:
    text = header(dataclasses.replace(spec, unit=unit))["BUNIT"]
    assert u.Unit(text, format="fits") == {"K": u.K, "Jy/sr": u.Jy / u.sr, "Jy/pixel": u.Jy / u.pixel}[unit]
    assert u.Unit(map_header(spec, "column")["BUNIT"], format="fits") == u.g / u.cm**2


def test_header_of_a_cube(spec: CubeSpec) -> None:
    result = header(spec)
    assert result["MOLECULE"] == "CO"
    assert result["LINE"] == "1-0"
    assert result["PLAN"] == spec.fingerprint
    assert result["TBACKGND"] == spec.background_K
    assert list(result["HISTORY"]) == list(spec.history)
    for name in ("BSCALE", "BZERO", "BLANK", "BMAJ", "BMIN", "BPA", "VELREF", "EQUINOX", "EPOCH", "DATE"):
        assert name not in result
    assert "above the background" in result.comments["BUNIT"]
    absolute = header(dataclasses.replace(spec, absolute=True))
    assert "above" not in absolute.comments["BUNIT"]


def test_history_of_any_text(spec: CubeSpec) -> None:
    lines = ("a path with \u00e9 and \u6f22", "two\nlines", "", "x" * 200, "\x1b[1m")
    result = header(dataclasses.replace(spec, history=lines))
    text = result.tostring()
    assert text.isascii()
    assert text.isprintable()
    found = list(result["HISTORY"])
    assert found[:4] == ["a path with \\xe9 and \\u6f22", "two", "lines", ""]
    assert "".join(found[4:]) == "x" * 200 + "\\x1b[1m"


def test_unknown_map(spec: CubeSpec) -> None:
    with pytest.raises(CubeError, match="no map 'mass'; known: column, peak_depth"):
        map_header(spec, "mass")
