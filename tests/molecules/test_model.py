"""Molecules: picking lines, partition functions, refusals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from cubeforge.errors import MoleculeError
from cubeforge.molecules import (
    ROTORS,
    CollisionPartner,
    Molecule,
    PartitionTable,
    Transitions,
    build_rotor,
    get_molecule,
)
from cubeforge.quantities import K_B


@pytest.fixture
def two_levels() -> Molecule:
    """Weights 2 and 4, 91.2 K apart: about the fine structure of ionised carbon (common practice)."""
    return Molecule(
        name="ion",
        mass=2e-23,
        energy=np.array([0.0, 91.2 * K_B]),
        weight=np.array([2.0, 4.0]),
        labels=("1/2", "3/2"),
        transitions=Transitions([1], [0], [2.3e-6], [1.9005369e12]),
    )


@pytest.mark.parametrize("which", ["2-1", "J=2-1", " 2 - 1 ", "J=2-J=1", 2])
def test_a_line_is_found_by_labels_and_by_number(which: str | int) -> None:
    line = build_rotor("CO").transition(which)
    assert (line.name, line.upper, line.lower) == ("2-1", 2, 1)
    assert (line.weight_upper, line.weight_lower) == (5.0, 3.0)
    assert line.frequency == pytest.approx(230.538e9, rel=1e-8)
    assert line.mass == pytest.approx(27.9949 * 1.66053907e-24, rel=1e-5)


@pytest.mark.parametrize("which", ["1-2", "0-1", "49-48", 0, 48, -1, True, ""])
def test_an_unknown_line_lists_those_there_are(which: str | int) -> None:
    with pytest.raises(MoleculeError, match=r'CO has no transition.*1: "1-0" \(115\.2712 GHz\).*and 35 more'):
        build_rotor("CO").transition(which)


def test_an_ambiguous_name_asks_for_a_number(two_levels: Molecule) -> None:
    twice = Transitions([1, 1], [0, 0], [2.3e-6, 1e-9], [1.9005369e12, 1.9005369e12])
    with pytest.raises(MoleculeError, match=r"2 transitions are called .* by number: 1, 2"):
        replace(two_levels, transitions=twice).transition("3/2-1/2")


def test_two_levels_by_hand(two_levels: Molecule) -> None:
    temperatures = np.array([[10.0, 91.2], [300.0, 1e5]])
    expected = 2.0 + 4.0 * np.exp(-91.2 / temperatures)
    np.testing.assert_allclose(two_levels.partition_function(temperatures), expected, rtol=1e-13)
    assert two_levels.partition_function(temperatures).shape == (2, 2)


def test_partition_function_survives_levels_far_above_the_zero(two_levels: Molecule) -> None:
    high = replace(two_levels, energy=two_levels.energy + 1000.0 * K_B)
    difference = high.ln_partition(0.5) - two_levels.ln_partition(0.5)
    assert difference == pytest.approx(-2000.0, rel=1e-12)


@pytest.mark.parametrize("temperature", [0.0, -3.0, np.nan])
def test_partition_function_refuses_what_is_no_temperature(two_levels: Molecule, temperature: float) -> None:
    with pytest.raises(MoleculeError, match="above 0 K"):
        two_levels.partition_function([10.0, temperature])


def test_a_table_replaces_the_sum_and_is_not_extrapolated(two_levels: Molecule) -> None:
    table = PartitionTable([10.0, 20.0, 40.0, 80.0], [30.0, 60.0, 120.0, 240.0])
    molecule = replace(two_levels, partition=table)
    np.testing.assert_allclose(
        molecule.partition_function([10.0, 33.0, 80.0]), [30.0, 99.0, 240.0], rtol=1e-12
    )
    assert molecule.levels_hold(80.0)
    for temperature in (9.99, 80.01):
        with pytest.raises(MoleculeError, match=f"from 10 to 80 K, not at {temperature:g} K"):
            molecule.partition_function([20.0, temperature])


@pytest.mark.parametrize(
    ("temperatures", "values", "message"),
    [
        ([1.0, 2.0], [1.0, 2.0], "3 or more"),
        ([1.0, 2.0, 3.0], [1.0, 2.0], "equal length"),
        ([1.0, 3.0, 2.0], [1.0, 2.0, 3.0], "ascend"),
        ([1.0, 2.0, 3.0], [1.0, np.nan, 3.0], "positive"),
    ],
)
def test_a_table_that_is_none(temperatures: list[float], values: list[float], message: str) -> None:
    with pytest.raises(MoleculeError, match=message):
        PartitionTable(temperatures, values)


@pytest.mark.parametrize(("name", "temperature"), [("CO", 60.0), ("CO", 120.0), ("N2H+", 80.0)])
def test_missing_levels_are_estimated(name: str, temperature: float) -> None:
    """Cut the ladder at E/k = 500 K and compare the estimate with what the long ladder says is missing."""
    short, long = build_rotor(name, 500.0), build_rotor(name, 12000.0)
    truth = 1.0 - float(short.partition_function(temperature) / long.partition_function(temperature))
    assert short.missing_fraction(temperature) == pytest.approx(truth, rel=0.25)
    assert short.levels_hold(temperature, 1.3 * truth)
    assert not short.levels_hold(temperature, 0.7 * truth)


def test_the_rotors_hold_room_temperature() -> None:
    for name in ROTORS:
        molecule = build_rotor(name)
        assert molecule.levels_hold(600.0, 1e-4)
        assert not molecule.levels_hold(3000.0)


def test_a_single_level_holds_nothing() -> None:
    empty = Transitions([], [], [], [])
    lonely = Molecule("x", 1e-23, np.zeros(1), np.ones(1), ("0",), empty)
    assert not lonely.levels_hold(10.0)
    with pytest.raises(MoleculeError, match="there are none"):
        lonely.transition(1)


def test_the_digest_follows_every_number_and_nothing_else(two_levels: Molecule) -> None:
    partner = CollisionPartner("H2", [10.0, 20.0], [1], [0], [[1e-10, 2e-10]])
    base = replace(two_levels, partners=(partner,))
    assert replace(base, source="elsewhere", name="C+").digest == base.digest
    lines = base.transitions
    others = [
        replace(base, mass=2.1e-23),
        replace(base, energy=base.energy * (1 + 1e-15)),
        replace(base, weight=np.array([2.0, 6.0])),
        replace(base, labels=("a", "b")),
        replace(base, vibrations=np.array([[1e-13, 2.0]])),
        replace(base, transitions=replace(lines, einstein_a=[2.4e-6])),
        replace(base, transitions=replace(lines, frequency=[1.9e12])),
        replace(base, transitions=replace(lines, upper=[0], lower=[1])),
        replace(base, partners=()),
        replace(base, partners=(replace(partner, name="He"),)),
        replace(base, partners=(replace(partner, rates=[[1e-10, 3e-10]]),)),
        replace(base, partners=(replace(partner, temperatures=[10.0, 30.0]),)),
        replace(base, partition=PartitionTable([1.0, 2.0, 3.0], [1.0, 2.0, 3.0])),
    ]
    digests = {molecule.digest for molecule in [base, *others]}
    assert len(digests) == len(others) + 1


def test_arrays_cannot_be_changed(two_levels: Molecule) -> None:
    for array in (two_levels.energy, two_levels.transitions.frequency):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1.0


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"mass": 0.0}, "mass"),
        ({"weight": np.ones(3)}, "3 weights"),
        ({"energy": np.array([0.0, np.nan])}, "energy is not finite"),
        ({"weight": np.array([1.0, 0.0])}, "weight"),
        ({"vibrations": np.ones(3)}, "vibrations"),
        ({"transitions": Transitions([1], [0], [1.0], [0.0])}, "frequency"),
        ({"transitions": Transitions([1], [0], [-1.0], [1e9])}, "Einstein A"),
        ({"transitions": Transitions([1, 1], [0], [1.0], [1e9])}, "differ in length"),
        ({"transitions": Transitions([2], [0], [1.0], [1e9])}, "exist .there are 2"),
        ({"transitions": Transitions([1], [1], [1.0], [1e9])}, "to itself"),
        ({"partners": (CollisionPartner("H2", [10.0], [5], [0], [[1e-10]]),)}, "exist .there are 2"),
    ],
)
def test_contradictions_are_refused(two_levels: Molecule, change: dict, message: str) -> None:
    with pytest.raises(MoleculeError, match=message):
        replace(two_levels, **change)


def test_collision_rates_of_another_shape_are_refused() -> None:
    with pytest.raises(MoleculeError, match="wanted"):
        CollisionPartner("H2", [10.0, 20.0], [1], [0], [[1e-10]])


def test_built_in_names_mind_their_case() -> None:
    assert get_molecule("13CO").name == "13CO"
    with pytest.raises(MoleculeError, match='did you mean "HCO\\+"'):
        get_molecule("hco+")
    with pytest.raises(MoleculeError, match='no built-in molecule "xyz"; known: CO, 13CO'):
        build_rotor("xyz")
    with pytest.raises(MoleculeError, match=r"nor a file \(.*nothing\.txt does not exist"):
        get_molecule("nothing.txt")
