"""What a molecule is to cubeforge: levels, radiative transitions, collision rates, partition function."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.errors import MoleculeError
from cubeforge.molecules.partition import PartitionTable, frozen
from cubeforge.quantities import K_B, C, H

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

WAVENUMBER = H * C
"""Energy of 1 cm^-1, erg."""
HELD = 1e-3
"""Largest share of the partition function above the levels at hand that passes without a warning."""


@dataclass(frozen=True)
class Line:
    """One radiative transition with all that excitation and transfer need, in cgs.

    Attributes
    ----------
    molecule, name : str
        The molecule, and the transition's labels as upper-lower ("1-0").
    upper, lower : int
        Rows of the molecule's level arrays.
    frequency : float
        Rest frequency, Hz.
    einstein_a : float
        Rate of spontaneous emission, 1/s.
    mass : float
        Mass of one molecule, g.
    weight_upper, weight_lower : float
        Statistical weights.
    energy_upper, energy_lower : float
        Energies of the levels, erg.
    """

    molecule: str
    name: str
    upper: int
    lower: int
    frequency: float
    einstein_a: float
    mass: float
    weight_upper: float
    weight_lower: float
    energy_upper: float
    energy_lower: float

    def __str__(self) -> str:
        return f"{self.molecule} {self.name} ({self.frequency / 1e9:.6f} GHz)"


@dataclass(frozen=True, eq=False)
class Transitions:
    """Radiative transitions as flat arrays of equal length.

    Attributes
    ----------
    upper, lower : ndarray, int64
        Rows of the molecule's level arrays.
    einstein_a : ndarray, float64
        1/s.
    frequency : ndarray, float64
        Hz, as the source states it (not derived from the levels' energies).
    """

    upper: IntArray
    lower: IntArray
    einstein_a: FloatArray
    frequency: FloatArray

    def __post_init__(self) -> None:
        for name, kind in (("upper", np.int64), ("lower", np.int64)):
            object.__setattr__(self, name, frozen(getattr(self, name), kind))
        for name in ("einstein_a", "frequency"):
            object.__setattr__(self, name, frozen(getattr(self, name)))

    def __len__(self) -> int:
        return len(self.upper)


@dataclass(frozen=True, eq=False)
class CollisionPartner:
    """Rates of downward collisions with one partner.

    Attributes
    ----------
    name : str
        "H2", "p-H2", "o-H2", "e", "H", "He" or "H+".
    temperatures : ndarray, shape (temperatures,), float64
        Kelvins, ascending.
    upper, lower : ndarray, shape (collisions,), int64
        Rows of the molecule's level arrays.
    rates : ndarray, shape (collisions, temperatures), float64
        Downward rate coefficients, cm3/s.
    """

    name: str
    temperatures: FloatArray
    upper: IntArray
    lower: IntArray
    rates: FloatArray

    def __post_init__(self) -> None:
        for name in ("upper", "lower"):
            object.__setattr__(self, name, frozen(getattr(self, name), np.int64))
        for name in ("temperatures", "rates"):
            object.__setattr__(self, name, frozen(getattr(self, name)))
        if self.rates.shape != (len(self.upper), len(self.temperatures)):
            raise MoleculeError(
                f"collisions with {self.name}: rates have shape {self.rates.shape}, wanted "
                f"{(len(self.upper), len(self.temperatures))}"
            )


@dataclass(frozen=True, eq=False)
class Molecule:
    """A molecule, an atom, an ion; arrays are read-only.

    Attributes
    ----------
    name : str
        For people.
    mass : float
        Mass of one molecule, g.
    energy, weight : ndarray, shape (levels,), float64
        Energy in erg above the source's zero, and statistical weight, in the source's order.
    labels : tuple of str
        Quantum numbers of each level, as the source writes them.
    transitions : Transitions
    partners : tuple of CollisionPartner
    partition : PartitionTable, optional
        A tabulated partition function; without it, the sum over the levels at hand. Its statistical
        weights must be counted as `weight` counts them.
    vibrations : ndarray, shape (modes, 2), float64
        Energy in erg and degeneracy of vibrations that the levels leave out; they multiply the sum over
        levels by the harmonic factor prod (1 - exp(-E/kT))^-d. Empty when there are none.
    source : str
        Where the numbers come from.

    Raises
    ------
    MoleculeError
        Arrays that contradict each other, or numbers that cannot be.
    """

    name: str
    mass: float
    energy: FloatArray
    weight: FloatArray
    labels: tuple[str, ...]
    transitions: Transitions
    partners: tuple[CollisionPartner, ...] = ()
    partition: PartitionTable | None = None
    vibrations: FloatArray = field(default_factory=lambda: np.empty((0, 2)))
    source: str = ""

    def __post_init__(self) -> None:
        for name in ("energy", "weight", "vibrations"):
            object.__setattr__(self, name, frozen(getattr(self, name)))
        _check(self)

    @property
    def levels(self) -> int:
        """Number of levels."""
        return len(self.energy)

    @property
    def digest(self) -> str:
        """SHA-256 of every number, label and partner's name; `name` and `source` don't enter."""
        digest = hashlib.sha256(repr([self.labels, [partner.name for partner in self.partners]]).encode())
        arrays: list[Any] = [np.array([self.mass]), self.energy, self.weight, self.vibrations]
        lines = self.transitions
        arrays += [lines.upper, lines.lower, lines.einstein_a, lines.frequency]
        for partner in self.partners:
            arrays += [partner.temperatures, partner.upper, partner.lower, partner.rates]
        if self.partition is not None:
            arrays += [self.partition.temperatures, self.partition.values]
        for array in arrays:
            digest.update(repr(array.shape).encode())
            digest.update(array.astype(array.dtype.newbyteorder("<")).tobytes())
        return digest.hexdigest()

    def transition_name(self, row: int) -> str:
        """Labels of transition `row` (from 0), upper-lower: "1-0"."""
        upper, lower = self.transitions.upper[row], self.transitions.lower[row]
        return f"{self.labels[upper]}-{self.labels[lower]}"

    def transition(self, which: str | int) -> Line:
        """Pick a line.

        Parameters
        ----------
        which : str or int
            Labels as upper-lower ("1-0", also "J=1-0"; spaces and quotes are ignored), or the
            transition's number, counted from 1 as the data files do.

        Raises
        ------
        MoleculeError
            No such transition, with those there are; or several of that name.
        """
        names = [self.transition_name(row) for row in range(len(self.transitions))]
        if isinstance(which, int) and not isinstance(which, bool):
            rows = [which - 1] if 1 <= which <= len(names) else []
        else:
            wanted = _plain(str(which))
            rows = [row for row, name in enumerate(names) if _plain(name) == wanted]
        if len(rows) != 1:
            raise MoleculeError(self._transition_problem(which, rows, names))
        return self.line(rows[0])

    def line(self, row: int) -> Line:
        """The line of transition `row`, counted from 0 as the arrays are."""
        upper, lower = int(self.transitions.upper[row]), int(self.transitions.lower[row])
        return Line(
            molecule=self.name,
            name=self.transition_name(row),
            upper=upper,
            lower=lower,
            frequency=float(self.transitions.frequency[row]),
            einstein_a=float(self.transitions.einstein_a[row]),
            mass=self.mass,
            weight_upper=float(self.weight[upper]),
            weight_lower=float(self.weight[lower]),
            energy_upper=float(self.energy[upper]),
            energy_lower=float(self.energy[lower]),
        )

    def _transition_problem(self, which: str | int, rows: list[int], names: list[str]) -> str:
        if rows:
            numbers = ", ".join(str(row + 1) for row in rows)
            return f'{self.name}: {len(rows)} transitions are called "{which}"; pick one by number: {numbers}'
        shown = [
            f'{row + 1}: "{name}" ({self.transitions.frequency[row] / 1e9:.4f} GHz)'
            for row, name in enumerate(names[:12])
        ]
        more = f" and {len(names) - 12} more" if len(names) > 12 else ""
        return f"{self.name} has no transition {which!r}; there are {', '.join(shown) or 'none'}{more}"

    def ln_partition(self, temperature: Any) -> FloatArray:
        """Logarithm of the partition function, same shape as `temperature` (K, positive).

        Summed over the levels at hand (times the harmonic factor of `vibrations`), or interpolated from
        the table if the source has one.

        Raises
        ------
        MoleculeError
            A temperature that is not positive, or outside the table.
        """
        kelvin = np.asarray(temperature, dtype=np.float64)
        if not np.all(kelvin > 0.0):
            raise MoleculeError(f"{self.name}: the partition function needs temperatures above 0 K")
        if self.partition is not None:
            return self.partition.ln_q(kelvin, self.name)
        kt = K_B * kelvin[..., np.newaxis]
        lowest = float(self.energy.min())
        terms = self.weight * np.exp(-(self.energy - lowest) / kt)
        modes = self.vibrations
        factor = -(modes[:, 1] * np.log(-np.expm1(-modes[:, 0] / kt))).sum(axis=-1)
        result: FloatArray = np.log(terms.sum(axis=-1)) - lowest / kt[..., 0] + factor
        return result

    def partition_function(self, temperature: Any) -> FloatArray:
        """Partition function Q(T), same shape as `temperature`; see `ln_partition`."""
        result: FloatArray = np.exp(self.ln_partition(temperature))
        return result

    def missing_fraction(self, temperature: float) -> float:
        """Estimate the share of the partition function in levels above those at hand; 0 with a table.

        Carries the mean spacing and weight of the uppermost quarter of the levels on to infinity: good to a
        quarter of itself for linear rotors. An atom whose file is complete looks worse than it is.
        """
        if self.partition is not None:
            return 0.0
        order = np.argsort(self.energy, kind="stable")
        energy, weight = self.energy[order], self.weight[order]
        start = min(len(energy) - 2, (3 * len(energy)) // 4)
        if start < 0 or energy[-1] == energy[start]:
            return 1.0
        kt = K_B * temperature
        count = len(energy) - 1 - start
        spacing = float(energy[-1] - energy[start]) / count / kt
        next_terms = float(weight[start + 1 :].mean()) / np.expm1(spacing)
        above = float(next_terms * np.exp(-(energy[-1] - energy[0]) / kt))
        held = float((weight * np.exp(-(energy - energy[0]) / kt)).sum())
        return above / (above + held)

    def levels_hold(self, temperature: float, tolerance: float = HELD) -> bool:
        """Whether the levels at hand (or the table) hold all but `tolerance` of the partition function."""
        return self.missing_fraction(temperature) <= tolerance


def _plain(name: str) -> str:
    """A transition's name without what people add to it."""
    for extra in ("J=", " ", '"', "'"):
        name = name.replace(extra, "")
    return name


def _check(molecule: Molecule) -> None:
    """Refuse a molecule that contradicts itself."""
    levels, lines = molecule.levels, molecule.transitions
    problem = None
    if not (np.isfinite(molecule.mass) and molecule.mass > 0):
        problem = f"mass {molecule.mass} g is not a positive number"
    elif levels < 1 or len(molecule.weight) != levels or len(molecule.labels) != levels:
        problem = f"{levels} energies, {len(molecule.weight)} weights, {len(molecule.labels)} labels"
    elif not np.all(np.isfinite(molecule.energy)):
        problem = "an energy is not finite"
    elif not (np.all(np.isfinite(molecule.weight)) and np.all(molecule.weight > 0)):
        problem = "a statistical weight is not a positive number"
    elif not len(lines.upper) == len(lines.lower) == len(lines.einstein_a) == len(lines.frequency):
        problem = "the arrays of transitions differ in length"
    elif not (np.all(np.isfinite(lines.frequency)) and np.all(lines.frequency > 0)):
        problem = "a frequency is not a positive number"
    elif not (np.all(np.isfinite(lines.einstein_a)) and np.all(lines.einstein_a >= 0)):
        problem = "an Einstein A is negative or not finite"
    elif molecule.vibrations.ndim != 2 or molecule.vibrations.shape[1] != 2:
        problem = f"vibrations have shape {molecule.vibrations.shape}, wanted (modes, 2)"
    else:
        pairs: list[Any] = [lines, *molecule.partners]
        for pair in pairs:
            rows = np.concatenate([pair.upper, pair.lower])
            if np.any((rows < 0) | (rows >= levels)) or np.any(pair.upper == pair.lower):
                problem = (
                    f"a transition joins levels that don't exist (there are {levels}) or a level to itself"
                )
    if problem:
        raise MoleculeError(f"{molecule.name}: {problem}")
