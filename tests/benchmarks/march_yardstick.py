"""The numba march against the same march in C, in one run: ``python tests/benchmarks/march_yardstick.py``.

Prints ns per crossing, everything included, and ratios. Needs gcc.
"""

from __future__ import annotations

import argparse
import ctypes
import subprocess
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np

from cubeforge.mesh.hierarchy import Hierarchy, build_hierarchy
from cubeforge.transfer.channels import Band, make_band
from cubeforge.transfer.gather_kernels import CROSSINGS, STATISTICS
from cubeforge.transfer.march_kernels import march_tile
from cubeforge.transfer.optical import LineCells, pack_cells
from cubeforge.transfer.pointers import addresses
from cubeforge.transfer.scene import Region, Scene, build_scene
from cubeforge.transfer.subrays import fixed_sampling
from cubeforge.transfer.view import View, covering_size, sky_basis

SIDE = 128
PATCH = 32
CHANNELS = 200
WINDOWS = (8, 30, 100)
DEPTHS = {"thin": (1e-4, 1e-2), "moderate": (1e-2, 0.8), "thick": (0.1, 30.0)}
"""Range of the line-centre depth of a cell, evenly in its logarithm."""


class CScene(ctypes.Structure):
    """Mirror of the C structure."""

    _fields_ = [
        ("n", ctypes.c_int), ("b", ctypes.c_int), ("channels", ctypes.c_int),
        ("patches", ctypes.POINTER(ctypes.c_void_p)),
        ("direction", ctypes.c_double * 3), ("start", ctypes.c_double * 3),
        ("step_x", ctypes.c_double * 3), ("step_y", ctypes.c_double * 3), ("cut", ctypes.c_double),
        ("nx", ctypes.c_int), ("ny", ctypes.c_int),
    ]  # fmt: skip


def compile_reference(folder: Path) -> Any:
    """Compile the C reference on the spot."""
    library = folder / "march_reference.so"
    source = Path(__file__).with_name("march_reference.c")
    subprocess.run(
        ["gcc", "-O3", "-march=native", "-shared", "-fPIC", "-o", library, source, "-lm"], check=True
    )
    loaded = ctypes.CDLL(str(library))
    for name in ("march_rays", "march_packets"):
        getattr(loaded, name).restype = ctypes.c_long
    return loaded


