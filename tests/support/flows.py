"""Smooth flows of gas: their cells on grids of one or two levels, and slow line transfer through them, in float64.

The slow transfer knows nothing of cells: it integrates the smooth fields themselves.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.integrate import cumulative_simpson, simpson
from support.physics import CO, KM_S, PARSEC, h2_density
from support.sweeps import excess

from cubeforge.mesh.hierarchy import build_hierarchy
from cubeforge.snapshots.memory import MemorySnapshot

Field = Callable[..., np.ndarray]
FLOW_FIELDS = ("density", "temperature", "x_velocity", "y_velocity", "z_velocity")


def uniform(value: float) -> Field:
    """The same everywhere."""
    return lambda x, y, z: value + 0.0 * (x + y + z)


def linear(gradient: Sequence[float]) -> Field:
    """gradient . position."""
    return lambda x, y, z: gradient[0] * x + gradient[1] * y + gradient[2] * z


def rotation(omega: Sequence[float]) -> tuple[Field, Field, Field]:
    """Solid rotation, omega x position; omega in km/s per pc."""
    a, b, c = omega
    return linear((0.0, -c, b)), linear((c, 0.0, -a)), linear((-b, a, 0.0))


def expansion(rate: float) -> tuple[Field, Field, Field]:
    """Homologous expansion, rate * position; rate in km/s per pc."""
    return linear((rate, 0.0, 0.0)), linear((0.0, rate, 0.0)), linear((0.0, 0.0, rate))


def infall(speed: float, core: float) -> tuple[Field, Field, Field]:
    """Towards the centre, at speed * r / sqrt(r^2 + core^2): smooth everywhere, the centre included."""

    def part(axis: int) -> Field:
        return lambda *at: -speed * at[axis] / np.sqrt(at[0] ** 2 + at[1] ** 2 + at[2] ** 2 + core**2)

    return part(0), part(1), part(2)


@dataclass(frozen=True)
class Flow:
    """Fields as functions of x, y, z in pc: g/cm3, K and km/s."""

    density: Field
    temperature: Field
    velocity: tuple[Field, Field, Field]

    def fields(self) -> dict[str, Field]:
        """By their names in a snapshot."""
        return dict(zip(FLOW_FIELDS, (self.density, self.temperature, *self.velocity), strict=True))


def gauss(nodes: int, lo: float, hi: float) -> tuple[np.ndarray, np.ndarray]:
    """Gauss-Legendre nodes of an interval, and weights that sum to 1."""
    x, w = np.polynomial.legendre.leggauss(nodes)
    return 0.5 * (lo + hi) + 0.5 * (hi - lo) * x, 0.5 * w


def cell_means(function: Field, lo, cell: float, shape, nodes: int = 2) -> np.ndarray:
    """Means of a field over cubic cells, by Gauss-Legendre quadrature.

    The value at the centre differs from the mean at second order in the cell's size; means are what simulations keep.
    """
    inside, weights = gauss(nodes, 0.0, 1.0)
    axes = [lo[a] + cell * (np.arange(shape[a])[:, None] + inside).ravel() for a in range(3)]
    values = np.broadcast_to(
        function(*np.meshgrid(*axes, indexing="ij", sparse=True)), [len(a) for a in axes]
    )
    values = values.reshape(shape[0], nodes, shape[1], nodes, shape[2], nodes)
    return np.einsum("aibjck,i,j,k->abc", values, weights, weights, weights)


def flow_snapshot(flow: Flow, cells: int, half: float = 1.0, fine_box=None, ratio: int = 2) -> MemorySnapshot:
    """The cube from -half to half (pc) in `cells` a side; `fine_box` = (lo, hi) in pc is refined by `ratio`."""
    cell = 2.0 * half / cells
    boxes = [(np.zeros((1, 3), dtype=int), np.full((1, 3), cells))]
    if fine_box is not None:
        lo, hi = (np.rint((np.asarray(corner) + half) / cell).astype(int) * ratio for corner in fine_box)
        boxes.append((lo[None, :], (hi - lo)[None, :]))
    ratios = [(ratio,) * 3] * (len(boxes) - 1)
    mesh = build_hierarchy((-half,) * 3, (cell,) * 3, (cells,) * 3, ratios, boxes)
    data = []
    for level, lo, shape in zip(mesh.level, mesh.lo, mesh.shape, strict=True):
        size = cell / ratio ** int(level)
        corner = lo * size - half
        data.append({name: cell_means(f, corner, size, shape) for name, f in flow.fields().items()})
    return MemorySnapshot(mesh, data)


@dataclass(frozen=True)
class SlowSky:
    """Flows seen along n, the axes being n, right and up on the sky (`slow_march.sky_axes`), in float64.

    A ray is cut where it leaves the sphere of radius `reach` (pc) around the centre, or at depths -reach and reach.
    """

    axes: tuple[np.ndarray, np.ndarray, np.ndarray]
    reach: float
    channels: np.ndarray
    """Velocities in cm/s."""
    turbulent_b: float
    abundance: float = 1e-4
    sphere: bool = False
    steps: int = 160

    def rays(self, flow: Flow, x: np.ndarray, y: np.ndarray) -> np.ndarray:
        """Spectra (rays, channels) in K above the background at x (right) and y (up) in pc from the centre.

        The integral of excess * opacity * exp(-optical depth in front), by Simpson's rule.
        """
        n, right, up = self.axes
        half = np.sqrt(self.reach**2 - (x**2 + y**2) * self.sphere)
        depth = np.multiply.outer(half, np.linspace(-1.0, 1.0, self.steps + 1))
        points = [x[:, None] * right[a] + y[:, None] * up[a] + depth * n[a] for a in range(3)]
        rho, kelvin, *v = (np.broadcast_to(f(*points), depth.shape) for f in flow.fields().values())
        along = sum(n[a] * v[a] for a in range(3)) * KM_S
        width = CO.width(kelvin, self.turbulent_b)
        peak = CO.opacity(self.abundance * h2_density(rho), kelvin) / (math.sqrt(math.pi) * width)
        opaque = excess(kelvin)
        step = 2.0 / self.steps * PARSEC * half[:, None, None]
        offset = (self.channels[:, None] - along[:, None, :]) / width[:, None, :]
        per_step = step * peak[:, None, :] * np.exp(-(offset**2))
        front = cumulative_simpson(per_step, dx=1.0, axis=-1, initial=0.0)
        return simpson(opaque[:, None, :] * per_step * np.exp(-front), dx=1.0, axis=-1)

    def image(self, flow: Flow, pixel: float, size: tuple[int, int], across: int = 12) -> np.ndarray:
        """Means over pixels of side `pixel` (pc), shape (channels, ny, nx), by Gauss-Legendre quadrature."""
        inside, weights = gauss(across, 0.0, 1.0)
        gx, gy = (g.ravel() for g in np.meshgrid(inside, inside))
        out = np.empty((len(self.channels), size[1], size[0]))
        for iy, ix in np.ndindex(size[1], size[0]):
            x, y = pixel * (ix - 0.5 * size[0] + gx), pixel * (iy - 0.5 * size[1] + gy)
            out[:, iy, ix] = np.multiply.outer(weights, weights).ravel() @ self.rays(flow, x, y)
        return out
