"""Local thermodynamic equilibrium: levels filled by Boltzmann's law at the gas temperature."""

from __future__ import annotations

import math
from typing import Literal

import numpy as np
import numpy.typing as npt

from cubeforge.errors import MoleculeError
from cubeforge.excitation.base import ExcitationError, FloatArray
from cubeforge.excitation.kernels import FRACTION_BITS, lte_coefficients
from cubeforge.molecules.model import HELD, Line, Molecule
from cubeforge.quantities import K_B, C, H, planck, rayleigh_jeans_factor

T_RANGE = (0.5, 16384.0)
"""Temperatures, K, that LTE is offered for when the partition function is summed over levels."""
TABLE_ERROR = 1e-9
"""Largest error of the tabulated ln Q, checked in every bin when a table is made."""
BIN_BITS = (6, 7, 8, 9, 10)
"""Mantissa bits per bin of the table, tried in turn: 64 to 1024 bins per factor of two in temperature."""


class LteExcitation:
    """Coefficients of one line in LTE.

    With the fraction of molecules in level i, g_i exp(-E_i / kT) / Q(T):

    * kappa = c^3 / (8 pi nu^3) A (n_l g_u / g_l - n_u) (Rybicki & Lightman 1979, eqs. 1.72 to 1.74),
    * j = (c^2 / 2 k nu^2) (h c / 4 pi) n_u A, in kelvins,
    * emis = j - kappa (c^2 / 2 k nu^2) B(T_bg).

    The upper level is put at h nu above the lower one, so that j / kappa is the Planck function at the line's
    frequency to rounding, whatever the last digits of the data's energies.

    Parameters
    ----------
    molecule : Molecule
    line : Line
        One of its transitions.
    background_K : float
        Temperature of the black body behind the cloud, K; 0 for none.

    Attributes
    ----------
    t_low, t_high : float
        Range of temperatures, K: `T_RANGE`, or the whole bins inside the range of the molecule's own
        table of Q.

    Raises
    ------
    ExcitationError
        A background below 0 K, a line of another molecule, a partition function that cannot be tabulated.
    """

    def __init__(self, molecule: Molecule, line: Line, background_K: float) -> None:
        if not (math.isfinite(background_K) and background_K >= 0.0):
            raise ExcitationError(f"{line}: the background is {background_K} K; wanted a number from 0 up")
        if line not in (molecule.line(row) for row in range(len(molecule.transitions))):
            raise ExcitationError(f"{line} is not a transition of {molecule.name} ({molecule.source})")
        self.molecule = molecule
        self.line = line
        self.background = float(background_K)
        self._zero = float(molecule.energy.min())
        self._table, self._bits, self._first, self.t_low, self.t_high = _tabulate(molecule)
        photon = H * line.frequency / K_B
        factor = C**3 / (8.0 * math.pi * line.frequency**3) * line.einstein_a * line.weight_upper
        background = rayleigh_jeans_factor(line.frequency) * planck(line.frequency, self.background)
        self._constants = ((line.energy_lower - self._zero) / K_B, photon, factor, background)

    def coefficients(self, n_mol: npt.ArrayLike, temperature: npt.ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Opacity and emission of cells; see `Excitation.coefficients`.

        A cell with no molecules (``n_mol == 0``) gets zeros at any temperature that is a number.

        Raises
        ------
        ExcitationError
            Shapes that differ; densities that are not finite numbers from 0 up; temperatures outside `t_low`
            to `t_high` where there are molecules, with their count and range.
        """
        density, kelvin = np.asarray(n_mol, dtype=np.float64), np.asarray(temperature, dtype=np.float64)
        order: Literal["C", "F"] = "F" if density.flags.f_contiguous and kelvin.flags.f_contiguous else "C"
        if np.shape(n_mol) != np.shape(temperature):
            raise ExcitationError(
                f"{self.line}: densities of shape {np.shape(n_mol)}, "
                f"temperatures of shape {np.shape(temperature)}"
            )
        kappa, emis = np.empty(density.size), np.empty(density.size)
        bad = lte_coefficients(
            density.ravel(order=order),
            kelvin.ravel(order=order),
            self._table,
            np.uint64(FRACTION_BITS - self._bits),
            np.uint64(self._first),
            self.t_low,
            self.t_high,
            self._constants,
            kappa,
            emis,
        )
        if bad:
            raise ExcitationError(self._problem(density, kelvin))
        return kappa.reshape(density.shape, order=order), emis.reshape(density.shape, order=order)

    def at(self, temperature: float) -> tuple[float, float]:
        """Opacity (cm^3/s) and emission (K cm^3/s) per molecule at one temperature."""
        kappa, emis = self.coefficients(np.ones(1), np.array([temperature]))
        return float(kappa[0]), float(emis[0])

    def caveats(self, t_min: float, t_max: float) -> list[str]:
        """What to know about results between `t_min` and `t_max` (K); empty when there is nothing."""
        notes = []
        name = self.molecule.name
        if t_min < self.t_low or t_max > self.t_high:
            notes.append(
                f"{name}: gas from {t_min:g} to {t_max:g} K, but LTE is offered from {self.t_low:g} to "
                f"{self.t_high:g} K; cells outside that hold molecules will stop the render."
            )
        hottest = min(t_max, self.t_high)
        if not self.molecule.levels_hold(hottest):
            top = float(self.molecule.energy.max() - self._zero) / K_B
            missing = self.molecule.missing_fraction(hottest)
            notes.append(
                f"{name}: its {self.molecule.levels} levels reach E/k = {top:.0f} K; at {hottest:g} K about "
                f"{100 * missing:.2g} % of the partition function lies above them (wanted: below "
                f"{100 * HELD:g} %), and LTE populations come out {1 / (1 - missing):.4g} times too high."
            )
        return notes

    def _problem(self, density: FloatArray, kelvin: FloatArray) -> str:
        wrong = ~((density >= 0.0) & (density < np.inf))
        if wrong.any():
            return (
                f"{self.line}: {int(wrong.sum())} of {density.size} cells have a number density that is not "
                f"a finite number from 0 up; the first is {density[wrong].flat[0]:g} cm^-3"
            )
        nan = np.isnan(kelvin)
        outside = (density > 0.0) & ~nan & ~((kelvin >= self.t_low) & (kelvin <= self.t_high))
        parts = []
        if nan.any():
            parts.append(f"{int(nan.sum())} of {kelvin.size} cells have no temperature (NaN)")
        if outside.any():
            found = kelvin[outside]
            parts.append(
                f"{int(outside.sum())} of {kelvin.size} cells that hold molecules are at {found.min():g} to "
                f"{found.max():g} K, outside {self.t_low:g} to {self.t_high:g} K, where LTE is offered; "
                "give the gas a temperature limit, or no molecules there"
            )
        return f"{self.line}: " + "; ".join(parts)


def _tabulate(molecule: Molecule) -> tuple[FloatArray, int, int, float, float]:
    """Cubics of -ln Q(T) - E_0/kT in bins of the float's leading bits, E_0 the lowest level.

    Returns the table (bins + 1, 4), mantissa bits per bin, number of the first bin, and the range in K. The
    last row serves the upper end of the range itself.
    """
    low, high = T_RANGE
    if molecule.partition is not None:
        low, high = float(molecule.partition.temperatures[0]), float(molecule.partition.temperatures[-1])
    error = math.inf
    for bits in BIN_BITS:
        first, edges = _bin_edges(low, high, bits)
        table = _fit(molecule, edges)
        error = _table_error(molecule, edges, table)
        if error < TABLE_ERROR:
            return table, bits, first, float(edges[0]), float(edges[-1])
    raise ExcitationError(
        f"{molecule.name}: ln Q cannot be tabulated to {TABLE_ERROR:g} (reached {error:.1g}); is its "
        "partition function smooth?"
    )


def _bin_edges(low: float, high: float, bits: int) -> tuple[int, FloatArray]:
    """Number of the first whole bin inside `low` to `high`, and the edges of all of them in K."""
    shift = FRACTION_BITS - bits
    ends = np.array([low, high]).view(np.int64)
    first, last = int(-(-ends[0] >> shift)), int(ends[1] >> shift)
    if last <= first:
        raise ExcitationError(f"no temperatures between {low:g} and {high:g} K to tabulate")
    return first, (np.arange(first, last + 1, dtype=np.int64) << shift).view(np.float64)


def _minus_ln_q(molecule: Molecule, kelvin: FloatArray) -> FloatArray:
    try:
        ln_q = molecule.ln_partition(kelvin)
    except MoleculeError as error:
        raise ExcitationError(str(error)) from error
    return np.asarray(-ln_q - float(molecule.energy.min()) / (K_B * kelvin))


_NODES = np.array([0.0, 0.25, 0.75, 1.0])
"""Where a bin's cubic meets ln Q: the ends, for continuity, and the inner Chebyshev-Lobatto points."""


def _fit(molecule: Molecule, edges: FloatArray) -> FloatArray:
    kelvin = edges[:-1, np.newaxis] + np.diff(edges)[:, np.newaxis] * _NODES
    values = _minus_ln_q(molecule, kelvin)
    cubics = np.linalg.solve(np.vander(_NODES, increasing=True), values.T).T
    end = np.array([[values[-1, -1], 0.0, 0.0, 0.0]])
    return np.ascontiguousarray(np.concatenate([cubics, end]))


def _table_error(molecule: Molecule, edges: FloatArray, table: FloatArray) -> float:
    """Largest error of ln Q at points between the nodes of every bin."""
    at = np.array([0.1, 0.5, 0.9])
    kelvin = edges[:-1, np.newaxis] + np.diff(edges)[:, np.newaxis] * at
    tabulated = table[:-1] @ np.vander(at, 4, increasing=True).T
    return float(np.abs(tabulated - _minus_ln_q(molecule, kelvin)).max())
