"""The reader of level data: quirks that are taken, and one clear error for each malformed line."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from cubeforge.errors import MoleculeError
from cubeforge.molecules import get_molecule, read_leveldata
from cubeforge.quantities import ATOMIC_MASS, C, H

TEXT = """!MOLECULE
Xy  ! made up
!MOLECULAR WEIGHT
30.0
!NUMBER OF ENERGY LEVELS
3
!LEVEL + ENERGIES(cm^-1) + WEIGHT + J
1   0.000   1.0  0
2   3.000   3.0  1
3   9.000   5.0  2
!NUMBER OF RADIATIVE TRANSITIONS
2
!TRANS + UP + LOW + EINSTEINA(s^-1) + FREQ(GHz) + E_u(K)
1   2   1   7.0e-08   89.937737   4.3
2   3   2   6.7e-07   179.875475  12.9
!NUMBER OF COLL PARTNERS
2
!COLLISIONS BETWEEN
2 Xy-pH2 from nowhere
!NUMBER OF COLL TRANS
3
!NUMBER OF COLL TEMPS
2
!COLL TEMPS
10.0  20.0
!TRANS + UP + LOW + COLLRATES(cm^3 s^-1)
1   2   1   3.0E-11  3.1E-11
2   3   1   2.0E-11  2.1E-11
3   3   2   5.0E-11  5.1E-11
!COLLISIONS BETWEEN
4 Xy-electrons
!NUMBER OF COLL TRANS
1
!NUMBER OF COLL TEMPS
3
!COLL TEMPS
10.0  100.0  1000.0
!TRANS + UP + LOW + COLLRATES(cm^3 s^-1)
1   2   1   1.0E-6  1.1E-6  1.2E-6
"""
"""A made-up rotor of B = 1.5 cm^-1 in the layout of Schöier et al. 2005 (A&A 432, 369)."""


def write(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "xy.txt"
    path.write_bytes(text.encode("latin-1"))
    return path


def test_everything_is_read(tmp_path: Path) -> None:
    molecule = read_leveldata(write(tmp_path, TEXT))
    assert molecule.name == "Xy"
    assert molecule.mass == pytest.approx(30.0 * ATOMIC_MASS)
    np.testing.assert_allclose(molecule.energy, np.array([0.0, 3.0, 9.0]) * H * C, rtol=1e-15)
    np.testing.assert_array_equal(molecule.weight, [1.0, 3.0, 5.0])
    assert molecule.labels == ("0", "1", "2")
    np.testing.assert_array_equal(molecule.transitions.upper, [1, 2])
    np.testing.assert_array_equal(molecule.transitions.lower, [0, 1])
    np.testing.assert_allclose(molecule.transitions.frequency, [89.937737e9, 179.875475e9], rtol=1e-15)
    first, second = molecule.partners
    assert (first.name, second.name) == ("p-H2", "e")
    np.testing.assert_array_equal(first.temperatures, [10.0, 20.0])
    np.testing.assert_array_equal(second.temperatures, [10.0, 100.0, 1000.0])
    np.testing.assert_array_equal(first.upper, [1, 2, 2])
    np.testing.assert_array_equal(first.rates[2], [5.0e-11, 5.1e-11])
    np.testing.assert_array_equal(second.rates, [[1.0e-6, 1.1e-6, 1.2e-6]])


def test_habits_of_files_in_the_wild(tmp_path: Path) -> None:
    """Tabs, CRLF, blank and extra comment lines, remarks, D exponents, another encoding, notes."""
    wild = TEXT.replace("2   3.000   3.0  1", "2\t3.000\t3.0\t1 ! measured")
    wild = wild.replace("!MOLECULAR WEIGHT", "\n! by Schöier\n\n!MOLECULAR WEIGHT")
    wild = wild.replace("7.0e-08", "7.0D-08").replace("\n3\n!LEVEL", "\n3 levels\n!LEVEL")
    wild = wild.replace("10.0  20.0", "10.0  20.0  kelvins").replace("89.937737   4.3", "89.937737")
    wild = (wild + "\nNotes: 1 2 3\nnothing here counts 4 5\n").replace("\n", "\r\n")
    assert read_leveldata(write(tmp_path, wild)).digest == read_leveldata(write(tmp_path, TEXT)).digest


def test_levels_in_any_order(tmp_path: Path) -> None:
    rows = ["1   0.000   1.0  0", "2   3.000   3.0  1", "3   9.000   5.0  2"]
    shuffled = TEXT.replace("\n".join(rows), "\n".join([rows[2], rows[0], rows[1]]))
    assert read_leveldata(write(tmp_path, shuffled)).digest == read_leveldata(write(tmp_path, TEXT)).digest
    falling = TEXT.replace(rows[0], "1 9.000 5.0 2").replace(rows[2], "3 0.000 1.0 0")
    falling = falling.replace("1   2   1   7.0e-08", "1   2   3   7.0e-08")
    falling = falling.replace("2   3   2   6.7e-07", "2   1   2   6.7e-07")
    falling = falling.split("!NUMBER OF COLL PARTNERS")[0] + "!NUMBER OF COLL PARTNERS\n0\n"
    molecule = read_leveldata(write(tmp_path, falling))
    original = read_leveldata(write(tmp_path, TEXT))
    assert molecule.partition_function(20.0) == pytest.approx(
        float(original.partition_function(20.0)), rel=1e-14
    )
    assert molecule.transition("1-0").weight_upper == 3.0


def test_labels_may_be_missing_or_several_words(tmp_path: Path) -> None:
    text = TEXT.replace("3.0  1\n", "3.0\n").replace("5.0  2\n", "5.0  2 1 +\n")
    molecule = read_leveldata(write(tmp_path, text))
    assert molecule.labels == ("0", "2", "2 1 +")
    assert molecule.transition("2 1 +-2").upper == 2


def test_by_path_from_a_base_folder(tmp_path: Path) -> None:
    write(tmp_path, TEXT)
    assert get_molecule("xy.txt", tmp_path).name == "Xy"
    assert get_molecule(tmp_path / "xy.txt", "/nowhere").name == "Xy"


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("30.0\n", "heavy\n", r'line 4: wanted the molecular weight.*found "heavy"'),
        ("30.0\n", "-30.0\n", "line 4: .*not a positive number"),
        ("\n3\n!LEVEL", "\nthree\n!LEVEL", r'line 6: wanted the number of energy levels, found "three"'),
        ("\n3\n!LEVEL", "\n0\n!LEVEL", "line 6: wanted the number of energy levels"),
        ("\n3\n!LEVEL", "\n4\n!LEVEL", r'line 12: wanted level 4 of 4.*found "2"'),
        (
            "\n3\n!LEVEL",
            "\n2\n!LEVEL",
            "line 10: wanted the number of radiative.*more levels than",
        ),
        ("2   3.000   3.0  1", "2   3.O00   3.0  1", 'line 9: wanted level 2 of 3.*"3.O00" is not a number'),
        ("2   3.000   3.0  1", "2   3.000   0.0  1", "line 9: .*not a positive number"),
        ("2   3.000   3.0  1", "1   3.000   3.0  1", "line 9: .*level 1 is listed twice"),
        ("2   3.000   3.0  1", "7   3.000   3.0  1", 'line 9: .*"7" is not a number from 1 to 3'),
        ("2   3.000   3.0  1", "2   nan   3.0  1", "line 9: .*not a number from 0 up"),
        (
            "1   2   1   7.0e-08   89.937737   4.3",
            "1   2   1   7.0e-08",
            "line 14: wanted radiative transition 1",
        ),
        ("1   2   1   7.0e-08", "1   4   1   7.0e-08", 'line 14: .*"4" is not a number from 1 to 3'),
        ("1   2   1   7.0e-08", "1   2   2   7.0e-08", "line 14: .*are the same"),
        ("1   2   1   7.0e-08", "1   2   1   x", 'line 14: .*"x" is not a number'),
        ("89.937737", "0.0", "line 14: .*not a positive number"),
        ("\n2\n!TRANS", "\n1\n!TRANS", "line 15: wanted the number of collision partners.*more radiative"),
        ("\n2\n!COLLISIONS", "\n3\n!COLLISIONS", "the file ends where a collision partner"),
        ("2 Xy-pH2", "8 Xy-pH2", "line 19: wanted a collision partner: 1 for H2, 2 for p-H2"),
        ("2 Xy-pH2", "Xy-pH2", "line 19: wanted a collision partner"),
        ("\n3\n!NUMBER OF COLL TEMPS", "\nmany\n!NUMBER OF COLL TEMPS", "line 21: .*collisions with p-H2"),
        ("10.0  20.0", "10.0", "line 25: wanted 2 temperatures.*1 of them"),
        ("10.0  20.0", "10.0  20.0  30.0", "line 25: wanted 2 temperatures.*3 of them"),
        ("10.0  20.0", "20.0  10.0", "line 25: .*do not ascend"),
        ("2.0E-11  2.1E-11", "2.0E-11", "line 28: wanted collision 2 of 3.*4 columns instead of 5"),
        ("2.0E-11  2.1E-11", "2.0E-11  2.1E-11 9", "line 28: .*6 columns instead of 5"),
        ("2.0E-11  2.1E-11", "2.0E-11  2.1-101", 'line 28: .*"2.1-101" is not a number'),
        ("2   3   1   2.0E-11", "2   1   3   2.0E-11", "line 28: .*does not lie above"),
        ("2   3   1   2.0E-11", "2   9   1   2.0E-11", "line 28: .*from 1 to 3"),
        ("179.875475", "180.2", r"1 of 2 transitions contradicts .*number 2, 2-1: 180\.2.*179\.8754"),
    ],
)
def test_each_malformed_line_is_named(tmp_path: Path, old: str, new: str, message: str) -> None:
    assert TEXT.count(old) == 1
    with pytest.raises(MoleculeError, match=message) as caught:
        read_leveldata(write(tmp_path, TEXT.replace(old, new)))
    assert "xy.txt" in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_file_cut_off_anywhere_is_refused(tmp_path: Path) -> None:
    lines = TEXT.splitlines()
    for end in range(len(lines)):
        with pytest.raises(MoleculeError):
            read_leveldata(write(tmp_path, "\n".join(lines[:end])))


def test_rounded_energies_are_no_contradiction(tmp_path: Path) -> None:
    """Close levels written to few digits: 0.02 cm^-1 is 0.6 GHz, their last digit 0.3 GHz."""
    text = TEXT.replace("2   3.000", "2   0.02").replace("3.0  1\n", "1.0  1\n").replace("89.937737", "0.72")
    text = text.replace("179.875475", "269.2")
    assert read_leveldata(write(tmp_path, text)).transition(1).frequency == pytest.approx(0.72e9)
    with pytest.raises(MoleculeError, match="contradicts"):
        read_leveldata(write(tmp_path, text.replace("0.72", "0.95")))


def test_an_unreadable_file(tmp_path: Path) -> None:
    with pytest.raises(MoleculeError, match="cannot read"):
        read_leveldata(tmp_path)
