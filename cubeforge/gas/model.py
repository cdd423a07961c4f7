"""From stored fields to the state of the gas in each cell, in cgs."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from cubeforge.errors import GasError
from cubeforge.gas.checks import BadCells, BoolArray, FloatArray, find_bad, refuse
from cubeforge.gas.kernels import INERT_TEMPERATURE, gas_state
from cubeforge.quantities import K_B, M_H


@dataclass(frozen=True)
class StoredField:
    """A field of the snapshot and what one of its units is in cgs."""

    name: str
    factor: float = 1.0

    def __post_init__(self) -> None:
        if not (math.isfinite(self.factor) and self.factor > 0.0):
            raise GasError(
                f"field {self.name}: one stored unit is {self.factor} in cgs; wanted a number above 0"
            )


@dataclass(frozen=True)
class Constant:
    """The same value, in cgs, in every cell."""

    value: float

    def __post_init__(self) -> None:
        if not math.isfinite(self.value):
            raise GasError(f"constant {self.value} is not finite")


Source = StoredField | Constant
Vector = tuple[Source, Source, Source]


def microturbulence_b(
    *, sigma: float | None = None, b: float | None = None, fwhm: float | None = None
) -> float:
    """Doppler parameter of a Gaussian velocity spread given as one of its widths, in the same unit.

    b = sqrt(2) sigma = FWHM / (2 sqrt(ln 2)).

    Raises
    ------
    GasError
        None or several are given, or the width is negative or not finite.
    """
    given = {name: w for name, w in (("sigma", sigma), ("b", b), ("fwhm", fwhm)) if w is not None}
    if len(given) != 1:
        found = " and ".join(given) or "none"
        raise GasError(f"microturbulence: found {found}; wanted exactly one of sigma, b, fwhm")
    ((name, width),) = given.items()
    if not (math.isfinite(width) and width >= 0.0):
        raise GasError(f"microturbulence: {name} = {width}; wanted 0 or more")
    return width * {"sigma": math.sqrt(2.0), "b": 1.0, "fwhm": 0.5 / math.sqrt(math.log(2.0))}[name]


@dataclass(frozen=True)
class GasState:
    """State of the gas in the cells of a patch; every array has the patch's shape, float64, cgs.

    Attributes
    ----------
    density : g cm^-3; 0 in mended cells.
    temperature : K.
    velocity : cm/s along x, y, z.
    n_molecule : molecules of the traced species, cm^-3; 0 in mended cells.
    mended : what was wrong with leaf cells that were made transparent; empty if nothing.
    mended_cells : how many leaf cells those are.
    """

    density: FloatArray
    temperature: FloatArray
    velocity: tuple[FloatArray, FloatArray, FloatArray]
    n_molecule: FloatArray
    mended: tuple[BadCells, ...] = ()
    mended_cells: int = 0


@dataclass(frozen=True)
class GasModel:
    """Where each quantity comes from, and the constants that turn mass into molecules.

    Attributes
    ----------
    density : mass density.
    temperature, pressure : kinetic temperature, or the pressure it follows from; exactly one of them.
    velocity, momentum : velocity, or momentum per volume; exactly one of them.
    hydrogen_fraction : mass fraction X_H of hydrogen, all of it molecular.
    mean_molecular_weight : mass per particle in units of the hydrogen atom's; serves pressure -> temperature
    only. microturbulence_b : Doppler parameter of unresolved motion, cm/s.
    abundance : molecules of the traced species per H2.
    bad_cells : "stop" at a leaf cell with a bad value, or "clear": make it transparent and report it.

    Raises
    ------
    GasError
        Two sources, or none, for one quantity; numbers out of range; nothing stored at all.
    """

    density: Source
    temperature: Source | None = None
    velocity: Vector | None = None
    momentum: Vector | None = None
    pressure: Source | None = None
    hydrogen_fraction: float = 0.71
    mean_molecular_weight: float = 2.33
    microturbulence_b: float = 0.0
    abundance: float = 1e-4
    bad_cells: Literal["stop", "clear"] = "stop"

    def __post_init__(self) -> None:
        for one, other in (("temperature", "pressure"), ("velocity", "momentum")):
            given = [name for name in (one, other) if getattr(self, name) is not None]
            if len(given) != 1:
                raise GasError(f"gas: found {' and '.join(given) or 'none'} of {one} and {other}; wanted one")
        ranges: dict[str, tuple[float, float]] = {
            "hydrogen_fraction": (0.0, 1.0),
            "mean_molecular_weight": (0.0, math.inf),
            "abundance": (0.0, math.inf),
        }
        for name, (low, high) in ranges.items():
            value = getattr(self, name)
            if not (low < value <= high and math.isfinite(value)):
                raise GasError(f"gas: {name} = {value}; wanted a number above {low:g} and up to {high:g}")
        if not (math.isfinite(self.microturbulence_b) and self.microturbulence_b >= 0.0):
            raise GasError(f"gas: microturbulence_b = {self.microturbulence_b} cm/s; wanted 0 or more")
        if self.bad_cells not in ("stop", "clear"):
            raise GasError(f'gas: bad_cells = {self.bad_cells!r}; wanted "stop" or "clear"')
        for name in ("density", "temperature", "pressure"):
            source = getattr(self, name)
            if isinstance(source, Constant) and source.value <= 0.0:
                raise GasError(f"gas: {name} is constant at {source.value}; wanted a number above 0")
        if not self.required_fields():
            raise GasError("gas: every quantity is a constant; wanted at least one stored field")

    @property
    def _sources(self) -> tuple[Source, ...]:
        """Density, temperature or pressure, three components of velocity or momentum."""
        thermal = self.pressure if self.temperature is None else self.temperature
        motion = self.momentum if self.velocity is None else self.velocity
        assert thermal is not None
        assert motion is not None
        return (self.density, thermal, *motion)

    def required_fields(self) -> tuple[str, ...]:
        """Stored fields that `state` needs, each once."""
        names = [source.name for source in self._sources if isinstance(source, StoredField)]
        return tuple(dict.fromkeys(names))

    @property
    def molecules_per_gram(self) -> float:
        """Molecules of the traced species per gram of gas: abundance X_H / (2 m_H)."""
        return self.abundance * self.hydrogen_fraction / (2.0 * M_H)

    def n_h2(self, density: FloatArray) -> FloatArray:
        """Hydrogen molecules per volume, cm^-3: X_H rho / (2 m_H), all hydrogen being molecular."""
        return density * (self.hydrogen_fraction / (2.0 * M_H))

    def line_width(self, temperature: FloatArray, molecule_mass: float) -> FloatArray:
        """Doppler parameter b = sqrt(2 k T / m + b_turb^2), cm/s (Rybicki & Lightman 1979, eq. 10.69-10.70).

        `molecule_mass` in g.
        """
        width: FloatArray = np.sqrt((2.0 * K_B / molecule_mass) * temperature + self.microturbulence_b**2)
        return width

    def state(
        self,
        raw: Mapping[str, npt.NDArray[np.floating[Any]]],
        leaf: BoolArray | None = None,
        where: str = "",
    ) -> GasState:
        """Turn stored arrays into the state of the gas.

        Parameters
        ----------
        raw : mapping
            Field -> array; those of `required_fields`, all of one shape.
        leaf : ndarray of bool, optional
            Leaf cells, of that shape; bad values elsewhere are no matter, but such cells are left without
            gas.
        where : str
            Patch and level, for the message.

        Raises
        ------
        GasError
            A field is not there or of another shape; under the policy "stop", a leaf cell has a bad value.
        """
        arrays = self._arrays(raw, where)
        shape = next(a.shape for a in arrays if a is not None)
        if leaf is not None and leaf.shape != shape:
            raise GasError(f"{where or 'gas'}: leaf mask of shape {leaf.shape}, fields of {shape}")
        # Readers give Fortran order (x fastest); whatever they give is kept, since turning it round costs most.
        order: Literal["C", "F"] = "F" if all(a is None or a.flags.f_contiguous for a in arrays) else "C"
        dtype = np.float32 if all(a is None or a.dtype == np.float32 for a in arrays) else np.float64
        inputs, steps, factors = [], [], []
        for source, array in zip(self._sources, arrays, strict=True):
            # a constant is an array of one 1, so that its value is not rounded to float32
            inputs.append(np.ones(1, dtype) if array is None else np.asarray(array, dtype).ravel(order=order))
            steps.append(0 if array is None else 1)
            factors.append(source.value if isinstance(source, Constant) else source.factor)
        state = np.empty((6, math.prod(shape)))
        bad_leaves, bad = gas_state(
            tuple(inputs),
            np.array(steps),
            np.array(factors),
            self.temperature is None,
            self.velocity is None,
            np.empty(0, dtype=bool) if leaf is None else leaf.ravel(order=order),
            self.molecules_per_gram,
            self.mean_molecular_weight * M_H / K_B,
            state,
        )
        density, temperature, vx, vy, vz, molecules = (row.reshape(shape, order=order) for row in state)
        result = GasState(density, temperature, (vx, vy, vz), molecules)
        return self._mend(result, leaf, where, bad_leaves) if bad else result

    def _arrays(
        self, raw: Mapping[str, npt.NDArray[np.floating[Any]]], where: str
    ) -> list[npt.NDArray[np.floating[Any]] | None]:
        names = [source.name if isinstance(source, StoredField) else None for source in self._sources]
        lacking = [name for name in self.required_fields() if name not in raw]
        if lacking:
            raise GasError(
                f"{where or 'gas'}: needs {', '.join(lacking)}; found {', '.join(raw) or 'no fields'}"
            )
        shapes = {name: raw[name].shape for name in self.required_fields()}
        if len(set(shapes.values())) > 1:
            raise GasError(f"{where or 'gas'}: fields differ in shape: {shapes}")
        return [None if name is None else raw[name] for name in names]

    def _mend(self, state: GasState, leaf: BoolArray | None, where: str, bad_leaves: int) -> GasState:
        names = [s.name if isinstance(s, StoredField) else "constant" for s in self._sources]
        derived = f"temperature (from {names[1]} and {names[0]})" if self.temperature is None else names[1]
        findings, bad = find_bad(
            [
                (names[0], state.density, "negative"),
                (derived, state.temperature, "not positive"),
                *((name, v, "") for name, v in zip(names[2:], state.velocity, strict=True)),
            ],
            leaf,
        )
        if findings and self.bad_cells == "stop":
            refuse(findings, where)
        state.density[bad] = 0.0
        state.n_molecule[bad] = 0.0
        state.temperature[bad & ~(np.isfinite(state.temperature) & (state.temperature > 0.0))] = (
            INERT_TEMPERATURE
        )
        for component in state.velocity:
            component[bad & ~np.isfinite(component)] = 0.0
        return GasState(
            state.density, state.temperature, state.velocity, state.n_molecule, findings, bad_leaves
        )
