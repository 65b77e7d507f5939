"""A yard: floor and walls, robot, start and goal regions, obstacle behaviour, plant. Loaded from YAML."""

from __future__ import annotations

import math
import re
from pathlib import Path
from typing import Annotated, Any

import yaml
from pydantic import AfterValidator, Field, ValidationError, model_validator
from yaml.composer import ComposerError
from yaml.constructor import ConstructorError

from fieldnav_ros.errors import InputError, clipped, shown
from fieldnav_ros.model import Frozen, Number, Pose, Positive, Robot

LARGEST_FILE = 1 << 16
"""Most bytes of a file that are read: twenty times what a yard takes, and read in seconds at worst."""
FARTHEST = 500.0
"""Bound of coordinates in m: nearer than where ``world.carts`` keeps carts that take no part."""
ROUNDING = 1e-9


def _ordered(pair: tuple[float, float]) -> tuple[float, float]:
    if pair[0] > pair[1]:
        raise ValueError(f"[{pair[0]:g}, {pair[1]:g}] must run from the smaller to the larger value")
    return pair


Coordinate = Annotated[Number, Field(ge=-FARTHEST, le=FARTHEST)]
Range = Annotated[tuple[Coordinate, Coordinate], AfterValidator(_ordered)]
NonNegative = Annotated[Number, Field(ge=0)]
FULL_TURN: tuple[float, float] = (-math.pi, math.pi)


class Floor(Frozen):
    """A rectangle in the floor's frame (m). With walls its edge must not be touched."""

    x: Range
    y: Range
    walled: bool = Field(default=True, strict=True)


class Region(Frozen):
    """Ranges that a pose is drawn from (m, rad)."""

    x: Range
    y: Range
    yaw: Range = FULL_TURN


class Mark(Frozen):
    """A start marked on the floor, for robots that are placed by hand (m, rad)."""

    name: str = Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_-]{0,19}$", description="as written on the floor")
    x: Coordinate
    y: Coordinate
    yaw: Number


class Arrival(Frozen):
    """How close counts as arrived: centre distance (m) and heading error (rad)."""

    position: Positive = 0.03
    heading: Positive = math.radians(15.0)


class Grade(Frozen):
    """How hard the floor is: other carts, their speeds (m/s), time allowed (s)."""

    carts: int = Field(default=0, ge=0, le=100, strict=True)
    speed: Range = (0.0, 0.0)
    time_limit: Positive = Field(le=600)

    @model_validator(mode="after")
    def _speeds_not_negative(self) -> Grade:
        if self.speed[0] < 0:
            raise ValueError(f"speed starts at {self.speed[0]:g}, must be at least 0")
        return self


class Plant(Frozen):
    """How the simulated robot departs from the ideal one; ranges are what a real cart shows."""

    accel_scale: Number = Field(default=1.0, gt=0, le=2, description="real over nominal wheel acceleration")
    command_delay: Number = Field(default=0.0, ge=0, le=0.5, description="s from command to wheels")
    wheel_mismatch: Number = Field(default=0.0, ge=-0.3, le=0.3, description="right over left wheel speed, less one")
    slip: Number = Field(default=0.0, ge=0, le=0.5, description="largest share of a step's wheel travel lost")
    pose_noise: Number = Field(default=0.0, ge=0, le=0.1, description="standard deviation of x and y in m")
    yaw_noise: Number = Field(default=0.0, ge=0, le=0.5, description="standard deviation of yaw in rad")
    pose_loss: Number = Field(default=0.0, ge=0, le=0.9, description="share of poses that never come")
    pose_rate: Number = Field(default=50.0, ge=5, le=100, description="poses per second")


def _more(low: float, high: float, meaning: str) -> Any:
    return Field(default=(low, high), description=meaning)


class PlantRanges(Frozen):
    """What robots like this one differ by: ranges of departures, added to the plant and kept within its bounds."""

    accel_scale: Range = _more(-0.3, 0.1, "more wheel acceleration, as a share of the nominal one")
    command_delay: Range = _more(0.0, 0.04, "more delay from command to wheels in s")
    wheel_mismatch: Range = _more(-0.04, 0.04, "more right over left wheel speed")
    slip: Range = _more(0.0, 0.1, "more of a step's wheel travel lost at most")
    pose_noise: Range = _more(0.0, 0.003, "more standard deviation of x and y in m")
    yaw_noise: Range = _more(0.0, 0.015, "more standard deviation of yaw in rad")
    pose_loss: Range = _more(0.0, 0.05, "more poses lost, as a share")


