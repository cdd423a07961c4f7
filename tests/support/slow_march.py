"""Slow line transfer through a uniform grid, in float64, sharing nothing with the package.

Conventions that it follows: the line of sight n points away from the observer; seen by the observer north is up and
east is left, and pixel x grows to the west; v = v_gas . n > 0 recedes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np


def sky_axes(toward, north, position_angle=0.0):
    """Line of sight, west and up of a view in which the direction `north` appears at a position angle.

    Position angles run from north through east (radians): counter-clockwise for the observer, since east is left. The
    axis from the cloud to the observer is -n; turning about it by a positive angle is counter-clockwise as seen. So
    the top of the image is `north` turned back by the angle.
    """
    n = np.asarray(toward, dtype=float)
    n = n / math.sqrt((n**2).sum())
    across = np.asarray(north, dtype=float) - np.dot(north, n) * n
    across = across / math.sqrt((across**2).sum())
    to_observer = -n
    up = across * math.cos(-position_angle) + np.cross(to_observer, across) * math.sin(-position_angle)
    # Right, up and the direction to the observer are a right-handed triad on any sheet of paper.
    west = np.cross(up, to_observer)
    return n, west, up


def pixel_centre(centre, west, up, pixel, size, ix, iy):
    """A point on the line of sight of pixel (ix, iy) of an image of `size` = (nx, ny) pixels."""
    return centre + pixel * ((ix + 0.5 - 0.5 * size[0]) * west + (iy + 0.5 - 0.5 * size[1]) * up)


def crossings(lo, cell, shape, point, n):
    """Cells of a uniform grid along a line, front to back, and the length in each.

    Every plane between cells is met at one distance; sorted, these cut the line into pieces, and the middle of a piece
    tells its cell.
    """
    lo, cell, shape, point = (np.asarray(a, dtype=float) for a in (lo, cell, shape, point))
    near, far = -np.inf, np.inf
    planes = []
    for axis in range(3):
        if n[axis] == 0.0:
            if not lo[axis] <= point[axis] < lo[axis] + shape[axis] * cell[axis]:
                return np.zeros((0, 3), dtype=int), np.zeros(0)
            continue
        at = (lo[axis] + cell[axis] * np.arange(int(shape[axis]) + 1) - point[axis]) / n[axis]
        near, far = max(near, at.min()), min(far, at.max())
        planes.append(at)
    if not near < far:
        return np.zeros((0, 3), dtype=int), np.zeros(0)
    cuts = np.concatenate(planes)
    cuts = np.sort(cuts[(cuts >= near) & (cuts <= far)])
    lengths = np.diff(cuts)
    middle = point + (0.5 * (cuts[1:] + cuts[:-1]))[:, np.newaxis] * n
    index = np.floor((middle - lo) / cell).astype(int)
    keep = (lengths > 0.0) & np.all((index >= 0) & (index < shape), axis=1)
    return index[keep], lengths[keep]


@dataclass
class Medium:
    """What a line of sight meets in each cell of a uniform grid (cm, cm/s, K); arrays of one shape."""

    lo: np.ndarray
    cell: np.ndarray
    opacity: np.ndarray
    """Integrated over velocity, 1/s."""
    excess: np.ndarray
    """Source function less background, both as Rayleigh-Jeans kelvins."""
    velocity: tuple[np.ndarray, np.ndarray, np.ndarray]
    width: np.ndarray
    """b, of profiles exp(-(v/b)^2)."""


def spectrum(medium: Medium, point, n, channels) -> np.ndarray:
    """Brightness above the background in K: sum of excess * exp(-tau in front) * (1 - exp(-dtau))."""
    index, lengths = crossings(medium.lo, medium.cell, medium.opacity.shape, point, n)
    if len(lengths) == 0:
        return np.zeros(len(channels))
    at = tuple(index.T)
    along = sum(n[axis] * medium.velocity[axis][at] for axis in range(3))
    width = medium.width[at]
    peak = medium.opacity[at] * lengths / (math.sqrt(math.pi) * width)
    offset = (np.asarray(channels)[np.newaxis, :] - along[:, np.newaxis]) / width[:, np.newaxis]
    depth = peak[:, np.newaxis] * np.exp(-(offset**2))
    front = np.cumsum(depth, axis=0) - depth
    return (medium.excess[at][:, np.newaxis] * np.exp(-front) * -np.expm1(-depth)).sum(axis=0)


def image(medium: Medium, centre, axes, pixel, size, channels, step=1) -> np.ndarray:
    """Spectra of every `step`-th pixel along x and y; shape (channels, ny, nx), NaN where skipped."""
    n, west, up = axes
    out = np.full((len(channels), size[1], size[0]), np.nan)
    for iy in range(0, size[1], step):
        for ix in range(0, size[0], step):
            point = pixel_centre(centre, west, up, pixel, size, ix, iy)
            out[:, iy, ix] = spectrum(medium, point, n, channels)
    return out
