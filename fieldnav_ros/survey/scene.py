"""What is surveyed, and the field all over it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from fieldnav_ros.errors import InputError
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.field.heading import Goal, published_vector
from fieldnav_ros.guide import Memory, Senses, guide
from fieldnav_ros.model import Obstacle, Pose
from fieldnav_ros.parameters import FloatArray, ParameterSet, stack
from fieldnav_ros.yard import Yard

ROUNDING = 1e-9


@dataclass(frozen=True)
class Scene:
    """A yard with a goal and parked obstacles, and the field that is to lead there."""

    yard: Yard
    parameters: ParameterSet
    model: str
    goal: Pose
    obstacles: tuple[Obstacle, ...] = ()

    def check(self) -> Scene:
        """Return the scene; InputError where the robot cannot stand at the goal, or an obstacle is off the floor."""
        robot = self.yard.robot
        margin = robot.radius if self.yard.floor.walled else 0.0
        self._on_floor("goal", self.goal, margin, "keep the robot out of the walls" if margin else "be on the floor")
        for item in self.obstacles:
            self._on_floor("obstacle", item, 0.0, "be on the floor")
        for item in self.obstacles:
            apart, least = math.hypot(item.x - self.goal.x, item.y - self.goal.y), robot.radius + item.radius
            if apart <= least:
                where = f"distance from the goal to the obstacle at {item.x:g}, {item.y:g}"
                raise InputError.of(where, round(apart, 4), f"more than {least:g} m for the robot to fit")
        return self

    def _on_floor(self, name: str, place: Pose | Obstacle, margin: float, aim: str) -> None:
        for axis in ("x", "y"):
            low, high = getattr(self.yard.floor, axis)
            value = getattr(place, axis)
            if not low + margin - ROUNDING <= value <= high - margin + ROUNDING:
                bound = f"from {low + margin:g} to {high - margin:g} m to {aim}"
                raise InputError.of(f"{axis} of the {name}", value, bound)


def middle_of_goal(yard: Yard) -> Pose:
    """Return the pose in the middle of the goal region (m, rad)."""
    return Pose(**{axis: 0.5 * sum(getattr(yard.goal, axis)) for axis in ("x", "y", "yaw")})


def grid(yard: Yard, step: float) -> tuple[FloatArray, FloatArray]:
    """Return the coordinates (m) of the columns and rows of a regular grid in the middle of the floor.

    As many as fit ``step`` (m) apart, the first at least half of it from the edge; at least one of each.
    """
    columns, rows = (_spread(low, high, step) for low, high in (yard.floor.x, yard.floor.y))
    return columns, rows


def _spread(low: float, high: float, step: float) -> FloatArray:
    count = max(int((high - low) / step + ROUNDING), 1)
    return np.asarray(0.5 * (low + high) + step * (np.arange(count) - 0.5 * (count - 1)), float)


def clear(scene: Scene, x: Any, y: Any) -> Any:
    """Return at which places (m), of any shape, the robot touches no obstacle."""
    free = np.ones(np.shape(x), dtype=bool)
    for item in scene.obstacles:
        free &= np.hypot(x - item.x, y - item.y) > item.radius + scene.yard.robot.radius
    return free


def crowd(obstacles: tuple[Obstacle, ...], rows: int) -> Obstacles:
    """Return the same obstacles for each of so many rows."""
    table = np.array([(item.x, item.y, item.vx, item.vy, item.radius) for item in obstacles]).reshape(-1, 5)
    return Obstacles(*(np.repeat(part[:, None], rows, axis=1) for part in table.T))


def headings(scene: Scene, x: Any, y: Any) -> FloatArray:
    """Return the heading (rad) at places (m), each (N,), for a robot at rest that faces along it and remembers nothing.

    The default field heeds which way the robot faces: it is asked for one that faces the goal, then for one that
    faces the heading which that gave. The published composition gives the same at once.
    """
    ones, goal = np.ones(len(x)), scene.goal
    yaw = np.arctan2(goal.y - y, goal.x - x)
    for _ in range(2):
        senses = Senses(x, y, yaw, goal.x * ones, goal.y * ones, goal.yaw * ones, crowd(scene.obstacles, len(x)))
        yaw = guide(
            senses, stack([scene.parameters], len(x)), scene.yard.robot, scene.yard.floor, Memory.start(len(x)),
            1.0 / scene.yard.plant.pose_rate, scene.model,
        ).heading  # fmt: skip
    return np.asarray(yaw)


def vectors(scene: Scene, x: Any, y: Any, alone: bool = False) -> tuple[FloatArray, FloatArray]:
    """Return the field at places (m), each (N,), as vectors of its own length (no unit), for a robot at rest.

    The published composition is a weighted sum of unit vectors, so its length is from 0 to 1. The default field is no
    sum: it is one course, so its length is 1. ``alone``: without the obstacles.
    """
    if scene.model != "published":
        heading = headings(scene, x, y)
        return np.cos(heading), np.sin(heading)
    rows, pose = len(x), scene.goal
    goal = Goal(*(np.full(rows, value) for value in (pose.x, pose.y, math.cos(pose.yaw), math.sin(pose.yaw))))
    still, numbers = np.zeros(rows), stack([scene.parameters], rows)
    field = published_vector(x, y, still, still, goal, crowd(() if alone else scene.obstacles, rows), numbers)
    return np.asarray(field[0]), np.asarray(field[1])
