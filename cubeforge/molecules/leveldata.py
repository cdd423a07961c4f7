"""Reader of the plain-text layout of levels, transitions and collision rates of Schöier et al. 2005.

The layout (A&A 432, 369, their section 3): name, mass, levels, radiative transitions, then any number of
collision partners, each with temperatures of its own. Lines that start with "!" are comments; so is what
follows a "!" in a line, and everything after the last partner. The frequency of the file, not the difference
of the levels' energies, is the line's.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import NoReturn

import numpy as np

from cubeforge.errors import MoleculeError
from cubeforge.molecules.model import WAVENUMBER, CollisionPartner, Molecule, Transitions
from cubeforge.quantities import ATOMIC_MASS, H

PARTNERS = {1: "H2", 2: "p-H2", 3: "o-H2", 4: "e", 5: "H", 6: "He", 7: "H+"}
"""Number of a collision partner in the layout -> its name."""
MISMATCH = 1e-3
"""Largest relative difference of a frequency from its levels' energy difference."""


@dataclass
class _Cursor:
    """The lines that carry data, one at a time, and the place of the last one."""

    path: Path
    rows: Iterator[tuple[int, str]]
    number: int = 0
    text: str = ""

    def next(self, wanted: str) -> list[str]:
        """Words of the next line; `wanted` says what it should be."""
        row = next(self.rows, None)
        if row is None:
            raise MoleculeError(f"{self.path}: the file ends where {wanted} should be; is it cut off?")
        self.number, self.text = row
        return self.text.split()

    def fail(self, wanted: str, why: str = "") -> NoReturn:
        shown = self.text if len(self.text) <= 60 else self.text[:57] + "..."
        tail = f" ({why})" if why else ""
        raise MoleculeError(f'{self.path}, line {self.number}: wanted {wanted}, found "{shown}"{tail}')

    def count(self, wanted: str, least: int, after: str = "") -> int:
        """A line that holds one whole number; words may follow it, numbers may not."""
        words = self.next(wanted)
        if len(words) > 1 and _number(words[1]) is not None:
            self.fail(wanted, f"several numbers: are there more {after} than the file says?" if after else "")
        if not _is_integer(words[0]) or int(words[0]) < least:
            self.fail(wanted)
        return int(words[0])

    def index(self, word: str, top: int, wanted: str) -> int:
        """A number from 1 to `top`; returned counted from 0."""
        if not _is_integer(word) or not 1 <= int(word) <= top:
            self.fail(wanted, f'"{word}" is not a number from 1 to {top}')
        return int(word) - 1

    def positive(self, word: str, wanted: str, *, zero: bool = False) -> float:
        """A finite number above zero (or zero, where that has a meaning)."""
        value = _number(word)
        if value is None or not math.isfinite(value) or value < 0 or (value == 0 and not zero):
            self.fail(wanted, f'"{word}" is not {"a number from 0 up" if zero else "a positive number"}')
        return value


def read_leveldata(path: str | Path) -> Molecule:
    """Read a molecule from a file in the layout of Schöier et al. 2005.

    Levels may come in any order of energy; rows are placed by the level's number.

    Raises
    ------
    MoleculeError
        The file cannot be read, a line is not what the layout wants there (with its number, what was wanted
        and what was found), or a frequency contradicts its levels by more than `MISMATCH` and more than the
        energies' last digit.
    """
    path = Path(path)
    try:
        text = path.read_bytes().decode("utf-8", errors="replace")
    except OSError as error:
        raise MoleculeError(f"{path}: cannot read the molecule's data: {error.strerror}") from None
    cursor = _Cursor(path, _data_lines(text))
    name = " ".join(cursor.next("the molecule's name"))
    mass = cursor.positive(
        cursor.next("the molecular weight")[0], "the molecular weight in atomic mass units"
    )
    energy, weight, labels, digit = _read_levels(cursor)
    transitions = _read_transitions(cursor, len(energy))
    partners = []
    for _ in range(cursor.count("the number of collision partners", 0, "radiative transitions")):
        partners.append(_read_partner(cursor, energy))
    _check_frequencies(path, energy, digit, transitions, labels)
    return Molecule(
        name=name,
        mass=mass * ATOMIC_MASS,
        energy=energy * WAVENUMBER,
        weight=weight,
        labels=labels,
        transitions=transitions,
        partners=tuple(partners),
        source=str(path),
    )


def _data_lines(text: str) -> Iterator[tuple[int, str]]:
    """Number (from 1) and content of each line that is not empty once comments are gone."""
    for number, line in enumerate(text.splitlines(), start=1):
        content = line.split("!", 1)[0].strip()
        if content:
            yield number, content


def _number(word: str) -> float | None:
    """A float, also with Fortran's D exponent; None if it is none."""
    try:
        return float(word.lower().replace("d", "e"))
    except ValueError:
        return None


def _is_integer(word: str) -> bool:
    return word.isascii() and word.isdigit()


