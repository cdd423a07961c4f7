"""A made-up molecular cloud as continuous fields: what the demonstration snapshot is sampled from.

A turbulent clump threaded by filaments, with a rotating, collapsing core off its centre and a second, quiet
clump. Positions are in units of the box, 0 to 1; densities are n(H2) in cm-3, velocities in km/s.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

SIDE_PC = 2.0
"""Side of the box."""
GRID = 128
"""Cells per axis of the periodic grid that carries the random fields."""
MEAN_DENSITY = 300.0
CONTRAST = 1.15
"""Standard deviation of ln n of the turbulent gas (a lognormal, as in Vazquez-Semadeni 1994)."""
TURBULENCE = 1.0
"""Root mean square of the turbulent velocity, km/s, all three components together."""
FINE_WAVES = 24
"""Plane waves beyond the grid's reach, so that the finest level has structure of its own."""

CORE = np.array([0.62, 0.43, 0.55])
CORE_DENSITY = 1.0e6
CORE_FLAT_PC = 0.014
SPIN_AXIS = np.array([0.45, -0.30, 0.841])
CLUMP = np.array([0.30, 0.66, 0.42])
CLUMP_DENSITY = 2.0e4


@dataclass(frozen=True)
class Cells:
    """Cell centres of equal blocks: `x`, `y`, `z`, each (blocks, n), of a level with `count` cells a side."""

    x: Array
    y: Array
    z: Array
    count: int

    def offset(self, point: Array) -> tuple[Array, Array, Array]:
        """Distance from `point` along each axis in pc, ready to broadcast to (blocks, n, n, n)."""
        dx, dy, dz = ((c - p) * SIDE_PC for c, p in zip((self.x, self.y, self.z), point, strict=True))
        return dx[:, :, None, None], dy[:, None, :, None], dz[:, None, None, :]


@dataclass(frozen=True)
class Cloud:
    """The random part of the cloud.

    Attributes
    ----------
    logdensity : ndarray, shape (GRID, GRID, GRID)
        Gaussian, zero mean, unit variance.
    strands : ndarray, shape (2, GRID, GRID, GRID)
        Two smooth Gaussian fields; filaments run where both vanish.
    velocity : ndarray, shape (3, GRID, GRID, GRID)
        Divergence-free, km/s.
    waves, phases, amplitudes : ndarray, shapes (m, 3), (m,), (m, 4)
        Fine waves: cycles per box, phase in cycles, amplitude of ln n and of the velocity.
    """

    logdensity: Array
    strands: Array
    velocity: Array
    waves: Array
    phases: Array
    amplitudes: Array


def make_cloud(seed: int) -> Cloud:
    """Draw a cloud; the same seed gives the same cloud."""
    rng = np.random.default_rng(seed)
    logdensity = _random_field(rng, 1, slope=3.6)[0]
    strands = _random_field(rng, 2, slope=4.6)
    # E(k) ~ k^-2, as in supersonic turbulence: a three-dimensional power of k^-4.
    velocity = _random_field(rng, 3, slope=4.0, solenoidal=True) * (TURBULENCE / np.sqrt(3.0))
    return Cloud(logdensity, strands, velocity, *_fine_waves(rng))


def _random_field(rng: np.random.Generator, count: int, slope: float, solenoidal: bool = False) -> Array:
    """Periodic Gaussian fields of power k^-slope, shape (count, GRID, GRID, GRID).

    Each of unit variance; the components of a solenoidal one have unit variance on average.
    """
    whole, half = np.fft.fftfreq(GRID, 1 / GRID), np.fft.rfftfreq(GRID, 1 / GRID)
    k = np.meshgrid(whole, whole, half, indexing="ij", sparse=True)
    square = k[0] ** 2 + k[1] ** 2 + k[2] ** 2
    square[0, 0, 0] = 1.0
    shape = np.where(square < (GRID / 2) ** 2, square ** (-slope / 4), 0.0)
    shape[0, 0, 0] = 0.0
    modes = np.fft.rfftn(rng.standard_normal((count, GRID, GRID, GRID)), axes=(1, 2, 3)) * shape
    if solenoidal:
        along = sum(k[axis] * modes[axis] for axis in range(3)) / square
        for axis in range(3):
            modes[axis] -= k[axis] * along
    fields = np.fft.irfftn(modes, s=(GRID, GRID, GRID), axes=(1, 2, 3))
    spread = fields.std(axis=(1, 2, 3), keepdims=True)
    if solenoidal:
        # One factor for all components: scaling each by its own would bring the divergence back.
        spread = np.sqrt(np.mean(spread**2))
    result: Array = fields / spread
    return result


