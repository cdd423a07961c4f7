"""Core time of a whole render against flattening and numpy, in one run: ``python tests/benchmarks/end_to_end.py``.

The yardstick is what a careful user of numpy would do: flatten the hierarchy to the finest grid of the region, then go
through it slab by slab along the line of sight, over all channels, in float32. Both give the same cube (channel
centres, one ray through each finest cell, constant velocity in a cell), which is checked. Two snapshots: a uniform
grid, and three levels whose finest fills 2 % of the volume.
"""

from __future__ import annotations

import argparse
import resource
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np

import cubeforge
from cubeforge.engine.patches import PatchMaker
from cubeforge.engine.worker import TileWorker
from cubeforge.mesh.hierarchy import Hierarchy, build_hierarchy
from cubeforge.snapshots.amrex_write import write_amrex

PC = 3.0856775814913673e18
CHANNELS = 100


def boxes(first: int, cells: int, block: int) -> tuple[Any, Any]:
    """A cube of `cells` a side from `first` on, in blocks."""
    lo = np.stack(np.meshgrid(*[np.arange(first, first + cells, block)] * 3, indexing="ij"), -1).reshape(
        -1, 3
    )
    return lo, np.full_like(lo, block)


def hierarchies(side: int) -> dict[str, Hierarchy]:
    """The two snapshots; in the second the finest level fills (1/4)^3 = 1.6 % to 2 % of the volume."""
    cell = PC / side
    uniform = build_hierarchy([0, 0, 0], [cell] * 3, [side] * 3, [], [boxes(0, side, 32)])
    coarse = side // 2
    levels = [boxes(0, coarse, 16), boxes(coarse // 2, coarse, 16), boxes(int(1.5 * coarse), coarse, 16)]
    nested = build_hierarchy([0, 0, 0], [PC / coarse] * 3, [coarse] * 3, [2, 2], levels)
    return {"uniform": uniform, "three levels": nested}


def write(path: Path, mesh: Hierarchy) -> None:
    """Smooth density and velocity with some noise."""
    rng = np.random.default_rng(3)

    def cells(patch: int) -> dict[str, Any]:
        level = mesh.level[patch]
        axes = [(mesh.lo[patch][a] + np.arange(mesh.shape[patch][a]) + 0.5) * mesh.cell_size[level][a] / PC
                for a in range(3)]  # fmt: skip
        x, y, z = np.meshgrid(*axes, indexing="ij")
        r2 = (x - 0.5) ** 2 + (y - 0.5) ** 2 + (z - 0.5) ** 2
        rho = 2e-21 / (1 + r2 / 0.02) * np.exp(0.3 * rng.normal(size=x.shape))
        return {
            "density": rho,
            "x_velocity": 6e4 * np.sin(9 * y + 4 * z),
            "y_velocity": 6e4 * np.sin(7 * z + 5 * x),
            "z_velocity": 8e4 * np.sin(8 * x + 6 * y + 3 * z),
        }

    fields = ("density", "x_velocity", "y_velocity", "z_velocity")
    write_amrex(path, mesh, fields, cells, real="f4")


def job_for(folder: Path, name: str, mesh: Hierarchy) -> Any:
    """Along an axis, one pixel a finest cell."""
    return cubeforge.parse_job(
        {
            "snapshot": {"path": f"{name}.plotfile",
                         "units": {"length": "1 cm", "density": "1 g/cm3", "velocity": "1 cm/s"}},
            "gas": {"density": "density", "temperature": "15 K",
                    "velocity": ["x_velocity", "y_velocity", "z_velocity"], "microturbulence": {"sigma": "0.1 km/s"}},
            "line": {"molecule": "13CO", "transition": "1-0", "abundance": 1.5e-6},
            "view": {"toward": "-z", "north": "+y", "distance": "140 pc", "pixel": f"{mesh.finest_cell[0]:.17g} cm"},
            "channels": {"first": "-2.475 km/s", "last": "2.475 km/s", "width": "0.05 km/s", "sampling": "centre"},
            "march": {"reconstruction": "constant"},
            "rays": {"per_side": 1},
            "output": {"cube": f"{name}.zarr"},
        },
        folder=folder,
    )  # fmt: skip


def numpy_cube(setup: Any) -> Any:
    """The yardstick: read all, flatten, integrate slab by slab."""
    mesh, snapshot = setup.hierarchy, setup.snapshot
    grid = {name: np.empty(tuple(mesh.domain[-1]), dtype=np.float32) for name in ("density", "z_velocity")}
    edge_lo, edge_hi = mesh.edges()
    for patch in range(mesh.patches):
        data = snapshot.read(patch, tuple(grid))
        for name, array in grid.items():
            fine = data[name]
            for axis, ratio in enumerate(mesh.scale[mesh.level[patch]]):
                fine = np.repeat(fine, ratio, axis=axis)
            array[tuple(slice(a, b) for a, b in zip(edge_lo[patch], edge_hi[patch], strict=True))] = fine
    n_mol = grid["density"] * np.float32(setup.gas.molecules_per_gram)
    kappa, emis = (float(c[0]) for c in setup.excitation.coefficients(np.ones(1), np.full(1, 15.0)))
    b = np.float32(setup.gas.line_width(np.array(15.0), setup.molecule.mass))
    step = np.float32(mesh.finest_cell[2])
    v = setup.band.velocities.astype(np.float32)
    bright = np.zeros((len(v), *n_mol.shape[:2]), dtype=np.float32)
    through = np.ones_like(bright)
    for k in reversed(range(n_mol.shape[2])):
        along = -grid["z_velocity"][:, :, k]
        profile = np.exp(-(((v[:, None, None] - along) / b) ** 2)) / (np.sqrt(np.float32(np.pi)) * b)
        tau = profile * (n_mol[:, :, k] * (np.float32(kappa) * step))
        lost = -np.expm1(-tau)
        bright += through * lost * np.float32(emis / kappa)
        through *= 1.0 - lost
    return np.swapaxes(bright, 1, 2)


def cpu(function: Any) -> tuple[float, Any]:
    """Core seconds of this process."""
    began = resource.getrusage(resource.RUSAGE_SELF)
    result = function()
    ended = resource.getrusage(resource.RUSAGE_SELF)
    return ended.ru_utime + ended.ru_stime - began.ru_utime - began.ru_stime, result


def where_time_goes(setup: Any) -> dict[str, float]:
    """Core seconds of reading, of patches, of reading and patches and march."""
    fields, patches = setup.gas.required_fields(), np.unique(setup.scene.patch)
    reading, _ = cpu(lambda: [setup.snapshot.read(int(p), fields) for p in patches])
    maker = PatchMaker(setup, 0.0, 0)
    making, _ = cpu(lambda: [maker.make(int(p)) for p in patches])
    worker = TileWorker(setup)
    tiles = range(worker.plan.tiles)
    whole, results = cpu(lambda: [worker.render(tile) for tile in tiles])
    crossings = sum(result.statistics[1] for result in results)
    cells = float(setup.hierarchy.cells(patches).sum())
    return {"reading": reading, "patches": making - reading, "march": whole - making, "cells": cells,
            "crossings": crossings}  # fmt: skip


def main() -> None:
    """Print core seconds and ratios."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--side", type=int, default=128, help="finest cells a side of the uniform grid")
    side = parser.parse_args().side
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for label, mesh in hierarchies(side).items():
            write(folder / f"{label}.plotfile", mesh)
            job = job_for(folder, label, mesh)
            setup = cubeforge.build_setup(job)
            TileWorker(setup).render(0)  # kernels compiled or loaded
            seconds, outcome = cpu(lambda job=job: cubeforge.render(job, workers=0))
            began = time.perf_counter()
            slow, wanted = cpu(lambda setup=setup: numpy_cube(setup))
            elapsed = time.perf_counter() - began
            found = np.asarray(cubeforge.open_cube(outcome.cube).intensity[:])
            apart = np.abs(found - wanted).max() / wanted.max()
            parts = where_time_goes(setup)
            print(f"{label}: finest grid {mesh.domain[-1].tolist()}, {parts['cells']:.3g} cells, "
                  f"{parts['crossings']:.3g} crossings, {CHANNELS} channels")  # fmt: skip
            print(f"  render {seconds:.2f} core s; numpy {slow:.2f} core s ({elapsed:.1f} s); "
                  f"ratio {slow / seconds:.0f}; cubes differ by {apart:.1e} of the peak")  # fmt: skip
            rest = seconds - parts["reading"] - parts["patches"] - parts["march"]
            print(f"  reading {parts['reading']:.2f}, patches {parts['patches']:.2f} "
                  f"({1e9 * parts['patches'] / parts['cells']:.0f} ns a cell), march {parts['march']:.2f} "
                  f"({1e9 * parts['march'] / parts['crossings']:.0f} ns a crossing), writing and the rest {rest:.2f}",
                  flush=True)  # fmt: skip


if __name__ == "__main__":
    main()
