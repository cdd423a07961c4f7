"""The exponential of the kernels against the C library's."""

from __future__ import annotations

import numpy as np
import pytest
from numba import njit

from cubeforge.excitation.kernels import exp_parts


@njit
def both(x: np.ndarray, exp: np.ndarray, expm1: np.ndarray) -> None:
    for i in range(x.size):
        p, s = exp_parts(x[i])
        exp[i] = s * p + s
        expm1[i] = s * p + (s - 1.0)


@pytest.mark.parametrize(
    "x",
    [
        np.linspace(-700.0, 700.0, 100001),
        np.linspace(-1.0, 1.0, 100001),
        -np.geomspace(1e-300, 1.0, 10001),
        np.arange(-1009, 1010) * 0.5 * np.log(2.0),
        np.array([0.0, -0.0]),
    ],
    ids=["whole range", "around zero", "towards zero", "steps of ln 2 / 2", "zero"],
)
def test_exp_and_expm1(x: np.ndarray) -> None:
    exp, expm1 = np.empty_like(x), np.empty_like(x)
    both(x, exp, expm1)
    np.testing.assert_allclose(exp, np.exp(x), rtol=5e-16)
    np.testing.assert_allclose(expm1, np.expm1(x), rtol=5e-16)