def _read_levels(cursor: _Cursor) -> tuple[np.ndarray, np.ndarray, tuple[str, ...], float]:
    """Energies (cm^-1), weights, labels, and the value of the energies' coarsest last digit."""
    count = cursor.count("the number of energy levels", 1)
    energy, weight = np.full(count, np.nan), np.empty(count)
    labels = [""] * count
    digit = 0.0
    for row in range(count):
        wanted = f"level {row + 1} of {count}: number, energy (cm^-1), weight, label"
        words = cursor.next(wanted)
        if len(words) < 3:
            cursor.fail(wanted)
        index = cursor.index(words[0], count, wanted)
        if not np.isnan(energy[index]):
            cursor.fail(wanted, f"level {index + 1} is listed twice")
        energy[index] = cursor.positive(words[1], wanted, zero=True)
        weight[index] = cursor.positive(words[2], wanted)
        labels[index] = " ".join(words[3:]) or words[0]
        if energy[index] > 0:
            digit = max(digit, _last_digit(words[1]))
    return energy, weight, tuple(labels), digit


def _last_digit(word: str) -> float:
    """Value of one unit in the last place of a written number: 0.01 for "3.85"."""
    mantissa, _, exponent = word.lower().replace("d", "e").partition("e")
    decimals = len(mantissa.partition(".")[2])
    return float(10.0 ** (int(exponent or 0) - decimals))


def _read_transitions(cursor: _Cursor, levels: int) -> Transitions:
    count = cursor.count("the number of radiative transitions", 0, "levels")
    upper, lower = np.empty(count, dtype=np.int64), np.empty(count, dtype=np.int64)
    einstein_a, frequency = np.empty(count), np.empty(count)
    for row in range(count):
        wanted = f"radiative transition {row + 1} of {count}: number, upper, lower, A (1/s), frequency (GHz)"
        words = cursor.next(wanted)
        if len(words) < 5:
            cursor.fail(wanted)
        upper[row] = cursor.index(words[1], levels, wanted)
        lower[row] = cursor.index(words[2], levels, wanted)
        if upper[row] == lower[row]:
            cursor.fail(wanted, "upper and lower level are the same")
        einstein_a[row] = cursor.positive(words[3], wanted, zero=True)
        frequency[row] = cursor.positive(words[4], wanted) * 1e9
    return Transitions(upper, lower, einstein_a, frequency)


def _read_partner(cursor: _Cursor, energy: np.ndarray) -> CollisionPartner:
    wanted = "a collision partner: " + ", ".join(f"{number} for {name}" for number, name in PARTNERS.items())
    words = cursor.next(wanted)
    if not _is_integer(words[0]) or int(words[0]) not in PARTNERS:
        cursor.fail(wanted)
    name = PARTNERS[int(words[0])]
    count = cursor.count(f"the number of collisions with {name}", 0)
    columns = cursor.count(f"the number of temperatures of the collisions with {name}", 1)
    temperatures = _read_temperatures(cursor, name, columns)
    upper, lower = np.empty(count, dtype=np.int64), np.empty(count, dtype=np.int64)
    rates = np.empty((count, columns))
    for row in range(count):
        wanted = f"collision {row + 1} of {count} with {name}: number, upper, lower, {columns} rates (cm3/s)"
        words = cursor.next(wanted)
        if len(words) < 3 + columns or _extra_number(words, 3 + columns):
            cursor.fail(wanted, f"{len(words)} columns instead of {3 + columns}")
        upper[row] = cursor.index(words[1], len(energy), wanted)
        lower[row] = cursor.index(words[2], len(energy), wanted)
        if upper[row] == lower[row] or energy[upper[row]] < energy[lower[row]]:
            cursor.fail(wanted, "the upper level does not lie above the lower one")
        rates[row] = [cursor.positive(word, wanted, zero=True) for word in words[3 : 3 + columns]]
    return CollisionPartner(name, temperatures, upper, lower, rates)


def _read_temperatures(cursor: _Cursor, name: str, columns: int) -> np.ndarray:
    wanted = f"{columns} temperatures (K) of the collisions with {name}, ascending"
    words = cursor.next(wanted)
    if len(words) < columns or _extra_number(words, columns):
        cursor.fail(wanted, f"{len(words)} of them")
    temperatures = np.array([cursor.positive(word, wanted) for word in words[:columns]])
    if np.any(np.diff(temperatures) <= 0):
        cursor.fail(wanted, "they do not ascend")
    return temperatures


def _extra_number(words: list[str], wanted: int) -> bool:
    """Whether a number follows the wanted columns; words may (people leave remarks without a "!")."""
    return len(words) > wanted and _number(words[wanted]) is not None


def _check_frequencies(
    path: Path, energy: np.ndarray, digit: float, transitions: Transitions, labels: tuple[str, ...]
) -> None:
    """Refuse lines whose frequency is not their levels' energy difference, the energies' rounding allowed."""
    stated = transitions.frequency * (H / WAVENUMBER)
    derived = energy[transitions.upper] - energy[transitions.lower]
    wrong = np.abs(stated - derived) > np.maximum(MISMATCH * stated, digit)
    if wrong.any():
        row = int(np.argmax(wrong))
        upper, lower = transitions.upper[row], transitions.lower[row]
        found, expected = transitions.frequency[row] / 1e9, derived[row] * WAVENUMBER / H / 1e9
        raise MoleculeError(
            f"{path}: the frequency of {int(wrong.sum())} of {len(wrong)} transitions contradicts the "
            f"energies of its levels by more than {MISMATCH:g}; the first is number {row + 1}, "
            f"{labels[upper]}-{labels[lower]}: {found:.6f} GHz, but {expected:.6f} GHz from the energies"
        )
