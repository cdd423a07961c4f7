"""Levels, lines and partition functions against the catalogues that the package astroquery carries.

Open data inside astroquery (Ginsburg et al. 2019, AJ 157, 98), read from its folder, nothing fetched:

* the CO level data (Yang et al. 2010, ApJ 718, 1062) in the layout of Schöier et al. 2005, A&A 432, 369,
* line lists and partition functions of two catalogues: Müller et al. 2005, J. Mol. Struct. 742, 215, and
  Pickett et al. 1998, JQSRT 60, 883.
"""

from __future__ import annotations

import importlib
import importlib.util
import math
from pathlib import Path

import numpy as np
import pytest
from astropy import constants

from cubeforge.molecules import ROTORS, build_rotor, read_leveldata
from cubeforge.quantities import ATOMIC_MASS, C, H

_SPEC = importlib.util.find_spec("astroquery")
assert _SPEC is not None
assert _SPEC.origin is not None
ASTROQUERY = Path(_SPEC.origin).parent
CO_FILE = ASTROQUERY / "lamda" / "tests" / "data" / "co.txt"
MUELLER = ASTROQUERY / "linelists" / "cdms"
PICKETT = ASTROQUERY / "jplspec"

MUELLER_TAGS = {
    "CO": 28503, "13CO": 29501, "C18O": 30502, "CS": 44501, "HCO+": 29507, "HCN": 27501, "N2H+": 29506,
}  # fmt: skip
PICKETT_TAGS = {"CO": 28001, "13CO": 29001, "C18O": 30001, "CS": 44001, "HCO+": 29002, "HCN": 27001}
SPIN = {"13CO": 2, "HCN": 3, "N2H+": 9}
"""Nuclear spin weights that Müller et al. count in Q and 2J + 1 does not: 2I + 1 of 13C (I = 1/2) and of each
14N (I = 1), common practice. Pickett et al. count them for HCN only."""

# Line frequencies of Müller et al. 2005 in MHz, from 1-0 up. From memory; those to 4-3 (CO's isotopologues to
# 3-2 and 6-5, CS to 6-5) were compared with copies in public repositories.
FREQUENCIES = {
    "13CO": [110201.3543, 220398.6842, 330587.9653, 440765.1735, 550926.2851, 661067.2766, 771184.125],
    "C18O": [109782.1734, 219560.3541, 329330.5525, 439088.7658, 548831.0055, 658553.2782, 768251.59],
    "CS": [48990.9549, 97980.9533, 146969.0287, 195954.2109, 244935.5565, 293912.0865, 342882.8503],
    "HCO+": [89188.5247, 178375.0563, 267557.6259, 356734.2230, 445902.8721, 535061.5810, 624208.3606],
    "HCN": [88631.6022, 177261.1112, 265886.4339, 354505.4773, 443116.1493, 531716.3479, 620304.0021],
    "N2H+": [93173.3977, 186344.6844, 279511.7491, 372672.4808, 465824.7770],
}  # fmt: skip

# Einstein A in 1/s of 1-0 (CS: 2-1), from the same catalogue by memory.
EINSTEIN_A = {
    "13CO": 6.33e-8, "C18O": 6.29e-8, "CS": 1.68e-5, "HCO+": 4.19e-5, "HCN": 2.41e-5, "N2H+": 3.63e-5,
}  # fmt: skip


def catalogue_lines(path: Path) -> np.ndarray:
    """Frequency (MHz), column 3 and lower energy (cm^-1) of each line of a catalogue's list of CO."""
    rows = []
    for line in path.read_text().splitlines():
        words = line.split()
        if len(words) > 6 and words[0].replace(".", "").isdigit():
            rows.append([float(words[0]), float(words[2]), float(words[4])])
    assert len(rows) >= 6
    return np.array(rows)


def mueller_partition(tag: int) -> dict[float, float]:
    """T -> lg Q from the pipe-separated table of Müller et al."""
    rows = [line.split("|")[1:-1] for line in (MUELLER / "data" / "partfunc.cat").read_text().splitlines()]
    temperatures = [float(name.split("(")[2].rstrip(") ")) for name in rows[0][3:]]
    values = next(row for row in rows[1:] if int(row[0]) == tag)[3:]
    return {t: float(value) for t, value in zip(temperatures, values, strict=True) if value.strip() != "nan"}


