"""LTE coefficients against textbook relations and published column-density formulas.

Constants and the Planck function come from astropy here, not from cubeforge.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy import constants
from astropy import units as u
from astropy.modeling.physical_models import BlackBody

from cubeforge.excitation import LteExcitation
from cubeforge.molecules import ROTORS, build_rotor

H = constants.h.cgs.value
K = constants.k_B.cgs.value
C = constants.c.cgs.value
TEMPERATURES = np.array([0.5, 1.0, 2.725, 5.0, 10.0, 20.0, 50.0, 100.0, 300.0, 1000.0, 5000.0, 16384.0])


def excitation(name: str, line: str, background: float = 0.0) -> LteExcitation:
    molecule = build_rotor(name)
    return LteExcitation(molecule, molecule.transition(line), background)


def rayleigh_jeans(nu: float, temperature: float) -> float:
    """Planck function of astropy in Rayleigh-Jeans kelvins, c^2 B / 2 k nu^2."""
    flux = BlackBody(temperature=temperature * u.K)(nu * u.Hz).cgs.value
    return float(flux) * C**2 / (2.0 * K * nu**2)


@pytest.mark.parametrize(("name", "line"), [("CO", "1-0"), ("CS", "1-0"), ("HCO+", "4-3"), ("13CO", "9-8")])
def test_kirchhoffs_law(name: str, line: str) -> None:
    """j / kappa = B_nu(T) (Rybicki & Lightman 1979, eq. 1.37) to 1e-12 at all temperatures."""
    lte = excitation(name, line)
    kappa, emis = lte.coefficients(np.ones_like(TEMPERATURES), TEMPERATURES)
    expected = [rayleigh_jeans(lte.line.frequency, t) for t in TEMPERATURES]
    np.testing.assert_allclose(emis / kappa, expected, rtol=1e-12)


def test_kirchhoffs_law_above_a_background() -> None:
    lte = excitation("CO", "1-0", 2.725)
    kappa, emis = lte.coefficients(np.ones_like(TEMPERATURES), TEMPERATURES)
    nu = lte.line.frequency
    expected = np.array([rayleigh_jeans(nu, t) - rayleigh_jeans(nu, 2.725) for t in TEMPERATURES])
    np.testing.assert_allclose(emis / kappa, expected, rtol=1e-12, atol=1e-14)


@pytest.mark.parametrize(("name", "line"), [("CO", "1-0"), ("CO", "6-5"), ("N2H+", "1-0"), ("HCN", "3-2")])
def test_opacity_from_the_b_coefficients(name: str, line: str) -> None:
    """alpha = (h nu / 4 pi) (n_1 B_12 - n_2 B_21) phi(nu), A_21 = 2 h nu^3 / c^2 B_21, g_1 B_12 = g_2 B_21.

    Rybicki & Lightman 1979, eqs. 1.72a, 1.72b, 1.74; over velocity, phi(v) = phi(nu) nu / c.
    """
    lte = excitation(name, line)
    levels, transition = lte.molecule, lte.line
    nu = transition.frequency
    b21 = transition.einstein_a * C**2 / (2.0 * H * nu**3)
    b12 = b21 * transition.weight_upper / transition.weight_lower
    for temperature in (5.0, 10.0, 30.0, 150.0):
        boltzmann = levels.weight * np.exp(-levels.energy / (K * temperature))
        # The harmonic factor of vibrations, prod (1 - exp(-E/kT))^-d (Herzberg 1945).
        modes = levels.vibrations
        vibrating = np.prod((1.0 - np.exp(-modes[:, 0] / (K * temperature))) ** -modes[:, 1])
        share = boltzmann / boltzmann.sum() / vibrating
        net = share[transition.lower] * b12 - share[transition.upper] * b21
        expected = H * nu / (4.0 * math.pi) * net * C / nu
        assert lte.at(temperature)[0] == pytest.approx(expected, rel=3e-9)


@pytest.mark.parametrize("name", ROTORS)
@pytest.mark.parametrize("line", ["1-0", "3-2"])
def test_column_density_of_a_linear_molecule(name: str, line: str) -> None:
    """N_tot = 3h / (8 pi^3 S mu^2) (Q / g_u) exp(E_u/kT) / (exp(h nu/kT) - 1) int tau dv, S = J / (2J + 1).

    Mangum & Shirley 2015, PASP 127, 266, their eq. 31 and section 6.1 (from memory), with Q = kT/hB + 1/3,
    good to 0.5 % from 15 K up. A column of 1 cm^-2 must come back.
    """
    lte = excitation(name, line)
    nu, upper = lte.line.frequency, lte.line.upper
    strength = upper / (2.0 * upper + 1.0) * (ROTORS[name].dipole * 1e-18) ** 2
    rotation = ROTORS[name].b * 1e6
    energy = rotation * upper * (upper + 1) * H / K
    for temperature in (15.0, 40.0):
        q = K * temperature / (H * rotation) + 1.0 / 3.0
        per_tau = 3.0 * H / (8.0 * math.pi**3 * strength) * q / (2.0 * upper + 1.0)
        per_tau *= math.exp(energy / temperature) / math.expm1(H * nu / (K * temperature))
        assert per_tau * lte.at(temperature)[0] == pytest.approx(1.0, rel=5e-3)


@pytest.mark.parametrize("temperature", [10.0, 20.0, 40.0])
def test_column_density_of_c18o(temperature: float) -> None:
    """N(C18O) = 2.48e14 (T + 0.88) exp(5.27/T) / (exp(5.27/T) - 1) int tau dv, in cm^-2 and km/s.

    The worked example of Mangum & Shirley 2015, section 14.1 (from memory).
    """
    factor = 2.48e14 * (temperature + 0.88) / (1.0 - math.exp(-5.27 / temperature)) / 1e5
    assert factor * excitation("C18O", "1-0").at(temperature)[0] == pytest.approx(1.0, rel=0.01)


@pytest.mark.parametrize("temperature", [10.0, 20.0, 40.0])
def test_column_density_of_13co(temperature: float) -> None:
    """N(13CO) = 2.42e14 (T + 0.88) / (1 - exp(-5.29/T)) int tau dv, in cm^-2 and km/s.

    Bourke et al. 1997, ApJ 476, 781 (from memory), who took a dipole moment of 0.112 D where 0.11046 D is
    in use now: N goes with its inverse square.
    """
    factor = 2.42e14 * (temperature + 0.88) / (1.0 - math.exp(-5.29 / temperature)) / 1e5
    factor *= (0.112 / 0.11046) ** 2
    assert factor * excitation("13CO", "1-0").at(temperature)[0] == pytest.approx(1.0, rel=0.01)