def uniform_grid(side: int, patch: int) -> Hierarchy:
    """One level of cubic patches in x, y, z order; cells of size 1."""
    lo = np.stack(np.meshgrid(*[np.arange(0, side, patch)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    return build_hierarchy([0, 0, 0], [1, 1, 1], [side] * 3, [], [(lo, np.full_like(lo, patch))])


def make_patches(mesh: Hierarchy, band: Band, window: int, depths: tuple[float, float]) -> list[Any]:
    """Cells of a smooth velocity field with some noise; a full window is `window` channels wide."""
    rng = np.random.default_rng(1)
    b = window / (2.0 * band.cut) * band.width
    waves = rng.normal(0, 0.06, (3, 4))
    patches = []
    for lo, shape in zip(mesh.lo, mesh.shape, strict=True):
        x = np.stack(np.meshgrid(*[a + np.arange(n) for a, n in zip(lo, shape, strict=True)], indexing="ij"))
        v = 2.0 * b * sum(np.sin(np.tensordot(wave, x, 1)) for wave in waves.T) / 2.0
        depth = np.exp(rng.uniform(*np.log(depths), v.shape))
        kappa = depth * np.sqrt(np.pi) * b
        energy = kappa * rng.uniform(5.0, 20.0, v.shape)
        width = (b * rng.uniform(0.9, 1.1, v.shape)) ** 2
        cells, _ = pack_cells(
            np.ones(v.shape), v, None, [LineCells(kappa, energy, width, 1.0, 0.0)], band, 1.0
        )
        patches.append(cells)
    return patches


def make_view(mesh: Hierarchy, toward: list[float]) -> tuple[View, Scene]:
    """One ray a cell; the image a whole number of packets."""
    n, right, up = sky_basis(np.array(toward), np.array([0.0, 1.0, 0.0]))
    nx, ny = (-(-size // 4) * 4 for size in covering_size((right, up), mesh.extent, 1.0))
    view = View(n, right, up, mesh.centre, 1.0, nx, ny)
    return view, build_scene(mesh, view, Region())


def run_numba(view: View, scene: Scene, band: Band, patches: list[Any]) -> tuple[float, int, Any]:
    """Seconds, crossings, image."""
    image = np.zeros((band.count, view.ny, view.nx), dtype=np.float32)
    column, contrast = np.zeros((2, view.ny, view.nx))
    statistics = np.zeros(len(STATISTICS))
    rays = fixed_sampling(1, np.ones(len(scene.scale)), False)
    address = addresses([patches[p] for p in scene.patch])
    began = time.perf_counter()
    march_tile(
        np.array([0, view.nx, 0, view.ny]), rays.lattice, rays.least, rays.most, rays.limit, scene.start, scene.step_x,
        scene.step_y, scene.direction, scene.box, scene.sphere, scene.cell, scene.lo, scene.hi, scene.level,
        scene.scale, scene.rect, address, 1, np.zeros(1), band.nodes, band.weights, band.count, band.reach, band.cut,
        image, column, contrast, statistics,
    )  # fmt: skip
    return time.perf_counter() - began, int(statistics[CROSSINGS]), image


def run_c(
    function: Any, side: int, view: View, scene: Scene, band: Band, patches: list[Any]
) -> tuple[float, int, Any]:
    """Seconds, crossings, image."""
    pointers = (ctypes.c_void_p * len(patches))(*[p.ctypes.data for p in patches])
    triple = ctypes.c_double * 3
    given = CScene(
        side, PATCH, band.count, ctypes.cast(pointers, ctypes.POINTER(ctypes.c_void_p)), triple(*scene.direction),
        triple(*scene.start), triple(*scene.step_x), triple(*scene.step_y), band.cut, view.nx, view.ny,
    )  # fmt: skip
    image = np.zeros((band.count, view.ny, view.nx), dtype=np.float32)
    began = time.perf_counter()
    crossings = function(ctypes.byref(given), image.ctypes.data_as(ctypes.c_void_p))
    return time.perf_counter() - began, int(crossings), image


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repeat", type=int, default=3)
    parser.add_argument("--quick", action="store_true", help="one window only")
    options = parser.parse_args()
    mesh = uniform_grid(SIDE, PATCH)
    band = make_band(-1e6, 1e4, CHANNELS, sampling="centre", narrowest=1e3, most_crossings=3 * SIDE)
    with tempfile.TemporaryDirectory() as folder:
        reference = compile_reference(Path(folder))
        print("view      window depth      numba  C rays  C packets  numba/C   difference")
        for name, toward in (("axis", [0.0, 0.0, -1.0]), ("oblique", [0.35, -0.25, -0.9])):
            view, scene = make_view(mesh, toward)
            for window in WINDOWS[1:2] if options.quick else WINDOWS:
                for depth, limits in DEPTHS.items():
                    patches = make_patches(mesh, band, window, limits)
                    runs: dict[str, list[float]] = {"numba": [], "rays": [], "packets": []}
                    for _ in range(options.repeat):
                        seconds, crossings, image = run_numba(view, scene, band, patches)
                        runs["numba"].append(seconds)
                        for form in ("rays", "packets"):
                            seconds, _, other = run_c(
                                getattr(reference, f"march_{form}"), SIDE, view, scene, band, patches
                            )
                            runs[form].append(seconds)
                    best = {form: 1e9 * min(times) / crossings for form, times in runs.items()}
                    ratio = best["numba"] / min(best["rays"], best["packets"])
                    apart = float(np.abs(image - other).max() / np.abs(other).max())
                    print(f"{name:9} {window:4}   {depth:9} {best['numba']:6.1f} {best['rays']:7.1f} "
                          f"{best['packets']:9.1f} {ratio:8.2f}     {apart:.1e}", flush=True)  # fmt: skip


if __name__ == "__main__":
    main()
