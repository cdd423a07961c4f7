"""The demonstration snapshot: a made-up molecular cloud, refined around its dense gas."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import numpy.typing as npt

from cubeforge.errors import SnapshotError
from cubeforge.mesh.hierarchy import build_hierarchy
from cubeforge.quantities import KM_S, M_H, parse
from cubeforge.snapshots.amrex_write import write_amrex
from cubeforge.snapshots.demo_cloud import (
    SIDE_PC,
    Array,
    Cells,
    Cloud,
    make_cloud,
    number_density,
    temperature,
    velocity,
)
from cubeforge.snapshots.memory import MemorySnapshot

BLOCK = 16
"""Cells a side of every patch."""
FIELDS = ("density", "temperature", "x_velocity", "y_velocity", "z_velocity")
UNITS = {"length": "cm", "time": "s", "density": "g/cm3", "temperature": "K"} | dict.fromkeys(
    FIELDS[2:], "cm/s"
)
MASS_PER_H2 = 2.8 * M_H
"""Gas mass per H2, helium included, in g (Kauffmann et al. 2008, appendix A)."""
JEANS = 600.0 * (SIDE_PC / 32) ** 2
"""Cells with a larger n(H2) dx^2 (cm-3 pc2) are refined: a bound on cells per Jeans length at a given
temperature, as in Truelove et al. 1997."""

Corners = npt.NDArray[np.int64]
Mask = npt.NDArray[np.bool_]


def demo_snapshot(*, base: int = 32, levels: int = 4, seed: int = 7) -> MemorySnapshot:
    """Make the demonstration cloud in memory, in cgs units.

    Parameters
    ----------
    base : int
        Cells a side of level 0, a power of two from 16 to 128.
    levels : int
        Levels, each refined by 2 where a cell of the one below holds too much mass.
    seed : int
        Another seed, another cloud.

    Returns
    -------
    MemorySnapshot
        Fields density (g/cm3), temperature (K), x_velocity, y_velocity, z_velocity (cm/s). Covered
        coarse cells hold the mean of the finer ones, by mass but for the density.

    Raises
    ------
    SnapshotError
        Unusable `base` or `levels`.
    """
    if base not in (16, 32, 64, 128) or levels < 1:
        raise SnapshotError(
            f"a demo of base {base} and {levels} levels; base is 16, 32, 64 or 128, levels from 1"
        )
    cloud = make_cloud(seed)
    blocks = _place_blocks(cloud, base, levels)
    values = [_fill(cloud, corners, base << level) for level, corners in enumerate(blocks)]
    for level in range(len(blocks) - 1, 0, -1):
        _restrict(blocks[level], values[level], blocks[level - 1], values[level - 1])
    side = parse(f"{SIDE_PC} pc", "length", where="side of the demo")
    hierarchy = build_hierarchy(
        [-side / 2] * 3,
        [side / base] * 3,
        [base] * 3,
        [(2, 2, 2)] * (len(blocks) - 1),
        [(corners * BLOCK, np.full_like(corners, BLOCK)) for corners in blocks],
    )
    data = [dict(zip(FIELDS, cells, strict=True)) for value in values for cells in value.swapaxes(0, 1)]
    return MemorySnapshot(hierarchy, data, units=UNITS, name=f"demo cloud {seed}")


def write_demo_snapshot(
    path: str | os.PathLike[str], *, base: int = 32, levels: int = 4, seed: int = 7, real: str = "f4"
) -> Path:
    """Write `demo_snapshot` as an AMReX plotfile; returns its path.

    Raises
    ------
    SnapshotError
        The path exists, or unusable choices.
    """
    snapshot = demo_snapshot(base=base, levels=levels, seed=seed)
    write_amrex(
        path, snapshot.hierarchy, FIELDS, lambda patch: snapshot.read(patch, FIELDS), real=real, files=2
    )
    return Path(path)


def _cells(corners: Corners, count: int) -> Cells:
    x, y, z = ((corner[:, None] * BLOCK + np.arange(BLOCK) + 0.5) / count for corner in corners.T)
    return Cells(x, y, z, count)


def _place_blocks(cloud: Cloud, base: int, levels: int) -> list[Corners]:
    """Block corners of each level, in blocks; levels stop early where no cell is dense enough."""
    exists = [np.ones((base // BLOCK,) * 3, dtype=bool)]
    for level in range(levels - 1):
        finer = _wanted(cloud, np.argwhere(exists[level]), base << level)
        if not finer.any():
            break
        exists.append(finer)
    for level in range(len(exists) - 1, 0, -1):
        exists[level - 1] = exists[level - 1] | _parents(_grown(exists[level]))
    return [np.argwhere(there) for there in exists]


def _wanted(cloud: Cloud, corners: Corners, count: int) -> Mask:
    """Where the cells of a level's blocks call for blocks of the next level."""
    dense = number_density(cloud, _cells(corners, count)) * (SIDE_PC / count) ** 2 > JEANS
    half = BLOCK // 2
    tags = dense.reshape(-1, 2, half, 2, half, 2, half).any(axis=(2, 4, 6))
    block, *octant = np.nonzero(tags)
    wanted = np.zeros((2 * count // BLOCK,) * 3, dtype=bool)
    wanted[tuple((2 * corners[block] + np.stack(octant, axis=1)).T)] = True
    return wanted


def _grown(there: Mask) -> Mask:
    """`there` with its neighbours, diagonals too: a level then ends a block inside the coarser one."""
    for axis in range(3):
        wide = np.moveaxis(np.pad(there, [(1, 1) if a == axis else (0, 0) for a in range(3)]), axis, 0)
        there = np.moveaxis(wide[:-2] | wide[1:-1] | wide[2:], 0, axis)
    return there


def _parents(there: Mask) -> Mask:
    nx, ny, nz = (n // 2 for n in there.shape)
    return np.asarray(there.reshape(nx, 2, ny, 2, nz, 2).any(axis=(1, 3, 5)))


def _fill(cloud: Cloud, corners: Corners, count: int) -> Array:
    """All fields of a level in cgs, shape (fields, blocks, n, n, n)."""
    cells = _cells(corners, count)
    density = number_density(cloud, cells)
    return np.concatenate([[density * MASS_PER_H2], [temperature(density)], velocity(cloud, cells) * KM_S])


def _restrict(fine_corners: Corners, fine: Array, coarse_corners: Corners, coarse: Array) -> None:
    """Put the means of the fine cells into the coarse cells they cover."""
    half = BLOCK // 2
    grouped = fine.reshape(len(fine), -1, half, 2, half, 2, half, 2)
    density = grouped[0].mean(axis=(2, 4, 6))
    mean = (grouped * grouped[0]).mean(axis=(3, 5, 7)) / density
    mean[0] = density
    row = np.full(coarse_corners.max(axis=0) + 1, -1)
    row[tuple(coarse_corners.T)] = np.arange(len(coarse_corners))
    for child, corner in enumerate(fine_corners):
        x, y, z = corner % 2 * half
        parent = row[tuple(corner // 2)]
        coarse[:, parent, x : x + half, y : y + half, z : z + half] = mean[:, child]
