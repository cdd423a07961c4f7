"""LTE coefficients: against sums over levels in numpy, at the edges of the range, and in error."""

from __future__ import annotations

import math
import pickle
from dataclasses import replace

import numpy as np
import pytest

from cubeforge.excitation import Excitation, ExcitationError, LteExcitation
from cubeforge.molecules import Molecule, PartitionTable, Transitions, build_rotor
from cubeforge.quantities import K_B, C, H


def numpy_reference(
    molecule: Molecule, name: str, n_mol: np.ndarray, temperature: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Opacity and emission (K/s, no background taken off) from the populations of the two levels."""
    line = molecule.transition(name)
    q = molecule.partition_function(temperature)
    kt = K_B * temperature
    upper = n_mol * line.weight_upper * np.exp(-line.energy_upper / kt) / q
    lower = n_mol * line.weight_lower * np.exp(-line.energy_lower / kt) / q
    nu, a = line.frequency, line.einstein_a
    kappa = C**3 / (8 * math.pi * nu**3) * a * (lower * line.weight_upper / line.weight_lower - upper)
    emission = C**2 / (2 * K_B * nu**2) * H * C / (4 * math.pi) * upper * a
    return kappa, emission


def lte(name: str = "CO", line: str = "1-0", background: float = 2.725) -> LteExcitation:
    molecule = build_rotor(name)
    return LteExcitation(molecule, molecule.transition(line), background)


def rayleigh_jeans(line_frequency: float, temperature: float) -> float:
    x = H * line_frequency / K_B
    return x / math.expm1(x / temperature)


@pytest.mark.parametrize(
    ("name", "line"), [("CO", "1-0"), ("CO", "10-9"), ("13CO", "2-1"), ("HCN", "4-3"), ("CS", "7-6")]
)
def test_against_the_populations_of_the_levels(name: str, line: str) -> None:
    rng = np.random.default_rng(1)
    temperature = np.exp(rng.uniform(math.log(3.0), math.log(16384.0), 3001))
    n_mol = 10.0 ** rng.uniform(-8, 2, temperature.size)
    excitation = lte(name, line)
    kappa, emis = excitation.coefficients(n_mol, temperature)
    expected, emission = numpy_reference(excitation.molecule, line, n_mol, temperature)
    # At 1e4 K, hnu/kT = 5e-4 costs the reference's difference of populations four digits.
    np.testing.assert_allclose(kappa, expected, rtol=3e-9)
    background = expected * rayleigh_jeans(excitation.line.frequency, 2.725)
    np.testing.assert_array_less(np.abs(emis - (emission - background)), 3e-9 * (emission + background))
    assert (emis[temperature < 2.725] < 0).all()


def test_the_partition_function_is_tabulated_to_the_bound() -> None:
    """1e-9 in ln Q, also away from the points that the table was checked at."""
    temperature = np.exp(np.linspace(math.log(0.5), math.log(16384.0), 40007))
    temperature[[0, -1]] = 0.5, 16384.0
    for name in ("CO", "N2H+"):
        excitation = lte(name)
        kappa, _ = excitation.coefficients(np.ones_like(temperature), temperature)
        line, q = excitation.line, excitation.molecule.partition_function(temperature)
        full = C**3 / (8 * math.pi * line.frequency**3) * line.einstein_a * line.weight_upper
        expected = -full * np.expm1(-H * line.frequency / K_B / temperature) / q
        np.testing.assert_allclose(kappa, expected, rtol=1.1e-9)


def test_nothing_is_left_when_gas_and_background_are_equally_warm() -> None:
    for temperature in (2.725, 10.0, 1234.5):
        kappa, emis = lte(background=temperature).at(temperature)
        assert kappa > 0.0
        assert abs(emis) <= 1e-15 * kappa * temperature


def test_colder_gas_absorbs_and_warmer_gas_emits() -> None:
    excitation = lte(background=20.0)
    assert excitation.at(10.0)[1] < 0.0 < excitation.at(30.0)[1]


def test_cold_gas_sits_in_the_ground_state() -> None:
    """kT << hnu: kappa = (c^3 / 8 pi nu^3) A (g_u / g_l) n, less 4 exp(-hnu/kT) = 6e-5."""
    excitation = lte()
    line = excitation.line
    expected = C**3 / (8 * math.pi * line.frequency**3) * line.einstein_a * 3.0
    assert excitation.at(0.5)[0] == pytest.approx(expected * (1 - 4 * math.exp(-5.532 / 0.5)), rel=1e-7)


@pytest.mark.parametrize("size", [0, 1, 511, 512, 513, 1025])
def test_any_number_of_cells(size: int) -> None:
    excitation = lte()
    temperature = np.linspace(5.0, 500.0, size)
    n_mol = np.linspace(1.0, 2.0, size)
    kappa, emis = excitation.coefficients(n_mol, temperature)
    for i in {0, size // 2, size - 1} & set(range(size)):
        one_kappa, one_emis = excitation.at(float(temperature[i]))
        assert kappa[i] == pytest.approx(n_mol[i] * one_kappa, rel=1e-15)
        assert emis[i] == pytest.approx(n_mol[i] * one_emis, rel=1e-15)


def test_a_cell_does_not_depend_on_its_place() -> None:
    """Bit for bit: vector lanes, the rest of a block and its end do the same arithmetic."""
    rng = np.random.default_rng(2)
    n_mol, temperature = rng.uniform(0, 1, 1500), rng.uniform(3, 900, 1500)
    excitation = lte()
    whole = excitation.coefficients(n_mol, temperature)
    for first, last in ((0, 1), (3, 10), (17, 530), (511, 1499)):
        part = excitation.coefficients(n_mol[first:last], temperature[first:last])
        for found, expected in zip(part, whole, strict=True):
            np.testing.assert_array_equal(found, expected[first:last])


def test_it_travels_to_other_processes() -> None:
    excitation = lte("HCO+", "3-2")
    copy = pickle.loads(pickle.dumps(excitation))
    assert copy.at(12.3) == excitation.at(12.3)
    assert copy.molecule.digest == excitation.molecule.digest


def test_shape_and_order_are_kept() -> None:
    excitation = lte()
    n_mol = np.arange(1.0, 25.0).reshape(2, 3, 4)
    temperature = 10.0 + n_mol
    kappa, emis = excitation.coefficients(n_mol, temperature)
    assert kappa.shape == emis.shape == (2, 3, 4)
    assert kappa.dtype == emis.dtype == np.float64
    turned, _ = excitation.coefficients(n_mol.T, temperature.T)
    np.testing.assert_array_equal(turned, kappa.T)
    strided, _ = excitation.coefficients(n_mol[:, ::2], temperature[:, ::2].astype(np.float32))
    np.testing.assert_array_equal(strided, kappa[:, ::2])
    assert excitation.coefficients(np.float64(1.0), np.float64(11.0))[0] == kappa[0, 0, 0]


def test_cells_without_molecules_may_have_any_temperature() -> None:
    temperature = np.array([0.0, -5.0, 1e7, np.inf, 10.0])
    kappa, emis = lte().coefficients(np.zeros(5), temperature)
    np.testing.assert_array_equal(kappa, 0.0)
    np.testing.assert_array_equal(emis, 0.0)


@pytest.mark.parametrize(
    ("bad", "found"),
    [(0.0, "0 to 0 K"), (-3.0, "-3 to -3 K"), (0.499, "0.499"), (16385.0, "16385"), (np.inf, "inf to inf K")],
)
def test_temperatures_outside_the_range_are_refused(bad: float, found: str) -> None:
    temperature = np.full((4, 5), 10.0)
    temperature[1, 2] = temperature[3, 4] = bad
    with pytest.raises(ExcitationError, match=r"CO 1-0.*2 of 20 cells.*outside 0.5 to 16384 K") as caught:
        lte().coefficients(np.ones((4, 5)), temperature)
    assert found in str(caught.value)


def test_cells_with_no_temperature_are_refused_even_when_empty() -> None:
    with pytest.raises(ExcitationError, match="1 of 2 cells have no temperature"):
        lte().coefficients(np.zeros(2), np.array([np.nan, 10.0]))


@pytest.mark.parametrize("bad", [-1e-9, np.nan, np.inf])
def test_impossible_densities_are_refused(bad: float) -> None:
    with pytest.raises(ExcitationError, match="1 of 3 cells have a number density"):
        lte().coefficients(np.array([1.0, bad, 1.0]), np.full(3, 10.0))


def test_shapes_must_match() -> None:
    with pytest.raises(ExcitationError, match=r"\(3,\).*\(4,\)"):
        lte().coefficients(np.ones(3), np.full(4, 10.0))


@pytest.mark.parametrize("background", [-1.0, np.nan, np.inf])
def test_an_impossible_background_is_refused(background: float) -> None:
    with pytest.raises(ExcitationError, match="the background is"):
        lte(background=background)


def test_a_line_of_another_molecule_is_refused() -> None:
    with pytest.raises(ExcitationError, match="is not a transition of 13CO"):
        LteExcitation(build_rotor("13CO"), build_rotor("CO").transition("1-0"), 2.725)


def test_a_tabulated_partition_function_sets_the_range() -> None:
    rotor = build_rotor("CO")
    nodes = np.geomspace(8.0, 256.0, 26)
    molecule = replace(rotor, partition=PartitionTable(nodes, 2.0 * rotor.partition_function(nodes)))
    excitation = LteExcitation(molecule, molecule.transition("2-1"), 2.725)
    assert (excitation.t_low, excitation.t_high) == (8.0, 256.0)
    temperature = np.array([8.0, 9.3, 77.7, 256.0])
    kappa, _ = excitation.coefficients(np.ones(4), temperature)
    summed, _ = lte("CO", "2-1").coefficients(np.ones(4), temperature)
    np.testing.assert_allclose(2.0 * kappa, summed, rtol=1e-4)
    for outside in (7.99, 256.1):
        with pytest.raises(ExcitationError, match="outside 8 to 256 K"):
            excitation.at(outside)
    assert excitation.caveats(10.0, 200.0) == []


def test_a_range_that_is_no_whole_bin_is_cut_to_whole_ones() -> None:
    nodes = np.array([9.1, 20.0, 50.3])
    molecule = replace(build_rotor("CO"), partition=PartitionTable(nodes, nodes))
    excitation = LteExcitation(molecule, molecule.transition("2-1"), 2.725)
    assert 9.1 <= excitation.t_low < 9.1 * 65 / 64
    assert 50.3 * 63 / 64 < excitation.t_high <= 50.3
    narrow = replace(molecule, partition=PartitionTable([10.0, 10.01, 10.02], [1.0, 1.0, 1.0]))
    with pytest.raises(ExcitationError, match=r"no temperatures between 10 and 10\.02 K"):
        LteExcitation(narrow, narrow.transition("2-1"), 2.725)


def test_a_partition_function_with_a_step_is_refused() -> None:
    nodes = np.array([10.0, 20.0, 20.000001, 40.0])
    molecule = replace(build_rotor("CO"), partition=PartitionTable(nodes, [1.0, 2.0, 200.0, 400.0]))
    with pytest.raises(ExcitationError, match="cannot be tabulated"):
        LteExcitation(molecule, molecule.transition("1-0"), 2.725)


def test_energies_may_start_anywhere() -> None:
    """Data of ortho species count from para's ground state: populations don't depend on the zero."""
    rotor = build_rotor("CO")
    lifted = replace(rotor, energy=rotor.energy + 500.0 * K_B)
    for temperature in (0.6, 10.0, 300.0):
        expected = LteExcitation(rotor, rotor.transition("3-2"), 2.725).at(temperature)
        found = LteExcitation(lifted, lifted.transition("3-2"), 2.725).at(temperature)
        assert found == pytest.approx(expected, rel=1e-9)


def test_an_atom_of_two_levels() -> None:
    """A fine-structure line: hnu/k = 91.2 K, at 100 K two levels by hand."""
    nu = 91.2 * K_B / H
    ion = Molecule(
        "ion", 2e-23, [0.0, H * nu], [2.0, 4.0], ("1/2", "3/2"), Transitions([1], [0], [2.3e-6], [nu])
    )
    excitation = LteExcitation(ion, ion.transition(1), 0.0)
    e = math.exp(-0.912)
    kappa, emis = excitation.at(100.0)
    share = 4 * e / (2 + 4 * e)
    assert emis == pytest.approx(H * C**3 / (8 * math.pi * K_B * nu**2) * 2.3e-6 * share, rel=1e-9)
    assert kappa == pytest.approx(C**3 / (8 * math.pi * nu**3) * 2.3e-6 * 4 * (1 - e) / (2 + 4 * e), rel=1e-9)


def test_caveats_speak_up_where_levels_run_out() -> None:
    excitation = lte()
    assert excitation.caveats(5.0, 300.0) == []
    (note,) = excitation.caveats(5.0, 2000.0)
    assert "48 levels reach E/k = 6196 K; at 2000 K about" in note
    outside, note = excitation.caveats(0.1, 1e6)
    assert "0.1 to 1e+06 K" in outside
    assert "at 16384 K" in note


def test_it_is_an_excitation() -> None:
    assert isinstance(lte(), Excitation)
