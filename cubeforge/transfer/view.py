"""The view: where the observer looks, which way is north, and the pixel grid, in the snapshot's own space.

Conventions: `toward` points away from the observer, into the cloud, so that gas moving along it recedes. On the
sky north is up and east is left; pixel x grows to the right, that is to the west, and y grows to the north.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from cubeforge.errors import PlanError

FloatArray = npt.NDArray[np.float64]


def sky_basis(
    toward: FloatArray, north: FloatArray, roll: float = 0.0
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Orthonormal axes of a view.

    Parameters
    ----------
    toward : ndarray, shape (3,)
        Direction of looking; any length.
    north : ndarray, shape (3,)
        Its part across the line of sight is up on the sky.
    roll : float
        Position angle in radians, from north through east, to which that direction is turned.

    Returns
    -------
    n, right, up : ndarray, shape (3,)
        Line of sight, and the directions of growing x (west) and y (north).

    Raises
    ------
    PlanError
        A zero vector, or `north` along `toward`.
    """
    toward = np.asarray(toward, dtype=np.float64)
    north = np.asarray(north, dtype=np.float64)
    if not np.linalg.norm(toward) > 0.0:
        raise PlanError("view.toward: the vector has no length; give a direction such as [0, 0, -1]")
    n = toward / np.linalg.norm(toward)
    n[np.abs(n) < 1e-15] = 0.0
    up = north - (north @ n) * n
    if not np.linalg.norm(up) > 1e-8 * max(float(np.linalg.norm(north)), 1e-300):
        raise PlanError(
            f"view.north: {north.tolist()} lies along the line of sight {toward.tolist()}; give a direction across it"
        )
    up /= np.linalg.norm(up)
    right = np.cross(n, up)
    cos, sin = np.cos(roll), np.sin(roll)
    # Turning from north through east (left) is counter-clockwise on the sky as seen.
    right, up = cos * right - sin * up, sin * right + cos * up
    for axis in (right, up):
        axis[np.abs(axis) < 1e-15] = 0.0
    return n, right, up


@dataclass(frozen=True)
class View:
    """One orthographic view of a snapshot.

    Attributes
    ----------
    toward, right, up : ndarray, shape (3,)
        Orthonormal axes: line of sight (away from the observer), growing x, growing y.
    centre : ndarray, shape (3,)
        Point seen in the middle of the image, in the snapshot's length unit.
    pixel : float
        Side of a pixel, in the snapshot's length unit.
    nx, ny : int
        Pixels.
    """

    toward: FloatArray
    right: FloatArray
    up: FloatArray
    centre: FloatArray
    pixel: float
    nx: int
    ny: int

    def project(self, points: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Pixel coordinates x, y (pixel i covers i..i+1) and depth from the centre of `points` (..., 3)."""
        offset = points - self.centre
        x = offset @ self.right / self.pixel + 0.5 * self.nx
        y = offset @ self.up / self.pixel + 0.5 * self.ny
        return x, y, offset @ self.toward

    def corner(self) -> FloatArray:
        """Position of the corner of pixel (0, 0), shape (3,), at depth 0, in the snapshot's length unit."""
        return self.centre - self.pixel * (0.5 * self.nx * self.right + 0.5 * self.ny * self.up)


def footprints(view: View, lo: FloatArray, hi: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Bounding rectangles and depth ranges of boxes on the sky.

    Parameters
    ----------
    lo, hi : ndarray, shape (n, 3)
        Corners in the snapshot's length unit.

    Returns
    -------
    rect : ndarray, shape (n, 4)
        x low, x high, y low, y high in pixels, widened by 1e-9 of their size against rounding.
    depth : ndarray, shape (n, 2)
        Nearest and farthest depth from the view's centre.
    """
    x, y, depth = view.project(0.5 * (lo + hi))
    half = 0.5 * (hi - lo)
    dx = half @ np.abs(view.right) / view.pixel
    dy = half @ np.abs(view.up) / view.pixel
    dt = half @ np.abs(view.toward)
    guard_x = 1e-9 * (dx + np.abs(x))
    guard_y = 1e-9 * (dy + np.abs(y))
    rect = np.stack([x - dx - guard_x, x + dx + guard_x, y - dy - guard_y, y + dy + guard_y], axis=-1)
    return rect, np.stack([depth - dt, depth + dt], axis=-1)


def covering_size(
    view_axes: tuple[FloatArray, FloatArray], extent: FloatArray, pixel: float
) -> tuple[int, int]:
    """Pixels (nx, ny) that see a box of size `extent` whole; an even fit is not rounded up."""
    sizes = [float(np.abs(axis) @ extent) / pixel for axis in view_axes]
    nx, ny = (max(1, int(np.ceil(size - 1e-6))) for size in sizes)
    return nx, ny


def select_patches(rect: FloatArray, view: View) -> npt.NDArray[np.bool_]:
    """Which sky rectangles meet the image at all."""
    return (rect[:, 0] < view.nx) & (rect[:, 1] > 0) & (rect[:, 2] < view.ny) & (rect[:, 3] > 0)
