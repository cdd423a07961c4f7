"""The march in float64 with exact functions and no windows: slow, short, and what the fast one is held against.

It shares with the fast march the geometry of rays (`ray_kernels`) and the layout of optical patches, and nothing of
the line transfer.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np
import numpy.typing as npt

from cubeforge.transfer.channels import Band
from cubeforge.transfer.gather_kernels import CELL_HEAD, CELL_LINE
from cubeforge.transfer.ray_kernels import clip_to_region, inverse_of, overlay, trace
from cubeforge.transfer.scene import Scene

FloatArray = npt.NDArray[np.float64]
Cells = Callable[[int], npt.NDArray[np.floating]]


def crossings(scene: Scene, x: float, y: float) -> Iterator[tuple[int, npt.NDArray[np.int64], FloatArray]]:
    """Pieces of the ray through pixel coordinates (x, y), front to back.

    Yields
    ------
    entry : int
        Of the scene.
    cells : ndarray, shape (n,), int64
        Flat indices of the cells crossed.
    lengths : ndarray, shape (n,)
        In the scene's unit of depth.
    """
    origin = scene.start + x * scene.step_x + y * scene.step_y
    inverse = inverse_of(scene.direction)
    near, far = clip_to_region(origin, scene.direction, inverse, scene.box, scene.sphere, scene.cell)
    if not near < far:
        return
    n = len(scene.patch)
    start, stop = np.empty((3, 2 * n + 1)), np.empty((3, 2 * n + 1))
    patch = np.empty((3, 2 * n + 1), dtype=np.int32)
    pieces = overlay(
        origin, scene.direction, inverse, near, far, scene.lo, scene.hi, scene.level, scene.scale,
        np.arange(n, dtype=np.int32), n, start, stop, patch,
    )  # fmt: skip
    cells, ends = np.empty(scene.longest, dtype=np.int64), np.empty(scene.longest + 1)
    for piece in range(pieces):
        entry = int(patch[0, piece])
        count = trace(
            origin, scene.direction, inverse, start[0, piece], stop[0, piece], scene.lo[entry], scene.hi[entry],
            scene.scale[scene.level[entry]], cells, ends,
        )  # fmt: skip
        yield entry, cells[:count].copy(), np.diff(ends[: count + 1])


def march(scene: Scene, band: Band, cells_of: Cells, x: float, y: float, shifts: FloatArray) -> FloatArray:
    """Brightness above the background along one ray, shape (channels,).

    Parameters
    ----------
    scene : Scene
    band : Band
    cells_of : callable
        Patch number -> optical patch, shape (nx, ny, nz, numbers), any float type.
    x, y : float
        Where the ray is, in pixels.
    shifts : ndarray, shape (lines,)
        Velocity of each line against the first, in channels.
    """
    grid = np.arange(band.count) - 0.5 * (band.count - 1)
    velocities = grid[None, :] + band.nodes[:, None]
    through = np.ones_like(velocities)
    bright = np.zeros_like(velocities)
    for entry, cells, lengths in crossings(scene, x, y):
        values = cells_of(int(scene.patch[entry]))
        table = values.reshape(-1, values.shape[-1]).astype(np.float64)
        for cell, length in zip(cells, lengths, strict=True):
            depth, energy = np.zeros_like(velocities), np.zeros_like(velocities)
            for line, shift in enumerate(shifts):
                at = CELL_HEAD + CELL_LINE * line
                inverse_b, kappa, emission = table[cell, at : at + CELL_LINE]
                profile = (
                    inverse_b
                    / np.sqrt(np.pi)
                    * np.exp(-(((velocities - table[cell, 0] - shift) * inverse_b) ** 2))
                )
                depth += kappa * length * profile
                energy += emission * length * profile
            gone = -np.expm1(-depth)
            escaping = np.divide(gone, depth, out=np.ones_like(depth), where=depth != 0.0)
            bright += through * energy * escaping
            through *= 1.0 - gone
    return np.asarray(band.weights @ bright)
