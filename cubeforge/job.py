"""The job file: one TOML that says everything about a render, as a validated, typed model.

Values are converted to internal units (cgs, radians, kelvins) on the way in. Errors name the key, what was
found and what would do.
"""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    ValidationError,
    model_validator,
)

from cubeforge import quantities
from cubeforge.errors import JobError, nearest


def _quantity(kind: str) -> BeforeValidator:
    return BeforeValidator(lambda value: quantities.convert(value, kind))


def _positive(kind: str) -> BeforeValidator:
    def check(value: Any) -> float:
        number = quantities.convert(value, kind)
        if not number > 0.0:
            raise ValueError(
                f"{value!r} is not positive; a {kind} such as {quantities.EXAMPLES[kind]} would do"
            )
        return number

    return BeforeValidator(check)


Length = Annotated[float, _quantity("length")]
PositiveLength = Annotated[float, _positive("length")]
Velocity = Annotated[float, _quantity("velocity")]
PositiveVelocity = Annotated[float, _positive("velocity")]
Temperature = Annotated[float, _quantity("temperature")]
Angle = Annotated[float, _quantity("angle")]
Number = Annotated[float, _positive("dimensionless")]

_NUMBER = re.compile(r"^\s*[-+]?(\d|\.\d)")


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True)


class Units(_Section):
    """What one unit of the stored numbers is. Momentum density and pressure follow from the others if not given."""

    length: PositiveLength | None = None
    density: Annotated[float, _positive("density")] | None = None
    velocity: PositiveVelocity | None = None
    temperature: Annotated[float, _positive("temperature")] | None = None
    momentum: Annotated[float, _positive("momentum density")] | None = None
    pressure: Annotated[float, _positive("pressure")] | None = None


class SnapshotSection(_Section):
    """Where the snapshot is, and its units."""

    path: str
    units: Units = Units()


class FieldOrConstant(_Section):
    """A stored field by its name, or a constant in cgs."""

    field: str | None = None
    constant: float | None = None


def _source(kind: str) -> BeforeValidator:
    def read(value: Any) -> FieldOrConstant:
        if isinstance(value, FieldOrConstant):
            return value
        if isinstance(value, str) and not _NUMBER.match(value):
            return FieldOrConstant(field=value)
        return FieldOrConstant(constant=quantities.convert(value, kind))

    return BeforeValidator(read)


DensitySource = Annotated[FieldOrConstant, _source("density")]
TemperatureSource = Annotated[FieldOrConstant, _source("temperature")]
PressureSource = Annotated[FieldOrConstant, _source("pressure")]
VelocitySource = Annotated[FieldOrConstant, _source("velocity")]
MomentumSource = Annotated[FieldOrConstant, _source("momentum density")]


class Microturbulence(_Section):
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


class GasSection(_Section):
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


class LineSection(_Section):
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


_AXES = {
    sign + name: tuple((-1.0 if sign == "-" else 1.0) if axis == name else 0.0 for axis in "xyz")
    for sign in ("", "+", "-")
    for name in "xyz"
}


def _direction(value: Any) -> tuple[float, float, float]:
    if isinstance(value, str):
        if value not in _AXES:
            raise ValueError(
                f'{value!r} is not an axis; "+x", "-z", or a vector such as [1, 0.5, -2] would do'
            )
        return _AXES[value]  # type: ignore[return-value]
    if isinstance(value, list | tuple) and len(value) == 3 and all(isinstance(v, int | float) for v in value):
        return float(value[0]), float(value[1]), float(value[2])
    raise ValueError(f'{value!r} is not a direction; "+x", "-z", or a vector such as [1, 0.5, -2] would do')


Direction = Annotated[tuple[float, float, float], BeforeValidator(_direction)]
Point = tuple[Length, Length, Length]


class Sky(_Section):
    """Where on the sky the centre of the image is put (ICRS)."""

    longitude: Angle = 0.0
    latitude: Angle = 0.0


class ViewSection(_Section):
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


class BoxSection(_Section):
    """Corners of a crop."""

    lo: Point
    hi: Point


class SphereSection(_Section):
    """A crop by radius."""

    centre: Point
    radius: PositiveLength


class RegionSection(_Section):
    """What part of space is rendered, and whether it repeats."""

    box: BoxSection | None = None
    sphere: SphereSection | None = None
    periodic: tuple[Literal["x", "y", "z"], ...] = ()


def _systemic(value: Any) -> float | str:
    if value == "mean":
        return "mean"
    try:
        return quantities.convert(value, "velocity")
    except ValueError as error:
        raise ValueError(f'{error}, or "mean" for the mass-weighted mean') from None


Systemic = Annotated[float | Literal["mean"], BeforeValidator(_systemic)]


class ChannelSection(_Section):
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


def _ray_count(value: Any) -> int | str:
    if value == "auto":
        return "auto"
    if isinstance(value, int) and not isinstance(value, bool) and 1 <= value <= 256:
        return value
    raise ValueError(f'{value!r} is neither "auto" nor a whole number from 1 to 256')


def _power_of_two_below(value: int) -> int:
    return 1 << (value.bit_length() - 1)


