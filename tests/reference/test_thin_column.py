"""A thin line of 13CO turned back into the column density that was put in, with the formulas of the handbook.

Mangum & Shirley 2015, PASP 127, 266, eq. 80 (thin), with S = J / (2J + 1) and Q = kT / hB + 1/3 (their eqs. 62, 52);
mu = 0.11046 D and B = 55101.011 MHz of 13CO; all from memory.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from support.grids import grid_snapshot
from support.jobs import make_job
from support.physics import BOLTZMANN, KM_S, PARSEC, PLANCK, equivalent_temperature, h2_density
from support.rendering import render_image

DIPOLE, CONSTANT = 0.11046e-18, 55101.011e6
RHO, DEPTH_PC, ABUNDANCE = 2e-20, 0.4, 1e-10


def column_from(integral: float, kelvin: float, background: float, upper: int, frequency: float) -> float:
    """Column density (cm-2) of the molecule from the line's integral (K cm/s)."""
    strength = upper / (2.0 * upper + 1.0)
    partition = BOLTZMANN * kelvin / (PLANCK * CONSTANT) + 1.0 / 3.0
    energy = PLANCK * CONSTANT * upper * (upper + 1)
    levels = partition / (2.0 * upper + 1.0) * math.exp(energy / (BOLTZMANN * kelvin))
    levels /= math.expm1(PLANCK * frequency / (BOLTZMANN * kelvin))
    contrast = equivalent_temperature(frequency, kelvin) - equivalent_temperature(frequency, background)
    return 3.0 * PLANCK / (8.0 * math.pi**3 * strength * DIPOLE**2) * levels * integral / float(contrast)


@pytest.mark.parametrize(("line", "upper", "frequency"), [("1-0", 1, 110.201354e9), ("2-1", 2, 220.398684e9)])
@pytest.mark.parametrize("kelvin", [10.0, 30.0])
@pytest.mark.parametrize("sampling", ["mean", "centre"])
def test_thin_column_of_13co(line: str, upper: int, frequency: float, kelvin: float, sampling: str):
    job = make_job(
        gas={"temperature": f"{kelvin} K"},
        line={"molecule": "13CO", "transition": line, "abundance": ABUNDANCE},
        view={"toward": [0.3, 0.2, 1.0], "pixel": "0.01 pc", "size": [2, 2]},
        channels={"first": "-3 km/s", "last": "3 km/s", "width": "0.1 km/s", "sampling": sampling},
    )
    cell = (2.0, 2.0, DEPTH_PC / 30)
    image, _, _ = render_image(job, grid_snapshot({"density": np.full((1, 1, 30), RHO)}, cell))
    integral = image.astype(float).sum(axis=0) * 0.1 * KM_S
    slant = math.sqrt(1.0 + 0.3**2 + 0.2**2)
    put_in = ABUNDANCE * float(h2_density(RHO)) * slant * DEPTH_PC * PARSEC
    for value in integral.ravel():
        assert column_from(value, kelvin, 2.725, upper, frequency) == pytest.approx(put_in, rel=0.01)