def pickett_partition(tag: int) -> dict[float, float]:
    """T -> lg Q from the fixed columns of Pickett et al."""
    temperatures = [300.0, 225.0, 150.0, 75.0, 37.5, 18.75, 9.375]
    rows = (line for line in (PICKETT / "data" / "catdir.cat").read_text().splitlines())
    row = next(line for line in rows if int(line[:6]) == tag)
    return dict(zip(temperatures, [float(row[26 + 7 * i : 33 + 7 * i]) for i in range(7)], strict=True))


def test_the_co_file_against_astroquerys_own_reader() -> None:
    lamda = importlib.import_module("astroquery.lamda.core")
    collisions, radiative, levels = lamda.parse_lamda_datafile(str(CO_FILE))
    molecule = read_leveldata(CO_FILE)
    assert molecule.mass == 28.0 * ATOMIC_MASS
    assert molecule.levels == 41
    np.testing.assert_array_equal(molecule.energy, np.array(levels["Energy"]) * (H * C))
    np.testing.assert_array_equal(molecule.weight, levels["Weight"])
    assert molecule.labels == tuple(levels["J"])
    lines = molecule.transitions
    np.testing.assert_array_equal(lines.upper + 1, radiative["Upper"])
    np.testing.assert_array_equal(lines.lower + 1, radiative["Lower"])
    np.testing.assert_array_equal(lines.einstein_a, radiative["EinsteinA"])
    np.testing.assert_array_equal(lines.frequency, np.array(radiative["Frequency"]) * 1e9)
    assert [partner.name for partner in molecule.partners] == ["p-H2", "o-H2"]
    for partner, key in zip(molecule.partners, ("PH2", "OH2"), strict=True):
        table = collisions[key]
        np.testing.assert_array_equal(partner.temperatures, table.meta["temperatures"])
        np.testing.assert_array_equal(partner.upper + 1, table["Upper"])
        np.testing.assert_array_equal(partner.lower + 1, table["Lower"])
        rates = np.array([list(row)[3:] for row in table])
        assert rates.shape == (40, 25)
        np.testing.assert_array_equal(partner.rates, rates)


def test_co_against_the_level_data() -> None:
    """Frequencies to 1e-6 (here 2e-8), Einstein A to 1 % (4 printed digits), up to 40-39 at E/k = 4500 K."""
    rotor, data = build_rotor("CO"), read_leveldata(CO_FILE)
    n = len(data.transitions)
    np.testing.assert_allclose(rotor.transitions.frequency[:n], data.transitions.frequency, rtol=2e-8)
    np.testing.assert_allclose(rotor.transitions.einstein_a[:n], data.transitions.einstein_a, rtol=0.01)
    # The file's energies and frequencies differ by 3e-6 between themselves.
    np.testing.assert_allclose(rotor.energy[1 : n + 1], data.energy[1:], rtol=4e-6)
    np.testing.assert_array_equal(rotor.weight[: n + 1], data.weight)


@pytest.mark.parametrize(
    "path",
    [MUELLER / "tests" / "data" / "028503 CO, v=0.data", PICKETT / "tests" / "data" / "CO.data"],
    ids=["Müller et al.", "Pickett et al."],
)
def test_co_frequencies_against_the_line_lists(path: Path) -> None:
    lines = catalogue_lines(path)
    rotor = build_rotor("CO")
    np.testing.assert_allclose(rotor.transitions.frequency[: len(lines)], lines[:, 0] * 1e6, rtol=1e-8)
    np.testing.assert_allclose(rotor.energy[: len(lines)] / (H * C), lines[:, 2], atol=1e-4)


def test_co_einstein_a_against_the_line_list_of_mueller() -> None:
    """That list was written with lg A in the third column: 10^-7.1425 = 7.20e-8 is A of CO 1-0."""
    lines = catalogue_lines(MUELLER / "tests" / "data" / "028503 CO, v=0.data")
    found = build_rotor("CO").transitions.einstein_a[: len(lines)]
    np.testing.assert_allclose(found, 10.0 ** lines[:, 1], rtol=0.01)


