"""Linear rotors from their constants, so that LTE works with no data file.

Hyperfine structure (HCN, N2H+, and the nuclear spin of 13C) is not resolved: the weights are 2J + 1 without
nuclear spin, and each J has one line.

The rotational constants were fitted, or taken and checked, against catalogued line frequencies (Müller et al.
2005, J. Mol. Struct. 742, 215; Pickett et al. 1998, JQSRT 60, 883). What each `source` calls "from memory"
was written down without the publication at hand and checked through the frequencies and partition functions
derived from it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from cubeforge.errors import MoleculeError, nearest
from cubeforge.molecules.model import WAVENUMBER, Molecule, Transitions
from cubeforge.quantities import ATOMIC_MASS, K_B, C, H

DEBYE = 1e-18
"""One debye, esu cm."""
TOP_ENERGY = 6000.0
"""Levels reach at least this E/k, in K: they hold the partition function to 1e-4 up to 650 K."""


@dataclass(frozen=True)
class RotorConstants:
    """Constants of a linear molecule in its vibrational ground state.

    Attributes
    ----------
    name : str
    mass : float
        Atomic mass units.
    b, d, h : float
        Rotational and centrifugal distortion constants, MHz: E_J/h = b x - d x^2 + h x^3, x = J (J + 1).
    dipole : float
        Debye.
    stretch : float
        The dipole moment of J -> J - 1 is ``dipole * (1 + stretch * J^2)``: the molecule is stretched as it
        turns (Herman & Wallis 1955, J. Chem. Phys. 23, 637). 0 where it changes A by less than 1 % for the
        levels that matter.
    vibrations : tuple of (float, int)
        Wavenumber of the fundamental, cm^-1, and degeneracy.
    source : str
    """

    name: str
    mass: float
    b: float
    d: float
    h: float
    dipole: float
    stretch: float
    vibrations: tuple[tuple[float, int], ...]
    source: str


_CONSTANTS = (
    RotorConstants(
        name="CO",
        mass=27.994915,
        b=57635.968019,
        d=0.18350489,
        h=1.7168e-7,
        dipole=0.11011,
        stretch=-1.03e-4,
        vibrations=((2143.27, 1),),
        source=(
            "B, D, H: Varberg & Evenson 1992, ApJ 385, 763 (from memory). "
            "Dipole: Goorvitch 1994, ApJS 95, 535 (from memory). "
            "Stretch: fitted here to the Einstein A of the CO level data of Yang et al. 2010, ApJ 718, 1062. "
            "Vibration: Huber & Herzberg 1979 (from memory)."
        ),
    ),
    RotorConstants(
        name="13CO",
        mass=28.998270,
        b=55101.0125,
        d=0.16768593,
        h=1.4485e-7,
        dipole=0.11046,
        stretch=-0.99e-4,
        vibrations=((2096.07, 1),),
        source=(
            "B, D, H: fitted here to the catalogued 1-0 to 9-8, from memory (residuals < 6e-8). "
            "Dipole: Goorvitch 1994 (from memory). Stretch: CO's times B/B(CO). "
            "Vibration: CO's of Huber & Herzberg 1979 (from memory), scaled by the reduced mass."
        ),
    ),
    RotorConstants(
        name="C18O",
        mass=29.999161,
        b=54891.4201,
        d=0.16640320,
        h=1.483e-7,
        dipole=0.11079,
        stretch=-0.98e-4,
        vibrations=((2092.12, 1),),
        source=(
            "B, D: fitted here to the catalogued 1-0 to 9-8, from memory (residuals < 6e-8). "
            "H: CO's times (B/B(CO))^3. Dipole: Goorvitch 1994 (from memory). Stretch: CO's times B/B(CO). "
            "Vibration: CO's of Huber & Herzberg 1979 (from memory), scaled by the reduced mass."
        ),
    ),
    RotorConstants(
        name="CS",
        mass=43.972071,
        b=24495.5585,
        d=0.04006212,
        h=0.0,
        dipole=1.958,
        stretch=0.0,
        vibrations=((1272.16, 1),),
        source=(
            "B, D: fitted here to the catalogued 1-0 to 10-9, from memory (residuals < 6e-8). "
            "Dipole: Winnewisser & Cook 1968, J. Mol. Spectrosc. 28, 266 (from memory). "
            "Vibration: Huber & Herzberg 1979 (from memory)."
        ),
    ),
    RotorConstants(
        name="HCO+",
        mass=29.002191,
        b=44594.4278,
        d=0.08281935,
        h=0.0,
        dipole=3.90,
        stretch=0.0,
        vibrations=((3088.74, 1), (829.72, 2), (2183.95, 1)),
        source=(
            "B, D: fitted here to the catalogued 1-0 to 9-8, from memory (residuals < 6e-8). "
            "Dipole: Botschwina et al. 1993 (from memory). "
            "Vibrations: Davies & Rothwell 1984, Kawaguchi et al. 1985, Foster et al. 1984 (from memory)."
        ),
    ),
    RotorConstants(
        name="HCN",
        mass=27.010899,
        b=44315.9755,
        d=0.08721830,
        h=8.7e-8,
        dipole=2.985188,
        stretch=0.0,
        vibrations=((3311.48, 1), (711.98, 2), (2096.85, 1)),
        source=(
            "B, D: fitted here to the catalogued 1-0 to 9-8, from memory (residuals < 6e-8). "
            "H, vibrations: from memory. "
            "Dipole: Ebenstein & Muenter 1984, J. Chem. Phys. 80, 3989 (from memory)."
        ),
    ),
    RotorConstants(
        name="N2H+",
        mass=29.013424,
        b=46586.87546,
        d=0.0879676,
        h=0.0,
        dipole=3.40,
        stretch=0.0,
        vibrations=((3233.96, 1), (685.0, 2), (2257.86, 1)),
        source=(
            "B, D: Pagani, Daniel & Dubernet 2009, A&A 494, 719 (from memory). "
            "Dipole: Botschwina 1984, Chem. Phys. Lett. 107, 535 (from memory). "
            "Vibrations: Owrutsky et al. 1986, Sears 1985 (from memory)."
        ),
    ),
)

ROTORS: dict[str, RotorConstants] = {constants.name: constants for constants in _CONSTANTS}
"""The linear molecules that need no file, by name."""


def rotor_energy(constants: RotorConstants, j: np.ndarray | int) -> np.ndarray:
    """Energy of level `j` in erg, same shape as `j`."""
    x = np.asarray(j, dtype=np.float64)
    x = x * (x + 1.0)
    hertz = 1e6 * (constants.b * x - constants.d * x**2 + constants.h * x**3)
    return np.asarray(H * hertz)


def einstein_a(frequency: np.ndarray, j_upper: np.ndarray, dipole: np.ndarray) -> np.ndarray:
    """Einstein A of J -> J - 1 of a linear rotor, 1/s.

    A = 64 pi^4 nu^3 mu^2 / (3 h c^3) * J / (2 J + 1) (Mangum & Shirley 2015, PASP 127, 266, their eqs. 11
    and 62, from memory), `frequency` in Hz and `dipole` in esu cm; all of the same shape.
    """
    line_strength = j_upper / (2.0 * j_upper + 1.0)
    return np.asarray(64.0 * math.pi**4 * frequency**3 * dipole**2 / (3.0 * H * C**3) * line_strength)


def build_rotor(name: str, top_energy: float = TOP_ENERGY) -> Molecule:
    """Build a linear molecule from its constants.

    Parameters
    ----------
    name : str
        One of `ROTORS`.
    top_energy : float
        Levels are built up to the first whose E/k exceeds it, in K.

    Raises
    ------
    MoleculeError
        An unknown name.
    """
    if name not in ROTORS:
        raise MoleculeError(f'no built-in molecule "{name}"; {nearest(name, ROTORS)}')
    constants = ROTORS[name]
    j_top = 1
    while rotor_energy(constants, j_top) < K_B * top_energy:
        j_top += 1
    j = np.arange(j_top + 1)
    upper = j[1:]
    energy = rotor_energy(constants, j)
    frequency = np.diff(energy) / H
    dipole = DEBYE * constants.dipole * (1.0 + constants.stretch * upper.astype(np.float64) ** 2)
    return Molecule(
        name=name,
        mass=constants.mass * ATOMIC_MASS,
        energy=energy,
        weight=(2 * j + 1).astype(np.float64),
        labels=tuple(str(number) for number in j),
        transitions=Transitions(upper, upper - 1, einstein_a(frequency, upper, dipole), frequency),
        vibrations=np.array([(WAVENUMBER * wavenumber, count) for wavenumber, count in constants.vibrations]),
        source=constants.source,
    )
