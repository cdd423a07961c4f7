"""Time per cell of LTE coefficients, against a plain numpy pass in the same run."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from typing import Any

import numpy as np

from cubeforge.excitation import LteExcitation
from cubeforge.molecules import build_rotor
from cubeforge.quantities import K_B, C, H, planck, rayleigh_jeans_factor

SHAPE = (64, 64, 64)


def gas() -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(0)
    return 10.0 ** rng.uniform(-6, 0, SHAPE), np.exp(rng.uniform(math.log(5.0), math.log(500.0), SHAPE))


def numpy_pass(
    lte: LteExcitation, n_mol: np.ndarray, temperature: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """The same result in array expressions, ln Q interpolated linearly in ln T by numpy."""
    line, nu = lte.line, lte.line.frequency
    grid = np.linspace(math.log(1.0), math.log(1000.0), 4000)
    ln_q = np.interp(np.log(temperature), grid, lte.molecule.ln_partition(np.exp(grid)))
    ground = n_mol * np.exp(-ln_q - line.energy_lower / (K_B * temperature))
    x = H * nu / K_B / temperature
    kappa = C**3 / (8 * math.pi * nu**3) * line.einstein_a * line.weight_upper * ground * -np.expm1(-x)
    background = rayleigh_jeans_factor(nu) * planck(nu, lte.background)
    return kappa, kappa * (H * nu / K_B / np.expm1(x) - background)


def best(run: Callable[[], Any], rounds: int = 7) -> float:
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        run()
        times.append(time.perf_counter() - start)
    return min(times)


def test_lte_coefficients(benchmark: Any) -> None:
    molecule = build_rotor("CO")
    lte = LteExcitation(molecule, molecule.transition("1-0"), 2.725)
    n_mol, temperature = gas()
    kappa, emis = benchmark(lte.coefficients, n_mol, temperature)
    expected, expected_emis = numpy_pass(lte, n_mol, temperature)
    np.testing.assert_allclose(kappa, expected, rtol=1e-5)
    np.testing.assert_allclose(emis, expected_emis, rtol=1e-5)
    ours = best(lambda: lte.coefficients(n_mol, temperature))
    plain = best(lambda: numpy_pass(lte, n_mol, temperature))
    benchmark.extra_info["ns_per_cell"] = ours / n_mol.size * 1e9
    benchmark.extra_info["numpy_ns_per_cell"] = plain / n_mol.size * 1e9
    benchmark.extra_info["numpy_over_ours"] = plain / ours
    assert ours < plain / 2
