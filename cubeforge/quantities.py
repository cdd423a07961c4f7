"""Units in and out, and the physical constants, all in cgs.

The only place (with the job file) that knows units: everything below works in plain floats, centimetres,
grams, seconds, kelvins.
"""

from __future__ import annotations

import math
from typing import Any

from astropy import constants as _c
from astropy import units as u

from cubeforge.errors import JobError

H = float(_c.h.cgs.value)
"""Planck constant, erg s."""
K_B = float(_c.k_B.cgs.value)
"""Boltzmann constant, erg / K."""
C = float(_c.c.cgs.value)
"""Speed of light, cm / s."""
M_H = float((1.00782503223 * _c.u).cgs.value)
"""Mass of a hydrogen atom, g (1.00782503223 u: AME2016, Wang et al. 2017)."""
ATOMIC_MASS = float(_c.u.cgs.value)
"""Unified atomic mass unit, g."""
JANSKY = 1e-23
"""One jansky in erg / (s cm2 Hz)."""
KM_S = 1e5
"""One km/s in cm/s."""

KINDS: dict[str, u.UnitBase] = {
    "length": u.cm,
    "velocity": u.cm / u.s,
    "density": u.g / u.cm**3,
    "number density": u.cm**-3,
    "temperature": u.K,
    "pressure": u.dyn / u.cm**2,
    "momentum density": u.g / u.cm**2 / u.s,
    "energy density": u.erg / u.cm**3,
    "time": u.s,
    "angle": u.rad,
    "frequency": u.Hz,
    "memory": u.byte,
    "dimensionless": u.dimensionless_unscaled,
}
"""Kind of quantity -> the internal unit."""

EXAMPLES = {
    "length": '"0.1 pc"',
    "velocity": '"0.2 km/s"',
    "density": '"1e-20 g/cm3"',
    "number density": '"1e3 cm-3"',
    "temperature": '"15 K"',
    "pressure": '"1e-11 dyn/cm2"',
    "momentum density": '"1e-15 g/(cm2 s)"',
    "energy density": '"1e-11 erg/cm3"',
    "time": '"2 h"',
    "angle": '"30 arcsec"',
    "frequency": '"115.27 GHz"',
    "memory": '"2 GiB"',
    "dimensionless": "0.7",
}


def convert(value: Any, kind: str) -> float:
    """Turn ``"0.1 km/s"`` into a float in the internal unit of `kind`.

    Parameters
    ----------
    value : str, int, float or astropy.units.Quantity
        A number with a unit; a bare number only where the kind is dimensionless.
    kind : str
        One of `KINDS`.

    Raises
    ------
    ValueError
        Not a number, no unit, an unknown unit, a unit of another kind, or not finite; the message says what
        was found and what would do.
    """
    name = "plain number" if kind == "dimensionless" else kind
    wanted = f"a {name} is wanted, such as {EXAMPLES[kind]}"
    try:
        if isinstance(value, bool):
            raise TypeError
        quantity = u.Quantity(value)
    except (TypeError, ValueError):
        raise ValueError(f"{value!r} is not a number with a unit; {wanted}") from None
    if quantity.ndim:
        raise ValueError(f"{value!r} is a list where {wanted}")
    if quantity.unit == u.dimensionless_unscaled and kind != "dimensionless":
        raise ValueError(f"{value!r} has no unit; {wanted}")
    try:
        result = float(quantity.to_value(KINDS[kind]))
    except u.UnitConversionError:
        raise ValueError(f"{value!r} is in {quantity.unit} where {wanted}") from None
    if not math.isfinite(result):
        raise ValueError(f"{value!r} is not finite; {wanted}")
    return result


def parse(value: Any, kind: str, *, where: str) -> float:
    """`convert` for a value that a user wrote at `where`.

    Raises
    ------
    JobError
        As `convert`, naming the place.
    """
    try:
        return convert(value, kind)
    except ValueError as error:
        raise JobError(f"{where}: {error}") from None


def show_bytes(count: float) -> str:
    """Write a number of bytes with a binary prefix: ``show_bytes(2**31) == "2.0 GiB"``."""
    size = float(count)
    for prefix in ("B", "KiB", "MiB", "GiB", "TiB"):
        if abs(size) < 1024 or prefix == "TiB":
            break
        size /= 1024
    return f"{size:.0f} {prefix}" if prefix == "B" else f"{size:.1f} {prefix}"


def planck(nu: float, temperature: float) -> float:
    """Planck function B_nu(T) in erg / (s cm2 sr Hz) (Rybicki & Lightman 1979, eq. 1.51); 0 at T = 0."""
    if temperature <= 0.0:
        return 0.0
    return 2.0 * H * nu**3 / C**2 / math.expm1(H * nu / (K_B * temperature))


def rayleigh_jeans_factor(nu: float) -> float:
    """c^2 / (2 k nu^2): multiply an intensity in cgs by it to get kelvins (Rybicki & Lightman 1979, 1.60)."""
    return C**2 / (2.0 * K_B * nu**2)