class Yard(Frozen):
    """A floor with everything an episode on it needs. All lengths in m, angles in rad, times in s."""

    name: str = Field(min_length=1, max_length=80)
    frame: str = Field(default="map", min_length=1, max_length=80)
    floor: Floor
    robot: Robot
    cart_radius: Positive = 0.06
    start: Region
    goal: Region
    marks: tuple[Mark, ...] = Field(default=(), max_length=50, description="starts marked on the floor")
    spacing: NonNegative = Field(
        default=0.12, description="least gap at the start between a cart and the robot, its goal or another cart"
    )
    arrival: Arrival = Arrival()
    reset_time: NonNegative = Field(default=2.0, description="s between two episodes")
    grades: dict[str, Grade] = Field(min_length=1)
    plant: Plant = Plant()
    plant_ranges: PlantRanges = PlantRanges()

    @model_validator(mode="after")
    def _regions_clear_of_walls(self) -> Yard:
        margin = self.robot.radius if self.floor.walled else 0.0
        for name, region in (("start", self.start), ("goal", self.goal)):
            for axis in ("x", "y"):
                low, high = getattr(self.floor, axis)
                first, last = getattr(region, axis)
                if first < low + margin - ROUNDING or last > high - margin + ROUNDING:
                    raise ValueError(
                        f"{name}.{axis} is [{first:g}, {last:g}], must lie from {low + margin:g} to {high - margin:g}"
                        f" to keep the robot (radius {self.robot.radius:g} m) out of the walls"
                    )
        return self

    @model_validator(mode="after")
    def _marks_clear_of_walls(self) -> Yard:
        margin = self.robot.radius if self.floor.walled else 0.0
        for mark in self.marks:
            for axis in ("x", "y"):
                low, high = getattr(self.floor, axis)
                if not low + margin - ROUNDING <= getattr(mark, axis) <= high - margin + ROUNDING:
                    raise ValueError(
                        f"{axis} of mark {mark.name} is {getattr(mark, axis):g}, must be from {low + margin:g} to"
                        f" {high - margin:g} for the robot (radius {self.robot.radius:g} m) to stand there"
                    )
        names = [mark.name for mark in self.marks]
        for name in names:
            if names.count(name) > 1:
                raise ValueError(f"mark {name} is there {names.count(name)} times, must be there once")
        return self

    def mark_at(self, pose: Pose) -> str | None:
        """Return the name of the mark at exactly this pose; None where there is none."""
        here = (pose.x, pose.y, pose.yaw)
        return next((mark.name for mark in self.marks if (mark.x, mark.y, mark.yaw) == here), None)

    @model_validator(mode="after")
    def _carts_fit(self) -> Yard:
        if any(grade.carts for grade in self.grades.values()):
            for axis in ("x", "y"):
                low, high = getattr(self.floor, axis)
                if 2.0 * self.cart_radius > high - low:
                    raise ValueError(
                        f"cart_radius is {self.cart_radius:g}, must be at most {0.5 * (high - low):g}"
                        f" to fit a cart between the ends of floor.{axis}"
                    )
        return self

    def grade(self, name: str) -> Grade:
        """Return the grade called ``name``; InputError names those there are."""
        if name not in self.grades:
            raise InputError.of(f"grade in yard {self.name!r}", name, "one of " + ", ".join(self.grades))
        return self.grades[name]


class _Loader(yaml.SafeLoader):
    """Safe loading that also refuses what would grow or vanish unseen: aliases and keys given twice."""

    def compose_node(self, parent: Any, index: Any) -> Any:
        # a few lines of aliases of aliases stand for billions of values; ROS parameter files have none either
        if self.check_event(yaml.AliasEvent):
            mark = self.peek_event().start_mark  # type: ignore[no-untyped-call]  # PyYAML's stubs leave it open
            raise ComposerError(None, None, "aliases (*name) are not allowed", mark)
        return super().compose_node(parent, index)

    def construct_mapping(self, node: Any, deep: bool = False) -> Any:
        mapping = super().construct_mapping(node, deep)
        if len(mapping) < len(node.value):
            seen = set()
            for key_node, _ in node.value:
                key = self.construct_object(key_node, deep=True)
                if key in seen:
                    raise ConstructorError(None, None, f"key {shown(key)} is given twice", key_node.start_mark)
                seen.add(key)
        return mapping


# PyYAML speaks YAML 1.1, where 1e-3 is text; here it is the number of YAML 1.2 (core schema) and of ROS
_Loader.add_implicit_resolver(
    "tag:yaml.org,2002:float", re.compile(r"^[-+]?(\d+\.?\d*|\.\d+)[eE][-+]?\d+$"), list("-+.0123456789")
)
# what PyYAML's own constructors let through on scalars that do not fit an explicit tag
_MALFORMED = (yaml.YAMLError, ValueError, ArithmeticError, LookupError, AttributeError, TypeError, RecursionError)


def read_yaml(path: Path) -> Any:
    """Read a YAML file by safe loading only; InputError in one sentence for whatever is wrong with it.

    Plain types alone come back. Aliases and keys given twice are refused, larger files than LARGEST_FILE too.
    """
    try:
        with path.open("rb") as file:
            raw = file.read(LARGEST_FILE + 1)
    except (OSError, ValueError) as error:  # ValueError: a path that no file can have
        raise InputError(f"{path}: {getattr(error, 'strerror', None) or error}") from error
    if len(raw) > LARGEST_FILE:
        raise InputError(f"{path}: is too large, must be at most {LARGEST_FILE} bytes")
    try:
        return yaml.load(raw.decode("utf-8"), Loader=_Loader)
    except _MALFORMED as error:
        raise InputError(f"{path}: not readable as YAML{_problem(error)}") from error


def _problem(error: Exception) -> str:
    mark = getattr(error, "problem_mark", None)
    where = f" at line {mark.line + 1}" if mark else ""
    if isinstance(error, RecursionError):
        return f"{where}: nested too deeply"
    problem = getattr(error, "problem", None) or getattr(error, "reason", None)
    return f"{where}: {clipped(problem or 'a value does not fit its type', 200)}"


def load_yard(path: str | Path) -> Yard:
    """Load and check a yard file; InputError names file, key, value and bound."""
    path = Path(path)
    content = read_yaml(path)
    if not isinstance(content, dict):
        raise InputError(f"{path}: holds {shown(content)}, must hold the keys of a yard")
    try:
        return Yard.model_validate(content)
    except ValidationError as error:
        raise InputError.from_validation(error, str(path)) from error
