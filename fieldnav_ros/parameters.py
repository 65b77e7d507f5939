"""The one table of the nine tunable numbers.

ROS parameter descriptors, the YAML in ``config/``, the README's table and the search space are made
from this table or tested against it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from numbers import Real
from typing import Any, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from fieldnav_ros.errors import InputError, clipped
from fieldnav_ros.model import Frozen, Number

Scale = Literal["linear", "log"]
FloatArray = NDArray[np.float64]


class Numbers(NamedTuple):
    """The nine numbers as the maths uses them: floats, or arrays that broadcast with the rows."""

    turn_radius: Any
    turn_softness: Any
    motion_lead: Any
    guard_distance: Any
    guard_fade: Any
    sidestep: Any
    steer_gain: Any
    arrival_gain: Any
    lateral_accel: Any


def _number(
    group: str, symbol: str, unit: str, default: float, low: float, high: float, scale: Scale, meaning: str
) -> Any:
    return Field(
        default=default,
        ge=low,
        le=high,
        description=meaning,
        json_schema_extra={"group": group, "symbol": symbol, "unit": unit, "scale": scale},
    )


class ParameterSet(Frozen):
    """Values of the nine tunable numbers; the field declarations are the table."""

    turn_radius: Number = _number(
        "field", "d_e", "m", 0.15, 0.03, 0.40, "log",
        "radius of the two turning circles that line up with the goal heading",
    )  # fmt: skip
    turn_softness: Number = _number(
        "field", "K_r", "m", 0.10, 0.005, 0.50, "log",
        "how gently the way in bends towards those circles",
    )  # fmt: skip
    motion_lead: Number = _number(
        "field", "K_o", "s", 0.30, 0.0, 0.60, "linear",
        "how far ahead all motion is looked at",
    )  # fmt: skip
    guard_distance: Number = _number(
        "field", "d_min", "m", 0.16, 0.08, 0.35, "log",
        "distance wanted between the centres of the robot and an obstacle of its size",
    )  # fmt: skip
    guard_fade: Number = _number(
        "field", "delta", "m", 0.05, 0.01, 0.30, "log",
        "half the width over which that wish fades out",
    )  # fmt: skip
    sidestep: Number = _number(
        "field", "own", "rad", 0.40, 0.0, 1.5, "linear",
        "step to either side in which ways past are tried: 1, 2 and 4 of it",
    )  # fmt: skip
    steer_gain: Number = _number(
        "drive", "K_w", "s^-1 rad^-1/2", 5.0, 1.0, 20.0, "log",
        "turn rate per square root of heading error",
    )  # fmt: skip
    arrival_gain: Number = _number(
        "drive", "K_p", "s^-1", 2.0, 1.0, 40.0, "log",
        "slows down with the distance left",
    )  # fmt: skip
    lateral_accel: Number = _number(
        "drive", "R_m", "m s^-2", 1.0, 0.3, 12.0, "log",
        "bounds speed times turn rate",
    )  # fmt: skip

    @classmethod
    def from_ros(cls, values: Mapping[str, object], source: str = "parameters") -> ParameterSet:
        """Make a set from ROS names (``field.turn_radius``); names left out keep their defaults.

        Raises InputError, naming the parameter, its value and the bound, on an unknown name, a value
        that is no number, NaN, infinity or out of range.
        """
        fields = {}
        for name, value in values.items():
            if name not in BY_ROS_NAME:
                raise InputError(f"{source}: {clipped(str(name))} is not a known parameter")
            parameter = BY_ROS_NAME[name]
            # a bool is an int to Python and a NumPy number is none, hence Real and not bool; NaN fails the comparison
            number = isinstance(value, Real) and not isinstance(value, bool)
            if not number or not parameter.low <= value <= parameter.high:  # type: ignore[operator]  # a Real
                bound = f"a number from {parameter.low:g} to {parameter.high:g} {parameter.unit}"
                raise InputError.of(f"{source}: {name}", value, bound)
            fields[parameter.name] = float(value)  # type: ignore[arg-type]  # a Real
        return cls(**fields)

    def to_ros(self) -> dict[str, float]:
        """Return the set under its ROS parameter names, in table order."""
        return {parameter.ros_name: float(getattr(self, parameter.name)) for parameter in TABLE}

    @classmethod
    def from_array(cls, values: Sequence[float] | FloatArray) -> ParameterSet:
        """Make a set from nine values in table order; InputError as ``from_ros`` where one is not usable."""
        if len(values) != len(TABLE):
            raise InputError.of("number of parameter values", len(values), str(len(TABLE)))
        return cls.from_ros({parameter.ros_name: value for parameter, value in zip(TABLE, values)})

    def to_array(self) -> FloatArray:
        """Return the nine values in table order."""
        return np.array([getattr(self, parameter.name) for parameter in TABLE])

    def numbers(self) -> Numbers:
        """Return the set as plain floats for the maths."""
        return Numbers(*(float(getattr(self, parameter.name)) for parameter in TABLE))


@dataclass(frozen=True)
class Parameter:
    """One row of the table."""

    name: str
    group: str
    symbol: str
    unit: str
    default: float
    low: float
    high: float
    scale: Scale
    meaning: str

    @property
    def ros_name(self) -> str:
        """Name as a ROS parameter of the guidance node."""
        return f"{self.group}.{self.name}"

    def to_unit(self, value: float) -> float:
        """Map a value from ``low..high`` to 0..1 on the parameter's own scale."""
        if self.scale == "log":
            return math.log(value / self.low) / math.log(self.high / self.low)
        return (value - self.low) / (self.high - self.low)

    def from_unit(self, unit: float) -> float:
        """Map 0..1 back to ``low..high``; the result never leaves the range. InputError on NaN."""
        if math.isnan(unit):
            raise InputError.of(f"place of {self.ros_name} in its range", unit, "a number from 0 to 1")
        unit = min(max(unit, 0.0), 1.0)
        if self.scale == "log":
            value = self.low * math.exp(unit * math.log(self.high / self.low))
        else:
            value = self.low + unit * (self.high - self.low)
        return min(max(value, self.low), self.high)  # rounding may carry it past a bound


