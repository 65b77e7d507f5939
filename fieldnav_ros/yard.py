"""A yard: floor and walls, robot, start and goal regions, obstacle behaviour, plant. Loaded from YAML."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Annotated, Any

import yaml
from pydantic import AfterValidator, Field, ValidationError, model_validator

from fieldnav_ros.errors import InputError, shown
from fieldnav_ros.model import Frozen, Positive, Robot

LARGEST_FILE = 1 << 20


def _ordered(pair: tuple[float, float]) -> tuple[float, float]:
    if pair[0] > pair[1]:
        raise ValueError(f"[{pair[0]:g}, {pair[1]:g}] must run from the smaller to the larger value")
    return pair


Range = Annotated[tuple[float, float], AfterValidator(_ordered)]
NonNegative = Annotated[float, Field(ge=0)]
Share = Annotated[float, Field(ge=0, le=1)]
FULL_TURN: tuple[float, float] = (-math.pi, math.pi)


class Floor(Frozen):
    """A rectangle in the floor's frame (m). With walls its edge must not be touched."""

    x: Range
    y: Range
    walled: bool = True


class Region(Frozen):
    """Ranges that a pose is drawn from (m, rad)."""

    x: Range
    y: Range
    yaw: Range = FULL_TURN


class Arrival(Frozen):
    """How close counts as arrived: centre distance (m) and heading error (rad)."""

    position: Positive = 0.03
    heading: Positive = math.radians(15.0)


class Grade(Frozen):
    """How hard the floor is: other carts, their speeds (m/s), time allowed (s)."""

    carts: int = Field(default=0, ge=0, le=100)
    speed: Range = (0.0, 0.0)
    time_limit: Positive = Field(le=600)

    @model_validator(mode="after")
    def _speeds_not_negative(self) -> Grade:
        if self.speed[0] < 0:
            raise ValueError(f"speed starts at {self.speed[0]:g}, must be at least 0")
        return self


class Plant(Frozen):
    """How the simulated robot departs from the ideal one; ranges are what a real cart shows."""

    accel_scale: float = Field(default=1.0, gt=0, le=2, description="real over nominal wheel acceleration")
    command_delay: float = Field(default=0.0, ge=0, le=0.5, description="s from command to wheels")
    wheel_mismatch: float = Field(default=0.0, ge=-0.3, le=0.3, description="right over left wheel speed, less one")
    slip: float = Field(default=0.0, ge=0, le=0.5, description="share of wheel travel lost, drawn anew each step")
    pose_noise: float = Field(default=0.0, ge=0, le=0.1, description="standard deviation of x and y in m")
    yaw_noise: float = Field(default=0.0, ge=0, le=0.5, description="standard deviation of yaw in rad")
    pose_loss: float = Field(default=0.0, ge=0, le=0.9, description="share of poses that never come")
    pose_rate: float = Field(default=50.0, ge=5, le=100, description="poses per second")


class Yard(Frozen):
    """A floor with everything an episode on it needs. All lengths in m, angles in rad, times in s."""

    name: str = Field(min_length=1, max_length=80)
    frame: str = Field(default="map", min_length=1, max_length=80)
    floor: Floor
    robot: Robot
    cart_radius: Positive = 0.06
    start: Region
    goal: Region
    spacing: NonNegative = Field(
        default=0.12, description="least gap at the start between a cart and the robot, its goal or another cart"
    )
    arrival: Arrival = Arrival()
    reset_time: NonNegative = Field(default=2.0, description="s between two episodes")
    grades: dict[str, Grade] = Field(min_length=1)
    plant: Plant = Plant()

    @model_validator(mode="after")
    def _regions_clear_of_walls(self) -> Yard:
        margin = self.robot.radius if self.floor.walled else 0.0
        for name, region in (("start", self.start), ("goal", self.goal)):
            for axis in ("x", "y"):
                low, high = getattr(self.floor, axis)
                first, last = getattr(region, axis)
                if first < low + margin or last > high - margin:
                    raise ValueError(
                        f"{name}.{axis} is [{first:g}, {last:g}], must lie from {low + margin:g} to {high - margin:g}"
                        f" to keep the robot (radius {self.robot.radius:g} m) out of the walls"
                    )
        return self

    def grade(self, name: str) -> Grade:
        """Return the grade called ``name``; InputError names those there are."""
        if name not in self.grades:
            raise InputError.of(f"grade in yard {self.name!r}", name, "one of " + ", ".join(self.grades))
        return self.grades[name]


def read_yaml(path: Path) -> Any:
    """Read a YAML file by safe loading only; InputError in one sentence for whatever is wrong with it."""
    try:
        if path.stat().st_size > LARGEST_FILE:
            raise InputError.of(f"{path}: size in bytes", path.stat().st_size, f"at most {LARGEST_FILE}")
        return yaml.safe_load(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(f"{path}: {error.strerror or error}") from error
    except (yaml.YAMLError, UnicodeDecodeError, RecursionError, ValueError) as error:
        mark = getattr(error, "problem_mark", None)
        where = f" at line {mark.line + 1}" if mark else ""
        problem = getattr(error, "problem", None) or type(error).__name__
        raise InputError(f"{path}: not readable as YAML{where}: {problem}") from error


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
