"""A tabulated partition function, interpolated between its temperatures and never beyond them."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.errors import MoleculeError

FloatArray = npt.NDArray[np.float64]


def frozen(array: Any, dtype: Any = np.float64) -> Any:
    """A read-only copy of `array`."""
    copy = np.array(array, dtype=dtype)
    copy.setflags(write=False)
    return copy


@dataclass(frozen=True, eq=False)
class PartitionTable:
    """Q(T) as a catalogue lists it, interpolated by a natural cubic spline of ln Q in ln T.

    Attributes
    ----------
    temperatures, values : ndarray, shape (n,), float64
        Kelvins, ascending, and Q; at least 3 of them.

    Raises
    ------
    MoleculeError
        Fewer than 3 points, temperatures out of order, or a number that is not positive.
    """

    temperatures: FloatArray
    values: FloatArray

    def __post_init__(self) -> None:
        for name in ("temperatures", "values"):
            object.__setattr__(self, name, frozen(getattr(self, name)))
        shape = self.temperatures.shape
        if len(shape) != 1 or shape[0] < 3 or self.values.shape != shape:
            raise MoleculeError(
                f"partition function: {shape} temperatures and {self.values.shape} values; wanted two lists "
                "of equal length, 3 or more"
            )
        both = np.concatenate([self.temperatures, self.values])
        if not np.all(np.isfinite(both) & (both > 0)) or np.any(np.diff(self.temperatures) <= 0):
            raise MoleculeError("partition function: temperatures must ascend, and all numbers be positive")

    @cached_property
    def _curvature(self) -> FloatArray:
        """Second derivatives of ln Q in ln T at the nodes, zero at both ends."""
        x, y = np.log(self.temperatures), np.log(self.values)
        step = np.diff(x)
        matrix = np.diag(2.0 * (step[:-1] + step[1:]))
        matrix += np.diag(step[1:-1], 1) + np.diag(step[1:-1], -1)
        inner = np.linalg.solve(matrix, 6.0 * np.diff(np.diff(y) / step))
        return np.concatenate([[0.0], inner, [0.0]])

    def ln_q(self, temperature: FloatArray, name: str = "partition function") -> FloatArray:
        """Interpolate ln Q; same shape as `temperature`.

        Raises
        ------
        MoleculeError
            A temperature outside the table, with its range.
        """
        low, high = self.temperatures[0], self.temperatures[-1]
        inside = (temperature >= low) & (temperature <= high)
        if not np.all(inside):
            first = np.asarray(temperature)[~inside].flat[0]
            raise MoleculeError(
                f"{name}: the partition function is tabulated from {low:g} to {high:g} K, not at {first:g} K"
            )
        x, y, bend = np.log(self.temperatures), np.log(self.values), self._curvature
        at = np.log(temperature)
        left = np.clip(np.searchsorted(x, at, side="right") - 1, 0, len(x) - 2)
        step = x[left + 1] - x[left]
        b = (at - x[left]) / step
        a = 1.0 - b
        cubic = ((a**3 - a) * bend[left] + (b**3 - b) * bend[left + 1]) * step**2 / 6.0
        result: FloatArray = a * y[left] + b * y[left + 1] + cubic
        return result