def _fine_waves(rng: np.random.Generator) -> tuple[Array, Array, Array]:
    direction = rng.standard_normal((FINE_WAVES, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    length = GRID / 2 * 2.0 ** rng.random((FINE_WAVES, 1))
    across = np.cross(direction, rng.standard_normal((FINE_WAVES, 3)))
    across /= np.linalg.norm(across, axis=1, keepdims=True)
    falloff = (GRID / 2 / length) ** 1.5
    amplitudes = np.hstack([0.25 * falloff, 0.10 * falloff * across]) * np.sqrt(2.0 / FINE_WAVES)
    return direction * length, rng.random(FINE_WAVES), amplitudes


def number_density(cloud: Cloud, cells: Cells) -> Array:
    """n(H2) in cm-3 at the cell centres, shape (blocks, n, n, n)."""
    g = _sample(cloud.logdensity, cells) * CONTRAST + _sum_waves(cloud, cells, 0)
    first, second = (_sample(strand, cells) for strand in cloud.strands)
    dx, dy, dz = cells.offset(np.array([0.5, 0.5, 0.5]))
    envelope = 0.05 + (1.0 + (dx**2 + dy**2 + dz**2) / 0.55**2) ** -1.5
    filaments = 45.0 * np.exp(-(first**2 + second**2) / (2 * 0.15**2))
    diffuse = MEAN_DENSITY * envelope * (1.0 + filaments) * np.exp(g - CONTRAST**2 / 2)
    ripple = np.exp(0.6 * g)
    result: Array = diffuse + ripple * (_core_density(cells) + _clump_density(cells))
    return result


def _core_density(cells: Cells) -> Array:
    """Flat inside, r^-2 outside, flattened along the spin axis, cut off beyond 0.2 pc."""
    dx, dy, dz = cells.offset(CORE)
    square = dx**2 + dy**2 + dz**2
    height = dx * SPIN_AXIS[0] + dy * SPIN_AXIS[1] + dz * SPIN_AXIS[2]
    oblate = square + 1.5 * height**2
    result: Array = CORE_DENSITY / (1.0 + oblate / CORE_FLAT_PC**2) * np.exp(-(square / 0.22**2))
    return result


def _clump_density(cells: Cells) -> Array:
    dx, dy, dz = cells.offset(CLUMP)
    result: Array = CLUMP_DENSITY * (1.0 + (dx**2 + (0.6 * dy) ** 2 + dz**2) / 0.06**2) ** -1.75
    return result


def velocity(cloud: Cloud, cells: Cells) -> Array:
    """Velocity in km/s at the cell centres, shape (3, blocks, n, n, n)."""
    offset = cells.offset(CORE)
    square = offset[0] ** 2 + offset[1] ** 2 + offset[2] ** 2
    quiet = 1.0 - 0.7 * np.exp(-square / 0.15**2)
    # Both rise from zero at the centre to their peak at 0.1 pc and fall beyond.
    profile = 2.0 / (1.0 + square / 0.1**2) * np.exp(-square / 0.5**2) / 0.1
    out = np.empty((3, *square.shape))
    for axis in range(3):
        after, last = (axis + 1) % 3, (axis + 2) % 3
        spin = SPIN_AXIS[after] * offset[last] - SPIN_AXIS[last] * offset[after]
        random = _sample(cloud.velocity[axis], cells) + _sum_waves(cloud, cells, 1 + axis)
        out[axis] = quiet * random + profile * (1.0 * spin - 0.6 * offset[axis])
    return out


def temperature(density: Array) -> Array:
    """Kinetic temperature in K from n(H2): 40 K where diffuse, 10 K where dense."""
    return 10.0 + 30.0 / (1.0 + (density / 2.0e3) ** 0.6)


def _sample(grid: Array, cells: Cells) -> Array:
    """A grid's mean in cells as wide as its own or wider; linear interpolation in finer ones."""
    if cells.count <= GRID:
        wide = GRID // cells.count
        mean = grid.reshape(cells.count, wide, cells.count, wide, cells.count, wide).mean(axis=(1, 3, 5))
        i, j, k = ((c * cells.count).astype(np.int64) for c in (cells.x, cells.y, cells.z))
        coarse: Array = mean[i[:, :, None, None], j[:, None, :, None], k[:, None, None, :]]
        return coarse
    return _interpolate(grid, cells)


def _interpolate(grid: Array, cells: Cells) -> Array:
    corners = []
    for position in (cells.x, cells.y, cells.z):
        place = position * GRID - 0.5
        low = np.floor(place).astype(np.int64)
        corners.append(((low % GRID, 1.0 - (place - low)), ((low + 1) % GRID, place - low)))
    out: Array = np.zeros((*cells.x.shape, cells.y.shape[1], cells.z.shape[1]))
    for i, a in corners[0]:
        for j, b in corners[1]:
            for k, c in corners[2]:
                weight = a[:, :, None, None] * b[:, None, :, None] * c[:, None, None, :]
                out += weight * grid[i[:, :, None, None], j[:, None, :, None], k[:, None, None, :]]
    return out


def _sum_waves(cloud: Cloud, cells: Cells, component: int) -> Array:
    """The fine waves of ln n (0) or of a velocity component (1 to 3), averaged over each cell."""
    out: Array = np.zeros((*cells.x.shape, cells.y.shape[1], cells.z.shape[1]))
    for wave, phase, amplitude in zip(cloud.waves, cloud.phases, cloud.amplitudes[:, component], strict=True):
        damping = np.prod(np.sinc(wave / cells.count))
        x, y, z = (np.exp(2j * np.pi * k * c) for k, c in zip(wave, (cells.x, cells.y, cells.z), strict=True))
        x *= amplitude * damping * np.exp(2j * np.pi * phase)
        plane = y[:, :, None] * z[:, None, :]
        out += x.real[:, :, None, None] * plane.real[:, None] - x.imag[:, :, None, None] * plane.imag[:, None]
    return out
