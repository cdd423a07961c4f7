"""Values of a job file on their way in: quantities, fields or constants, directions, counts."""

from __future__ import annotations

import re
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict

from cubeforge import quantities


def _quantity(kind: str) -> BeforeValidator:
    return BeforeValidator(lambda value: quantities.convert(value, kind))


def positive(kind: str) -> BeforeValidator:
    def check(value: Any) -> float:
        number = quantities.convert(value, kind)
        if not number > 0.0:
            raise ValueError(
                f"{value!r} is not positive; a {kind} such as {quantities.EXAMPLES[kind]} would do"
            )
        return number

    return BeforeValidator(check)


Length = Annotated[float, _quantity("length")]
PositiveLength = Annotated[float, positive("length")]
Velocity = Annotated[float, _quantity("velocity")]
PositiveVelocity = Annotated[float, positive("velocity")]
Temperature = Annotated[float, _quantity("temperature")]
Angle = Annotated[float, _quantity("angle")]
Number = Annotated[float, positive("dimensionless")]

_NUMBER = re.compile(r"^\s*[-+]?(\d|\.\d)")


class Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True)


class FieldOrConstant(Section):
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


def _systemic(value: Any) -> float | str:
    if value == "mean":
        return "mean"
    try:
        return quantities.convert(value, "velocity")
    except ValueError as error:
        raise ValueError(f'{error}, or "mean" for the mass-weighted mean') from None


Systemic = Annotated[float | Literal["mean"], BeforeValidator(_systemic)]


def _ray_count(value: Any) -> int | str:
    if value == "auto":
        return "auto"
    if isinstance(value, int) and not isinstance(value, bool) and 1 <= value <= 256:
        return value
    raise ValueError(f'{value!r} is neither "auto" nor a whole number from 1 to 256')


def power_of_two_below(value: int) -> int:
    return 1 << (value.bit_length() - 1)


RayCount = Annotated[int | Literal["auto"], BeforeValidator(_ray_count)]
