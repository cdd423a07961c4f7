"""What a cube is, before any pixel of it exists: its grid, its axes, its units and where it came from."""

from __future__ import annotations

import dataclasses
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from cubeforge.errors import CubeError

UNITS = ("K", "Jy/sr", "Jy/pixel")
"""Units that the intensity of a cube can have."""

RADIAN = 180.0 / math.pi
"""Degrees in a radian."""


@dataclass(frozen=True)
class CubeSpec:
    """Everything about a cube except its pixels.

    Arrays are ordered (spectral, y, x). On the sky y increases to the north and x to the **west**: drawn
    with x to the right and y upwards, north is up and east is left. Pixel (0, 0) is the south-east corner.

    Attributes
    ----------
    shape : (channels, ny, nx)
    tile : (ty, tx)
        Pixels of one tile, and of one stored object; tiles of the last row and column may be smaller.
    velocity_start : float
        Centre of channel 0 in cm/s, radio convention.
    velocity_width : float
        Width of a channel in cm/s, positive: velocity increases with the channel.
    rest_frequency : float
        Hz.
    pixel_rad : float
        Side of a (square) pixel in radians, at the centre of the image.
    centre_lon, centre_lat : float
        ICRS position of the centre of the image in degrees.
    unit : str
        One of `UNITS`.
    background_K : float
        Temperature of the background radiation, K.
    molecule, line : str
        Names for people, such as "CO" and "1-0"; printable ASCII, because FITS keywords hold them.
    absolute : bool
        Whether the background is in the brightness; without it, brightness is above the background.
    maps : tuple of (name, unit)
        By-products, one 2-D image each, such as ``("column", "g cm-2")``.
    fingerprint : str
        Hash of everything that changes the pixels.
    fingerprint_parts : mapping of str to str
        What entered the fingerprint, part by part, so that a mismatch can be named.
    history : tuple of str
        Lines about where the cube came from.
    """

    shape: tuple[int, int, int]
    tile: tuple[int, int]
    velocity_start: float
    velocity_width: float
    rest_frequency: float
    pixel_rad: float
    centre_lon: float
    centre_lat: float
    unit: str
    background_K: float
    molecule: str
    line: str
    fingerprint: str
    fingerprint_parts: Mapping[str, str] = field(default_factory=dict, hash=False)
    absolute: bool = False
    maps: tuple[tuple[str, str], ...] = ()
    history: tuple[str, ...] = ()

    @property
    def tile_grid(self) -> tuple[int, int]:
        """Rows and columns of tiles."""
        return -(-self.shape[1] // self.tile[0]), -(-self.shape[2] // self.tile[1])

    @property
    def tiles(self) -> int:
        """Number of tiles; their ids count along x first."""
        rows, columns = self.tile_grid
        return rows * columns

    def tile_position(self, tile: int) -> tuple[int, int]:
        """Row and column of `tile` in the grid of tiles; CubeError when there is no such tile."""
        if not 0 <= tile < self.tiles:
            raise CubeError(f"tile {tile} does not exist: the cube has tiles 0 to {self.tiles - 1}")
        return divmod(int(tile), self.tile_grid[1])

    def tile_slices(self, tile: int) -> tuple[slice, slice]:
        """Pixels of `tile` along y and x; CubeError when there is no such tile."""
        (row, column), (ty, tx) = self.tile_position(tile), self.tile
        return (
            slice(row * ty, min((row + 1) * ty, self.shape[1])),
            slice(column * tx, min((column + 1) * tx, self.shape[2])),
        )

    def tile_shape(self, tile: int) -> tuple[int, int]:
        """Pixels of `tile` along y and x, smaller than `self.tile` at the far edges of the image."""
        along_y, along_x = self.tile_slices(tile)
        return along_y.stop - along_y.start, along_x.stop - along_x.start

    @property
    def velocities(self) -> npt.NDArray[np.float64]:
        """Centres of the channels in cm/s, shape (channels,)."""
        return self.velocity_start + self.velocity_width * np.arange(self.shape[0], dtype=np.float64)

    def offsets(self, axis: int) -> npt.NDArray[np.float64]:
        """Distance of pixel centres from the image centre in radians: northward (axis 1), westward (2)."""
        count = self.shape[axis]
        return (np.arange(count, dtype=np.float64) - 0.5 * (count - 1)) * self.pixel_rad

    @property
    def intensity_bytes(self) -> int:
        """Size of the intensity without compression."""
        return 4 * math.prod(self.shape)

    def to_json(self) -> str:
        """Write the spec as JSON; `from_json` gives back an equal one, to the last bit of each float."""
        content = dataclasses.asdict(self) | {"fingerprint_parts": dict(self.fingerprint_parts)}
        return json.dumps(content, allow_nan=False)

    @classmethod
    def from_json(cls, text: str, *, where: str = "cube") -> CubeSpec:
        """Read what `to_json` wrote; CubeError (beginning with `where`) for anything else."""
        try:
            content: dict[str, Any] = json.loads(text)
            for name in ("shape", "tile", "history"):
                content[name] = tuple(content[name])
            content["maps"] = tuple((str(name), str(unit)) for name, unit in content["maps"])
            spec = cls(**content)
        except (ValueError, TypeError, KeyError, AttributeError) as error:
            raise CubeError(f"{where}: the description of the cube is damaged ({error})") from None
        spec.validate()
        return spec

    def validate(self) -> None:
        """Refuse a spec that cannot be stored or written to FITS.

        Raises
        ------
        CubeError
            Naming the attribute, what it is and what it must be.
        """
        self._check_grid()
        for name in ("velocity_width", "rest_frequency", "pixel_rad"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value > 0):
                raise CubeError(f"cube: {name} is {value}; wanted a positive number")
        for name in ("velocity_start", "centre_lon", "centre_lat", "background_K"):
            if not math.isfinite(getattr(self, name)):
                raise CubeError(f"cube: {name} is {getattr(self, name)}; wanted a finite number")
        if abs(self.centre_lat) > 90:
            raise CubeError(f"cube: centre_lat is {self.centre_lat}; wanted -90 to 90 degrees")
        if self.background_K < 0:
            raise CubeError(f"cube: background_K is {self.background_K}; wanted 0 or more")
        if self.unit not in UNITS:
            raise CubeError(f"cube: unit is {self.unit!r}; wanted one of {', '.join(UNITS)}")
        self._check_texts()

    def _check_grid(self) -> None:
        for name, length in (("shape", 3), ("tile", 2)):
            value = getattr(self, name)
            if len(value) != length or any(type(n) is not int or n < 1 for n in value):
                raise CubeError(f"cube: {name} is {value}; wanted {length} positive whole numbers")

    def _check_texts(self) -> None:
        names = [name for name, _ in self.maps]
        if len(set(names)) != len(names) or not all(name.isidentifier() for name in names):
            raise CubeError(f"cube: maps are called {names}; wanted different plain words")
        for text in (self.molecule, self.line, self.fingerprint, *names, *(unit for _, unit in self.maps)):
            if not (text.isascii() and (text == "" or text.isprintable())):
                raise CubeError(f"cube: {text!r} holds characters that FITS keywords cannot; wanted ASCII")