RayCount = Annotated[int | Literal["auto"], BeforeValidator(_ray_count)]


class RaySection(_Section):
    """Sub-rays of a pixel: a fixed number a side, or "auto": small squares in front of small cells.

    With "auto" a pixel is cut into four squares, and each of these again, until the squares are at most `spacing` cell
    sides wide, of the smallest cells behind each; a pixel is left whole, with one ray, if it is at most half as wide.
    With the default every cubic cell is met by a ray, and the mass on the image of a slanted view is right to 1e-4
    (`tests/engine/test_column_closure.py`). `most` is the most rays a side, rounded down to a power of two. `error`
    asks for a map of the sampling error, from two sets of rays in each pixel: it takes at least four rays a pixel.
    """

    per_side: RayCount = "auto"
    most: Annotated[int, Field(ge=1, le=256), AfterValidator(_power_of_two_below)] = 64
    spacing: Annotated[float, Field(gt=0.0, le=1.0)] = 0.5
    error: bool = False


class MarchSection(_Section):
    """How the velocity varies inside a cell: evenly, with limited slopes, or not at all."""

    reconstruction: Literal["linear", "constant"] = "linear"
    limiter: Literal["monotonised central", "minmod"] = "monotonised central"


class OutputSection(_Section):
    """The cube."""

    cube: str
    brightness: Literal["K", "Jy/sr", "Jy/pixel"] = "K"
    background: Literal["subtracted", "kept"] = "subtracted"
    tile: Annotated[int, Field(ge=8, le=4096, multiple_of=8)] = 64


class Job(_Section):
    """One render. `folder` is where relative paths start; `raw` is what the file says, for other processes."""

    snapshot: SnapshotSection
    gas: GasSection
    line: LineSection
    view: ViewSection
    channels: ChannelSection
    output: OutputSection
    region: RegionSection = RegionSection()
    rays: RaySection = RaySection()
    march: MarchSection = MarchSection()
    folder: str = Field(default=".", exclude=True)
    raw: dict[str, Any] = Field(default_factory=dict, exclude=True)

    def resolve(self, path: str) -> Path:
        """A path of the job file, relative to the file's own folder."""
        return (Path(self.folder) / Path(path).expanduser()).resolve()

    @property
    def snapshot_path(self) -> Path:
        """Where the snapshot is."""
        return self.resolve(self.snapshot.path)

    @property
    def cube_path(self) -> Path:
        """Where the cube goes."""
        return self.resolve(self.output.cube)


def _known_keys(location: tuple[Any, ...]) -> list[str]:
    """Keys that the section at `location` takes."""
    model: Any = Job
    for part in location:
        field = model.model_fields.get(part) if hasattr(model, "model_fields") else None
        if field is None:
            return []
        inner = [
            a
            for a in (field.annotation, *getattr(field.annotation, "__args__", ()))
            if hasattr(a, "model_fields")
        ]
        if not inner:
            return []
        model = inner[0]
    return [name for name in model.model_fields if name not in ("folder", "raw")]


def _sentence(error: Any, source: str) -> str:
    location = tuple(
        part
        for part in error["loc"]
        if not (isinstance(part, str) and part.startswith(("function-", "literal[")))
    )
    key = ".".join(str(part) for part in location)
    found = error.get("input")
    match error["type"]:
        case "extra_forbidden":
            known = _known_keys(location[:-1])
            return f"{source}: unknown key {key!r}; {nearest(str(location[-1]), known)}"
        case "missing":
            return f"{source}: {key} is missing"
        case "value_error":
            return f"{source}: {key}: {error['ctx']['error']}"
        case "literal_error":
            return f"{source}: {key}: {found!r} is not one of {error['ctx']['expected']}"
        case _:
            return f"{source}: {key}: {error['msg'][0].lower() + error['msg'][1:]}, found {found!r}"


def parse_job(data: dict[str, Any], *, folder: str | Path = ".", source: str = "job") -> Job:
    """Validate a job given as nested dictionaries, as TOML gives them.

    Raises
    ------
    JobError
        One line for each thing that is wrong.
    """
    for reserved in ("folder", "raw"):
        if reserved in data:
            raise JobError(f"{source}: unknown key {reserved!r}; {nearest(reserved, _known_keys(()))}")
    try:
        return Job.model_validate({**data, "folder": str(folder), "raw": data})
    except ValidationError as error:
        lines = dict.fromkeys(_sentence(e, source) for e in error.errors())
        raise JobError("\n".join(lines)) from None


def load_job(path: str | Path) -> Job:
    """Read a job file.

    Raises
    ------
    JobError
        The file is missing, is not TOML, or says something that cannot be used.
    """
    path = Path(path)
    try:
        with path.open("rb") as file:
            data = tomllib.load(file)
    except FileNotFoundError:
        raise JobError(f"{path}: there is no such job file") from None
    except IsADirectoryError:
        raise JobError(f"{path}: is a folder; a job file (TOML) is wanted") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise JobError(f"{path}: not a TOML file: {error}") from None
    return parse_job(data, folder=path.resolve().parent, source=str(path))