def test_co_einstein_a_from_the_intensities_of_pickett() -> None:
    """A = I(T) nu^2 Q / g_u / (exp(-E_l/kT) - exp(-E_u/kT)) 2.7964e-16 at T = 300 K.

    I in nm^2 MHz, nu in MHz (Pickett et al. 1998, their eq. 9, from memory); Q(300 K) from their table. Up to
    6-5: their intensities leave out the stretching of the molecule, 0.5 % in A there and J^2 more above.
    """
    lines = catalogue_lines(PICKETT / "tests" / "data" / "CO.data")[:6]
    q = 10.0 ** pickett_partition(28001)[300.0]
    rotor = build_rotor("CO")
    for row, (frequency, intensity, lower) in enumerate(lines):
        kt = 300.0 * constants.k_B.cgs.value
        low = lower * (constants.h.cgs.value * constants.c.cgs.value)
        up = low + frequency * 1e6 * constants.h.cgs.value
        a = 10.0**intensity * frequency**2 * q / (2 * row + 3) / (math.exp(-low / kt) - math.exp(-up / kt))
        assert rotor.transitions.einstein_a[row] == pytest.approx(a * 2.7964e-16, rel=0.01)


@pytest.mark.parametrize("name", FREQUENCIES)
def test_frequencies_of_the_other_rotors(name: str) -> None:
    expected = np.array(FREQUENCIES[name]) * 1e6
    np.testing.assert_allclose(build_rotor(name).transitions.frequency[: len(expected)], expected, rtol=1e-7)


@pytest.mark.parametrize("name", EINSTEIN_A)
def test_einstein_a_of_the_other_rotors(name: str) -> None:
    line = build_rotor(name).transition("2-1" if name == "CS" else "1-0")
    assert line.einstein_a == pytest.approx(EINSTEIN_A[name], rel=0.01)


@pytest.mark.parametrize("name", ROTORS)
def test_partition_functions_against_mueller(name: str) -> None:
    """1 % between 5 and 300 K, nuclear spin divided out; the tables count vibrations where they matter."""
    table = {t: lg for t, lg in mueller_partition(MUELLER_TAGS[name]).items() if 5.0 <= t <= 300.0}
    assert len(table) == 8
    found = build_rotor(name).partition_function(list(table))
    expected = 10.0 ** np.array(list(table.values())) / SPIN.get(name, 1)
    np.testing.assert_allclose(found, expected, rtol=0.01)


@pytest.mark.parametrize("name", PICKETT_TAGS)
def test_partition_functions_against_pickett(name: str) -> None:
    """1 % between 9 and 300 K; of HCN their table leaves out the bend (7 % at 300 K), so up to 150 K."""
    top = 150.0 if name == "HCN" else 300.0
    table = {t: lg for t, lg in pickett_partition(PICKETT_TAGS[name]).items() if t <= top}
    found = build_rotor(name).partition_function(list(table))
    expected = 10.0 ** np.array(list(table.values())) / (3 if name == "HCN" else 1)
    np.testing.assert_allclose(found, expected, rtol=0.01)


def test_the_level_data_sum_to_the_catalogued_partition_function() -> None:
    molecule = read_leveldata(CO_FILE)
    table = {t: lg for t, lg in mueller_partition(28503).items() if t <= 500.0}
    expected = 10.0 ** np.array(list(table.values()))
    np.testing.assert_allclose(molecule.partition_function(list(table)), expected, rtol=3e-4)
    assert molecule.levels_hold(500.0)


@pytest.mark.parametrize("name", ["CO", "CS", "HCO+"])
def test_high_temperature_limit(name: str) -> None:
    """Q -> kT/hB + 1/3, the next term being hB/15kT (McDowell 1988, J. Chem. Phys. 88, 356, from memory).

    Mangum & Shirley 2015, PASP 127, 266, section 6.1, use the first two. At 40 K vibrations add below 1e-10.
    """
    inverse = constants.k_B.value * 40.0 / (constants.h.value * ROTORS[name].b * 1e6)
    found = float(build_rotor(name).partition_function(40.0))
    assert found == pytest.approx(inverse + 1.0 / 3.0 + 1.0 / (15.0 * inverse), abs=5e-3)
    assert abs(found - inverse) > 0.3
