"""Maps and spectra of a cube, read a tile at a time: moments, peak, mean spectrum, channel maps.

Every sum is over the brightness **above the background**: an absolute cube has the Rayleigh-Jeans brightness
of its background subtracted first. Otherwise the background, which fills every channel and every pixel,
would be integrated over the whole band and weigh all velocities alike: moment 0 would grow with the width of
the band, and moment 1 would be drawn to its middle.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from cubeforge.cube.fits import finished_tiles
from cubeforge.cube.spec import CubeSpec
from cubeforge.cube.tiles import Cube
from cubeforge.errors import CubeError
from cubeforge.quantities import JANSKY, KM_S, planck, rayleigh_jeans_factor

Array = npt.NDArray[np.float64]

PIECE = 2**21
"""Values of a tile that are worked on at the same time."""
FLOOR = 1e-3
"""Moment 0 below this fraction of the image's largest counts as nothing."""
SIGMAS = 3.0
"""What moment 0 must exceed, in standard deviations that it would have were the spectrum all noise."""
FEWEST, MOST = 6, 9
"""Numbers of channel maps that are chosen when nobody says which."""


@dataclass(frozen=True, eq=False)
class CubeSummary:
    """Images and spectrum of a cube; images are (my, mx), averaged over blocks of pixels.

    Attributes
    ----------
    spec : CubeSpec
    block : int
        Each image pixel is the mean over block x block pixels of the cube, fewer at the northern and western
        edges and where tiles are unfinished. Brightness per pixel stays per pixel **of the cube**.
    background : float
        Brightness that was subtracted, in the cube's unit; 0 when the cube is above the background already.
    tiles_done : int
        Finished tiles of the cube's `spec.tiles`.
    pixels : ndarray of int64, shape (my, mx)
        Pixels of the cube that entered each image pixel; 0 where the images are NaN.
    bad_pixels : int
        Pixels of finished tiles with a value that is not finite in any channel; they are left out.
    moment0 : ndarray of float64, shape (my, mx)
        Integral over velocity of the brightness above the background, in the cube's unit times km/s.
    moment1 : ndarray of float64, shape (my, mx)
        Intensity-weighted mean velocity in km/s; NaN unless moment 0 is `significant`.
    peak : ndarray of float64, shape (my, mx)
        Highest brightness above the background of any channel and any pixel of the block, in the cube's unit:
        the one image that is a maximum over the block, since the mean of a peak is no peak. Where the line
        is in absorption it is near 0.
    spectrum : ndarray of float64, shape (channels,)
        Mean over all good pixels of finished tiles, in the cube's unit; NaN when there are none.
    channels : tuple of int
        Which channels the channel maps are.
    channel_maps : ndarray of float64, shape (len(channels), my, mx)
        Brightness above the background in the cube's unit.
    maps : mapping of str to ndarray of float64, shape (my, mx)
        The cube's by-products by name, in the units of `spec.maps`.
    """

    spec: CubeSpec
    block: int
    background: float
    tiles_done: int
    pixels: npt.NDArray[np.int64]
    bad_pixels: int
    moment0: Array
    moment1: Array
    peak: Array
    spectrum: Array
    channels: tuple[int, ...]
    channel_maps: Array
    maps: Mapping[str, Array]


class Piece(NamedTuple):
    """Some rows of a finished tile.

    Attributes
    ----------
    along_y, along_x : slice
        Its pixels.
    good : ndarray of bool, shape (ty, tx)
        Pixels whose values are finite in all channels.
    excess : ndarray of float64, shape (channels, ty, tx)
        Brightness above the background in the cube's unit, 0 where a pixel is not good.
    """

    along_y: slice
    along_x: slice
    good: npt.NDArray[np.bool_]
    excess: Array


