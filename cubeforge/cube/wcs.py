"""Where a pixel is on the sky and in velocity, as FITS keywords and as an astropy WCS.

The image is made with parallel rays: pixels are equally spaced in distance, in a plane through the centre of
the cloud across the line of sight. A point of that plane, d from its centre and at the distance D from the
observer, is seen at the angle arctan(d/D). The gnomonic projection (TAN; Calabretta & Greisen 2002, section
5.1.3) is the one that is linear in the tangent of that angle, so it describes such an image exactly; others
agree with it to third order in the angle.
"""

from __future__ import annotations

from typing import Any

from astropy.io import fits
from astropy.wcs import WCS

from cubeforge._version import VERSION
from cubeforge.cube.spec import RADIAN, CubeSpec
from cubeforge.errors import CubeError

Card = tuple[str, Any, str]


def celestial_spectral_wcs(spec: CubeSpec) -> Any:
    """WCS of the cube: ``astropy.wcs.WCS`` with the axes RA, Dec (degrees), radio velocity (m/s).

    Not safe to share between threads: make or copy one for each.
    """
    return WCS(fits.Header([*_frame(3), *_sky(spec), *_spectral(spec)]))


def celestial_wcs(spec: CubeSpec) -> Any:
    """WCS of a map: ``astropy.wcs.WCS`` with the axes RA and Dec in degrees."""
    return WCS(fits.Header([*_frame(2), *_sky(spec)]))


def header(spec: CubeSpec) -> Any:
    """Header of the cube without the structure and the checksums: WCS, unit, line, provenance.

    Only keywords of the FITS Standard 4.0 and names of our own where it has none. No date: exporting the
    same cube twice gives the same bytes.
    """
    cards = [
        *_frame(3),
        *_sky(spec),
        *_spectral(spec),
        ("BUNIT", spec.unit, "brightness" + ("" if spec.absolute else " above the background")),
    ]
    return _with_provenance(cards, spec)


def map_header(spec: CubeSpec, name: str) -> Any:
    """Header of the map `name`; CubeError when the cube has no such map."""
    units = dict(spec.maps)
    if name not in units:
        raise CubeError(f"cube: it has no map {name!r}; known: {', '.join(units) or 'none'}")
    cards = [
        *_frame(2),
        *_sky(spec),
        ("RESTFRQ", spec.rest_frequency, "[Hz] rest frequency of the line"),
        ("BUNIT", units[name], ""),
        ("MAPNAME", name, "what the pixels hold"),
    ]
    return _with_provenance(cards, spec)


def _frame(axes: int) -> list[Card]:
    return [("WCSAXES", axes, "number of WCS axes")]


def _sky(spec: CubeSpec) -> list[Card]:
    _, ny, nx = spec.shape
    step = spec.pixel_rad * RADIAN
    return [
        ("CTYPE1", "RA---TAN", "right ascension, gnomonic"),
        ("CUNIT1", "deg", ""),
        ("CRPIX1", 0.5 * (nx + 1), "centre of the image"),
        ("CRVAL1", float(spec.centre_lon), "[deg]"),
        ("CDELT1", -step, "[deg] x increases to the west"),
        ("CTYPE2", "DEC--TAN", "declination, gnomonic"),
        ("CUNIT2", "deg", ""),
        ("CRPIX2", 0.5 * (ny + 1), "centre of the image"),
        ("CRVAL2", float(spec.centre_lat), "[deg]"),
        ("CDELT2", step, "[deg] y increases to the north"),
        # The default, 180 degrees, turns to 0 for an image centred on the celestial pole.
        ("LONPOLE", 180.0, "[deg] north is up"),
        ("RADESYS", "ICRS", ""),
    ]


def _spectral(spec: CubeSpec) -> list[Card]:
    return [
        ("CTYPE3", "VRAD", "radio velocity"),
        ("CUNIT3", "m/s", ""),
        ("CRPIX3", 1.0, "first channel"),
        ("CRVAL3", spec.velocity_start / 100.0, "[m/s] centre of the first channel"),
        ("CDELT3", spec.velocity_width / 100.0, "[m/s] width of a channel"),
        ("RESTFRQ", spec.rest_frequency, "[Hz] rest frequency of the line"),
        ("SPECSYS", "LSRK", "frame of the velocities"),
    ]


def _with_provenance(cards: list[Card], spec: CubeSpec) -> Any:
    result = fits.Header(cards)
    texts = (
        ("MOLECULE", spec.molecule, "molecule"),
        ("LINE", spec.line, "transition"),
        ("TBACKGND", spec.background_K, "[K] temperature of the background"),
        ("PLAN", spec.fingerprint, ""),
        ("CREATOR", f"cubeforge {VERSION}", "program"),
    )
    for name, value, comment in texts:
        if value != "":
            result.append((name, value, comment))
    for line in spec.history:
        # FITS holds printable ASCII: other characters are written as escapes, such as \xe9.
        for part in line.splitlines() or [""]:
            plain = part.expandtabs().encode("ascii", "backslashreplace").decode()
            result.add_history("".join(c if c.isprintable() else ascii(c)[1:-1] for c in plain))
    return result
