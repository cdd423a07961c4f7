"""The march and the same march in C, on the same cells: equal to 1e-5 of the peak, and timed.

``python tests/benchmarks/march_yardstick.py`` prints the whole table.
"""

from __future__ import annotations

import shutil
import sys
from pathlib import Path

import numpy as np
import pytest

from cubeforge.transfer.channels import make_band

sys.path.insert(0, str(Path(__file__).parent))
import march_yardstick as yardstick

SIDE = 64
CASES = [(toward, depth) for toward in ([0.0, 0.0, -1.0], [0.35, -0.25, -0.9]) for depth in yardstick.DEPTHS]


@pytest.mark.skipif(shutil.which("gcc") is None, reason="gcc is not installed")
@pytest.mark.parametrize(("toward", "depth"), CASES)
def test_march_against_c(benchmark, tmp_path, toward, depth):
    mesh = yardstick.uniform_grid(SIDE, yardstick.PATCH)
    band = make_band(-1e6, 1e4, 200, sampling="centre", narrowest=1e3, most_crossings=3 * SIDE)
    view, scene = yardstick.make_view(mesh, toward)
    patches = yardstick.make_patches(mesh, band, 30, yardstick.DEPTHS[depth])
    reference = yardstick.compile_reference(tmp_path)
    _, crossings, image = benchmark.pedantic(yardstick.run_numba, (view, scene, band, patches), rounds=3)
    benchmark.extra_info["crossings"] = crossings
    for function in (reference.march_rays, reference.march_packets):
        _, met, wanted = yardstick.run_c(function, SIDE, view, scene, band, patches)
        assert 0 < met <= crossings
        np.testing.assert_allclose(image, wanted, rtol=0.0, atol=1e-5 * np.abs(wanted).max())
