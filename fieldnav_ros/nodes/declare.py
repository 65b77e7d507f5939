"""Declaring a node's parameters from a table of settings, with one sentence for whatever is wrong with a value."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

from rcl_interfaces.msg import FloatingPointRange, IntegerRange, ParameterDescriptor
from rclpy.node import Node
from rclpy.parameter import Parameter as RosParameter

from fieldnav_ros.errors import InputError
from fieldnav_ros.parameters import TABLE

Value = bool | int | float | str | list[str]
_KINDS: dict[type, str] = {
    bool: "true or false", int: "a whole number", float: "a number", str: "a text", list: "a list of texts",
}  # fmt: skip
_NOT_OURS = ("use_sim_time", "start_type_description_service", "qos_overrides.")


@dataclass(frozen=True)
class Setting:
    """One parameter of a node: name, default, meaning with unit; bounds or choices; whether it may change later."""

    name: str
    default: Value
    meaning: str
    low: float = 0.0
    high: float = 0.0
    choices: tuple[str, ...] = ()
    live: bool = False

    def check(self, value: object) -> None:
        """Raise InputError unless the value is of the right kind and within its bounds."""
        kind = type(self.default)
        right = isinstance(value, (list, tuple)) if kind is list else isinstance(value, kind)
        if not right or (kind is int and isinstance(value, bool)):
            raise InputError.of(self.name, value, _KINDS[kind])
        if isinstance(value, (int, float)) and kind in (int, float) and not self.low <= value <= self.high:
            raise InputError.of(self.name, value, f"from {self.low:g} to {self.high:g}")
        if self.choices and value not in self.choices:
            raise InputError.of(self.name, value, "one of " + ", ".join(self.choices))

    def descriptor(self) -> ParameterDescriptor:
        """Return the descriptor by which ROS tools know meaning and range."""
        extra = "one of " + ", ".join(self.choices) if self.choices else ""
        kind = type(self.default)
        return ParameterDescriptor(
            name=self.name,
            description=self.meaning,
            additional_constraints=extra,
            read_only=not self.live,
            floating_point_range=(
                [FloatingPointRange(from_value=float(self.low), to_value=float(self.high))] if kind is float else []
            ),
            integer_range=[IntegerRange(from_value=int(self.low), to_value=int(self.high))] if kind is int else [],
        )


def tunable_settings() -> tuple[Setting, ...]:
    """Return the nine tunable numbers as settings that may change while the node runs."""
    return tuple(
        Setting(row.ros_name, row.default, f"{row.meaning} [{row.unit}]", row.low, row.high, live=True)
        for row in TABLE
    )  # fmt: skip


def declare(node: Node, settings: Iterable[Setting]) -> dict[str, Any]:
    """Declare the settings and return their values by name.

    Raises InputError, before anything is declared, on an override that is of the wrong kind, out of bounds, or
    under a name that neither the settings nor ROS itself know (ROS would ignore a misspelt name without a word).
    """
    table = {setting.name: setting for setting in settings}
    overrides: dict[str, RosParameter] = node._parameter_overrides  # rclpy offers no public view of them
    for name, given in list(overrides.items()):
        if name in table:
            if isinstance(table[name].default, float) and given.type_ == RosParameter.Type.INTEGER:
                given = overrides[name] = RosParameter(name, value=float(given.value))  # YAML's 1 is meant as 1.0
            table[name].check(given.value)
        elif not name.startswith(_NOT_OURS) and not node.has_parameter(name):
            raise InputError(f"{name} is not a known parameter of {node.get_name()}")
    for setting in table.values():
        node.declare_parameter(setting.name, setting.default, setting.descriptor())
    return {name: node.get_parameter(name).value for name in table}