def summarise(cube: Cube, *, channels: Sequence[int] | None = None, max_side: int = 1000) -> CubeSummary:
    """Reduce a cube to images and a spectrum, in the memory of a tile and a few images.

    Parameters
    ----------
    cube : Cube
        May be unfinished: what the ledger doesn't call done is NaN in the images and not in the spectrum.
    channels : sequence of int, optional
        Channels to map. By default `line_channels` of the mean spectrum, which takes a second look at the
        tiles.
    max_side : int
        Longest side that images may have; larger ones are averaged over square blocks of pixels.

    Raises
    ------
    CubeError
        A tile is damaged, a channel does not exist, or `max_side` is below 1.
    """
    spec = cube.spec
    if max_side < 1:
        raise CubeError(f"{cube.path}: max_side is {max_side}; images need at least 1 pixel a side")
    wanted = [int(channel) for channel in channels or ()]
    for channel in wanted:
        if not 0 <= channel < spec.shape[0]:
            raise CubeError(f"{cube.path}: no channel {channel}: the cube has 0 to {spec.shape[0] - 1}")
    done = np.flatnonzero(finished_tiles(cube))
    grid = _Grid(spec.shape[1], spec.shape[2], -(-max(spec.shape[1:]) // max_side))
    sums = _Sums(grid, spec, wanted)
    for piece in pieces(cube, done):
        sums.add(piece)
    spectrum = sums.mean_spectrum()
    if channels is None:
        wanted = line_channels(spectrum)
        second = _Sums(grid, spec, wanted, only_channels=True)
        for piece in pieces(cube, done):
            second.add(piece)
        sums.channel_maps = second.channel_maps
    return CubeSummary(
        spec=spec,
        block=grid.block,
        background=background_brightness(spec),
        tiles_done=len(done),
        pixels=sums.pixels,
        bad_pixels=sums.bad_pixels,
        moment0=sums.mean(sums.moments[0]),
        moment1=_mean_velocity(sums),
        peak=np.where(sums.pixels > 0, sums.peak, np.nan),
        spectrum=spectrum,
        channels=tuple(wanted),
        channel_maps=sums.mean(sums.channel_maps),
        maps=_map_means(cube, done, grid),
    )


def background_brightness(spec: CubeSpec) -> float:
    """Brightness of the background that is in the cube's values, in the cube's unit; 0 unless absolute.

    In kelvins the Rayleigh-Jeans brightness c^2 B(T)/(2 k nu^2), which lies below the temperature T itself.
    """
    if not spec.absolute:
        return 0.0
    planckian = planck(spec.rest_frequency, spec.background_K)
    if spec.unit == "K":
        return rayleigh_jeans_factor(spec.rest_frequency) * planckian
    return planckian / JANSKY * (spec.pixel_rad**2 if spec.unit == "Jy/pixel" else 1.0)


def pieces(cube: Cube, tiles: npt.NDArray[np.integer[Any]]) -> Iterator[Piece]:
    """Read `tiles` one after the other; each in pieces of rows, so that copies of it stay small."""
    background = background_brightness(cube.spec)
    for tile in map(int, tiles):
        along_y, along_x = cube.spec.tile_slices(tile)
        image = cube.read_intensity(tile)
        rows = max(1, PIECE // (image.shape[0] * image.shape[2]))
        for first in range(0, image.shape[1], rows):
            excess = image[:, first : first + rows].astype(np.float64)
            good = np.logical_and.reduce(np.isfinite(excess), axis=0)
            excess -= background
            excess[:, ~good] = 0.0
            start = along_y.start + first
            yield Piece(slice(start, start + excess.shape[1]), along_x, good, excess)


def line_channels(spectrum: Array) -> list[int]:
    """Channels that show a line: 6 to 9, equally spaced, over where the mean spectrum is.

    The line is where 99 % of the squared spectrum is, with as much left out below as above: squares count
    absorption too, and give the noise of many empty channels little weight. A narrower line gets
    neighbouring channels besides; a cube of fewer channels has all of them shown.
    """
    count = len(spectrum)
    power = np.cumsum(np.nan_to_num(spectrum, nan=0.0) ** 2)
    first, last = 0, count - 1
    if power[-1] > 0.0:
        first, last = (int(np.searchsorted(power, share * power[-1])) for share in (0.005, 0.995))
    width = last - first + 1
    step = max(1, round(width / (MOST - 1)))
    number = min(max(-(-width // step), FEWEST), MOST, (count - 1) // step + 1)
    span = (number - 1) * step
    start = min(max((first + last - span) // 2, 0), count - 1 - span)
    return [start + step * index for index in range(number)]


def significant(moment0: Array, integral_abs: Array, channels: int, least: float) -> npt.NDArray[np.bool_]:
    """Where moment 0 is so far above zero that the mean velocity means something.

    Three conditions, of which the first needs no knowledge of which channels are free of the line:

    - A spectrum of N channels of Gaussian noise, sigma each, has a moment 0 of standard deviation
      sqrt(N) sigma dv, and an integral of absolute values of N sqrt(2/pi) sigma dv. Moment 0 must exceed
      `SIGMAS` standard deviations under the assumption that all of the absolute integral is noise, which is
      ``3 sqrt(pi / 2N)`` of it (never more than 0.9 of it: no noise can be told in a few channels). A
      line only raises the absolute integral, so the test errs on the strict side. It also refuses spectra
      whose emission and absorption cancel, where the weighted mean may lie outside the band. A cube without
      noise or absorption passes everywhere, since there both integrals are the same.
    - Moment 0 exceeds `FLOOR` of the largest one in the image.
    - It exceeds `least`, what rounding can make of nothing.

    Parameters
    ----------
    moment0, integral_abs : ndarray, shape (my, mx)
        Integrals over velocity of the brightness and of its absolute value; NaN is not significant.
    channels : int
        N.
    least : float
        In the unit of `moment0`.
    """
    share = min(0.9, SIGMAS * math.sqrt(0.5 * math.pi / channels))
    largest = np.fmax.reduce(moment0, axis=None, initial=0.0)
    result: npt.NDArray[np.bool_] = moment0 > np.fmax(least, FLOOR * largest)
    return result & (moment0 >= share * integral_abs)


def _mean_velocity(sums: _Sums) -> Array:
    """Moment 1 in km/s, (my, mx)."""
    moment0, first, integral_abs = sums.mean(sums.moments)
    spec = sums.spec
    band = spec.shape[0] * spec.velocity_width / KM_S
    # An absolute cube is stored with the background in its float32: one rounding of it in every channel.
    least = float(np.finfo(np.float32).eps) * background_brightness(spec) * band
    keep = significant(moment0, integral_abs, spec.shape[0], least)
    return sums.middle + _divide(first, moment0, keep)


@dataclass(frozen=True)
class _Grid:
    """Blocks of block x block pixels, the last ones smaller, over an image of ny x nx."""

    ny: int
    nx: int
    block: int

    @property
    def shape(self) -> tuple[int, int]:
        return -(-self.ny // self.block), -(-self.nx // self.block)

    def add(self, target: npt.NDArray[Any], piece: Piece, values: npt.NDArray[Any], ufunc: np.ufunc) -> None:
        """Combine the pixels `values` (..., ty, tx) of `piece` into `target` (..., my, mx)."""
        starts_y, into_y = self._blocks(piece.along_y)
        starts_x, into_x = self._blocks(piece.along_x)
        if self.block > 1:
            values = ufunc.reduceat(ufunc.reduceat(values, starts_y, axis=-2), starts_x, axis=-1)
        # A block that lies in several tiles gets a part from each.
        part = target[..., into_y, into_x]
        ufunc(part, values, out=part)

    def _blocks(self, along: slice) -> tuple[npt.NDArray[np.int64], slice]:
        """Where blocks begin within `along`, counted from its start, and which blocks they are."""
        first, stop = along.start // self.block, -(-along.stop // self.block)
        return np.maximum(np.arange(first, stop) * self.block - along.start, 0), slice(first, stop)


class _Sums:
    """Sums over blocks of pixels, fed piece by piece in any order.

    Velocities count from the middle of the band, so that a far systemic velocity costs no digits.
    """

    def __init__(
        self, grid: _Grid, spec: CubeSpec, channels: Sequence[int], *, only_channels: bool = False
    ) -> None:
        self.grid, self.spec, self.channels, self.only_channels = grid, spec, channels, only_channels
        velocities = spec.velocities / KM_S
        self.middle = float(velocities.mean())
        self.weights = np.stack([np.ones_like(velocities), velocities - self.middle])
        self.weights *= spec.velocity_width / KM_S
        self.pixels = np.zeros(grid.shape, dtype=np.int64)
        self.bad_pixels = 0
        self.moments = np.zeros((3, *grid.shape))
        self.peak = np.full(grid.shape, -np.inf)
        self.channel_maps = np.zeros((len(channels), *grid.shape))
        self.spectrum = np.zeros(spec.shape[0])

    def add(self, piece: Piece) -> None:
        """Add the pixels of `piece`."""
        if len(self.channels):
            self.grid.add(self.channel_maps, piece, piece.excess[self.channels], np.add)
        if self.only_channels:
            return
        absolute = np.abs(piece.excess).sum(axis=0) * self.weights[0, 0]
        moments = np.concatenate([np.tensordot(self.weights, piece.excess, axes=1), absolute[None]])
        self.grid.add(self.moments, piece, moments, np.add)
        self.grid.add(self.pixels, piece, piece.good.astype(np.int64), np.add)
        highest = np.where(piece.good, piece.excess.max(axis=0), -np.inf)
        self.grid.add(self.peak, piece, highest, np.maximum)
        self.bad_pixels += int(np.count_nonzero(~piece.good))
        self.spectrum += piece.excess.sum(axis=(1, 2))

    def mean(self, sums: Array) -> Array:
        """Sums over blocks (..., my, mx) -> means, NaN where no pixel entered."""
        return _divide(sums, self.pixels, self.pixels > 0)

    def mean_spectrum(self) -> Array:
        """Mean over all pixels that entered, (channels,)."""
        pixels = self.pixels.sum()
        return _divide(self.spectrum, pixels, pixels > 0)


def _divide(sums: Array, by: npt.NDArray[Any], where: npt.NDArray[np.bool_]) -> Array:
    """Quotient, NaN except `where`."""
    result = np.full_like(sums, np.nan)
    np.divide(sums, by, out=result, where=where)
    return result


def _map_means(cube: Cube, tiles: npt.NDArray[np.integer[Any]], grid: _Grid) -> dict[str, Array]:
    """Block means of the by-products, by name; each over its own finite pixels."""
    names = [name for name, _ in cube.spec.maps]
    sums = np.zeros((len(names), *grid.shape))
    counts = np.zeros(sums.shape, dtype=np.int64)
    for tile in map(int, tiles if names else ()):
        along_y, along_x = cube.spec.tile_slices(tile)
        values = cube.read_maps(tile)
        good = np.isfinite(values)
        piece = Piece(along_y, along_x, good, values)
        grid.add(sums, piece, np.where(good, values, 0.0), np.add)
        grid.add(counts, piece, good.astype(np.int64), np.add)
    return dict(zip(names, _divide(sums, counts, counts > 0), strict=True))
