"""The sections of a job file."""

from __future__ import annotations

from typing import Annotated, Literal, Self

from pydantic import AfterValidator, Field, model_validator

from cubeforge import quantities
from cubeforge.job.values import (
    Angle,
    DensitySource,
    Direction,
    MomentumSource,
    Number,
    Point,
    PositiveLength,
    PositiveVelocity,
    PressureSource,
    RayCount,
    Section,
    Systemic,
    Temperature,
    TemperatureSource,
    Velocity,
    VelocitySource,
    positive,
    power_of_two_below,
)


class Units(Section):
    """What one unit of the stored numbers is. Momentum density and pressure follow from the others if not given."""

    length: PositiveLength | None = None
    density: Annotated[float, positive("density")] | None = None
    velocity: PositiveVelocity | None = None
    temperature: Annotated[float, positive("temperature")] | None = None
    momentum: Annotated[float, positive("momentum density")] | None = None
    pressure: Annotated[float, positive("pressure")] | None = None


class SnapshotSection(Section):
    """Where the snapshot is, and its units."""

    path: str
    units: Units = Units()


class Microturbulence(Section):
    """Width of unresolved motion: one of dispersion sigma, b = sqrt(2) sigma, full width at half maximum."""

    sigma: Velocity | None = None
    b: Velocity | None = None
    fwhm: Velocity | None = None

    @model_validator(mode="after")
    def _one(self) -> Self:
        given = [value for value in (self.sigma, self.b, self.fwhm) if value is not None]
        if len(given) != 1:
            raise ValueError('say which width it is, once: { sigma = "0.1 km/s" }, or b, or fwhm')
        if given[0] < 0.0:
            raise ValueError("a width is not negative")
        return self


class GasSection(Section):
    """Which stored field is what."""

    density: DensitySource
    temperature: TemperatureSource | None = None
    pressure: PressureSource | None = None
    velocity: tuple[VelocitySource, VelocitySource, VelocitySource] | None = None
    momentum: tuple[MomentumSource, MomentumSource, MomentumSource] | None = None
    hydrogen_fraction: Annotated[float, Field(gt=0.0, le=1.0)] = 0.71
    mean_molecular_weight: Number = 2.33
    microturbulence: Microturbulence | None = None
    bad_cells: Literal["stop", "clear"] = "stop"

    @model_validator(mode="after")
    def _complete(self) -> Self:
        if (self.temperature is None) == (self.pressure is None):
            raise ValueError('give one of temperature (a field, or "15 K") and pressure (a field)')
        if (self.velocity is None) == (self.momentum is None):
            raise ValueError('give one of velocity and momentum: three fields, or constants such as "0 km/s"')
        return self


class LineSection(Section):
    """The line, its carrier, and how the levels are populated."""

    molecule: str
    transition: str | int = 1
    abundance: Number
    excitation: Literal["lte"] = "lte"
    background: Temperature = 2.725

    @model_validator(mode="after")
    def _background(self) -> Self:
        if self.background < 0.0:
            raise ValueError("background: a temperature below 0 K; 2.725 K is the cosmic one, 0 K means none")
        return self


class Sky(Section):
    """Where on the sky the centre of the image is put (ICRS)."""

    longitude: Angle = 0.0
    latitude: Angle = 0.0


class ViewSection(Section):
    """Direction of looking (away from the observer), distance and pixel grid; north is up, east is left."""

    toward: Direction = (0.0, 0.0, -1.0)
    north: Direction | None = None
    position_angle: Angle = 0.0
    distance: PositiveLength
    pixel: str
    size: tuple[Annotated[int, Field(ge=1)], Annotated[int, Field(ge=1)]] | None = None
    centre: Point | None = None
    sky: Sky = Sky()

    @property
    def pixel_length(self) -> float:
        """Side of a pixel in cm, at the cloud."""
        try:
            length = quantities.convert(self.pixel, "length")
        except ValueError:
            length = quantities.convert(self.pixel, "angle") * self.distance
        return length

    @model_validator(mode="after")
    def _pixel(self) -> Self:
        try:
            length = self.pixel_length
        except ValueError:
            raise ValueError(
                f'pixel: {self.pixel!r} is neither a length ("0.01 pc") nor an angle ("5 arcsec")'
            ) from None
        if not length > 0.0:
            raise ValueError(f"pixel: {self.pixel!r} is not positive")
        return self

    @property
    def north_or_default(self) -> tuple[float, float, float]:
        """The given north, else z, or y when looking along z."""
        if self.north is not None:
            return self.north
        x, y, _ = self.toward
        return (0.0, 1.0, 0.0) if x == 0.0 and y == 0.0 else (0.0, 0.0, 1.0)


class BoxSection(Section):
    """Corners of a crop."""

    lo: Point
    hi: Point


class SphereSection(Section):
    """A crop by radius."""

    centre: Point
    radius: PositiveLength


class RegionSection(Section):
    """What part of space is rendered, and whether it repeats."""

    box: BoxSection | None = None
    sphere: SphereSection | None = None
    periodic: tuple[Literal["x", "y", "z"], ...] = ()


class ChannelSection(Section):
    """Velocity channels: centres from `first` to `last` in steps of `width` (radio convention)."""

    first: Velocity
    last: Velocity
    width: PositiveVelocity
    systemic: Systemic = 0.0
    sampling: Literal["mean", "centre"] = "mean"
    outside: Annotated[float, Field(ge=0.0, le=1.0)] = 0.01

    @property
    def count(self) -> int:
        """Number of channels."""
        return round((self.last - self.first) / self.width) + 1

    @model_validator(mode="after")
    def _even(self) -> Self:
        if self.last < self.first:
            raise ValueError("last is below first; velocities grow along the axis")
        steps = (self.last - self.first) / self.width
        if abs(steps - round(steps)) > 1e-6 * max(1.0, steps):
            raise ValueError(
                f"from first to last are {steps:.6g} widths; a whole number is wanted, such as "
                f'last = "{(self.first + round(steps) * self.width) / 1e5:.10g} km/s"'
            )
        return self


class RaySection(Section):
    """Sub-rays of a pixel: a fixed number a side, or "auto": small squares in front of small cells.

    With "auto" a pixel is cut into four squares, and each of these again, until the squares are at most `spacing` cell
    sides wide, of the smallest cells behind each; a pixel is left whole, with one ray, if it is at most half as wide.
    With the default every cubic cell is met by a ray, and the mass on the image of a slanted view is right to 1e-4
    (`tests/engine/test_column_closure.py`). `most` is the most rays a side, rounded down to a power of two. `error`
    asks for a map of the sampling error, from two sets of rays in each pixel: it takes at least four rays a pixel.
    """

    per_side: RayCount = "auto"
    most: Annotated[int, Field(ge=1, le=256), AfterValidator(power_of_two_below)] = 64
    spacing: Annotated[float, Field(gt=0.0, le=1.0)] = 0.5
    error: bool = False


class MarchSection(Section):
    """How the velocity varies inside a cell: evenly, with limited slopes, or not at all."""

    reconstruction: Literal["linear", "constant"] = "linear"
    limiter: Literal["monotonised central", "minmod"] = "monotonised central"


class OutputSection(Section):
    """The cube."""

    cube: str
    brightness: Literal["K", "Jy/sr", "Jy/pixel"] = "K"
    background: Literal["subtracted", "kept"] = "subtracted"
    tile: Annotated[int, Field(ge=8, le=4096, multiple_of=8)] = 64
