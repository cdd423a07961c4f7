"""What every way of finding level populations gives to the transfer."""

from __future__ import annotations

from typing import Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt

from cubeforge.errors import CubeforgeError
from cubeforge.molecules.model import Line

FloatArray = npt.NDArray[np.float64]


class ExcitationError(CubeforgeError):
    """Level populations cannot be found for the gas at hand."""


@runtime_checkable
class Excitation(Protocol):
    """Opacity and emission of one line from the state of the gas; safe from several threads at once."""

    @property
    def line(self) -> Line:
        """The line."""
        ...

    def coefficients(self, n_mol: FloatArray, temperature: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Line coefficients of cells, integrated over velocity.

        Parameters
        ----------
        n_mol : ndarray, any shape, float64
            Number density of the molecule, cm^-3.
        temperature : ndarray, same shape, float64
            Kinetic temperature, K.

        Returns
        -------
        kappa : ndarray, same shape, float64
            Opacity integrated over velocity, 1/s: the absorption coefficient at velocity v is
            kappa * phi(v), with phi in (cm/s)^-1 and of unit integral.
        emis : ndarray, same shape, float64
            Emission minus what the background would need to stay as it is, j - kappa * J(T_bg), integrated
            over velocity, K/s (Rayleigh-Jeans kelvins: c^2 / 2 k nu^2 times the intensity).

        Raises
        ------
        ExcitationError
            Cells outside the range that this excitation is known for; nothing is extrapolated.
        """
        ...

    def caveats(self, t_min: float, t_max: float) -> list[str]:
        """What a user should know about results between two temperatures (K), in full sentences."""
        ...
