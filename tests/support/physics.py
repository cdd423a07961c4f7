"""Handbook physics for expected values, in cgs and float64, sharing nothing with the package.

Constants: exact SI values; the atomic mass unit of CODATA 2022; the parsec of IAU 2015 resolution B2; the mass of
hydrogen from AME2016 (Wang et al. 2017).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np

PLANCK = 6.62607015e-27
BOLTZMANN = 1.380649e-16
LIGHT = 2.99792458e10
DALTON = 1.66053906892e-24
HYDROGEN = 1.00782503223 * DALTON
PARSEC = 1.495978707e13 * 648000.0 / math.pi
KM_S = 1e5


def equivalent_temperature(nu, kelvin):
    """J(T) = (h nu / k) / (exp(h nu / kT) - 1): the Planck function in Rayleigh-Jeans kelvins."""
    x = PLANCK * nu / BOLTZMANN
    return x / np.expm1(x / np.asarray(kelvin, dtype=np.float64))


def h2_density(rho, hydrogen_fraction=0.71):
    """Number density of H2, all hydrogen being molecular: each molecule holds two atoms."""
    return hydrogen_fraction * np.asarray(rho, dtype=np.float64) / (2.0 * HYDROGEN)


@dataclass(frozen=True)
class Rotor:
    """A rigid linear molecule with centrifugal distortion: B and D in MHz, dipole in debye, mass in daltons."""

    name: str
    mass: float
    b: float
    d: float
    dipole: float
    top: int = 40

    def hertz(self, j):
        """Energy of level J over h."""
        x = np.asarray(j, dtype=np.float64)
        x = x * (x + 1.0)
        return 1e6 * (self.b * x - self.d * x * x)

    def frequency(self, upper):
        """Frequency of J = upper to upper - 1, Hz."""
        return float(self.hertz(upper) - self.hertz(upper - 1))

    def einstein_a(self, upper):
        """64 pi^4 nu^3 mu^2 / (3 h c^3) times J / (2J + 1) (Townes & Schawlow 1955, eqs. 1-76 and 1-77)."""
        strength = (1e-18 * self.dipole) ** 2 * upper / (2.0 * upper + 1.0)
        return 64.0 * math.pi**4 * self.frequency(upper) ** 3 * strength / (3.0 * PLANCK * LIGHT**3)

    def partition(self, kelvin):
        """Sum over the levels up to `top`."""
        kelvin = np.asarray(kelvin, dtype=np.float64)
        total = np.zeros_like(kelvin)
        for j in range(self.top + 1):
            total += (2 * j + 1) * np.exp(-PLANCK * self.hertz(j) / (BOLTZMANN * kelvin))
        return total

    def opacity(self, n_molecule, kelvin, upper=1):
        """LTE opacity integrated over velocity, 1/s.

        From Einstein's relations with stimulated emission (Rybicki & Lightman 1979, eq. 1.78), written with the
        upper level's population: c^3 A n_u (exp(h nu / kT) - 1) / (8 pi nu^3).
        """
        nu = self.frequency(upper)
        kelvin = np.asarray(kelvin, dtype=np.float64)
        boltzmann = np.exp(-PLANCK * self.hertz(upper) / (BOLTZMANN * kelvin))
        n_upper = np.asarray(n_molecule) * (2 * upper + 1) * boltzmann / self.partition(kelvin)
        stimulated = np.expm1(PLANCK * nu / (BOLTZMANN * kelvin))
        return LIGHT**3 * self.einstein_a(upper) * n_upper * stimulated / (8.0 * math.pi * nu**3)

    def width(self, kelvin, turbulent_b=0.0):
        """b of a thermal and turbulent Gaussian: b^2 = 2kT/m + b_turb^2, cm/s."""
        return np.sqrt(2.0 * BOLTZMANN * np.asarray(kelvin) / (self.mass * DALTON) + turbulent_b**2)

    def write(self, path: Path) -> str:
        """Write these levels and lines in the layout of Schöier et al. 2005 (A&A 432, 369); returns the path."""
        rows = ["!MOLECULE", self.name, "!WEIGHT", f"{self.mass!r}", "!LEVELS", f"{self.top + 1}", "!"]
        for j in range(self.top + 1):
            rows.append(f"{j + 1} {float(self.hertz(j)) / LIGHT:.14e} {2 * j + 1}.0 {j}")
        rows += ["!LINES", f"{self.top}", "!"]
        for j in range(1, self.top + 1):
            kelvin = PLANCK * float(self.hertz(j)) / BOLTZMANN
            rows.append(
                f"{j} {j + 1} {j} {self.einstein_a(j):.14e} {self.frequency(j) / 1e9:.14e} {kelvin:.6f}"
            )
        path.write_text("\n".join([*rows, "!PARTNERS", "0", ""]))
        return str(path)


CO = Rotor("CO", 27.994915, 57635.96828, 0.18350, 0.110)
"""B, D: Winnewisser et al. 1997 (J. Mol. Spectrosc. 184, 468), rounded; dipole: Goorvitch 1994 (ApJS 95, 535),
rounded; all from memory. Tests hand these numbers to the package as a data file."""