def _row(name: str, field: Any) -> Parameter:
    bounds = {type(item).__name__: item for item in field.metadata}
    return Parameter(
        name=name,
        default=field.default,
        low=bounds["Ge"].ge,
        high=bounds["Le"].le,
        meaning=field.description,
        **field.json_schema_extra,
    )


TABLE: tuple[Parameter, ...] = tuple(_row(name, field) for name, field in ParameterSet.model_fields.items())
BY_NAME: dict[str, Parameter] = {parameter.name: parameter for parameter in TABLE}
BY_ROS_NAME: dict[str, Parameter] = {parameter.ros_name: parameter for parameter in TABLE}
DEFAULTS = ParameterSet()


def stack(sets: Sequence[ParameterSet], repeat: int = 1) -> Numbers:
    """Return the sets as nine arrays of ``len(sets) * repeat`` rows, each set ``repeat`` times in a row."""
    table = np.repeat(np.array([item.to_array() for item in sets]).T, repeat, axis=1)
    return Numbers(*table)


def markdown_table() -> str:
    """Return the table as the README shows it; ``python -m fieldnav_ros.parameters`` prints it."""
    rows = [
        "| ROS parameter | symbol | unit | default | range | what it does |",
        "| --- | --- | --- | --- | --- | --- |",
    ]
    rows += [
        f"| `{row.ros_name}` | {row.symbol} | {row.unit} | {row.default:g} | {row.low:g} to {row.high:g} "
        f"| {row.meaning} |"
        for row in TABLE
    ]
    return "\n".join(rows) + "\n"


if __name__ == "__main__":
    print(markdown_table(), end="")  # noqa: T201  (a program for people and for the README)
