"""One moment of guidance: what is sensed, through the field and the drive law, to a command. Pure, N rows.

The batch simulator calls this with thousands of rows, the guidance node with one.
"""

from __future__ import annotations

from typing import Any, Literal, NamedTuple, get_args

import numpy as np

from fieldnav_ros.drive import drive, limit_change, limit_wheels, wrap
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.field.heading import published_vector
from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import FloatArray, Numbers
from fieldnav_ros.yard import Floor

Model = Literal["published"]
MODELS: tuple[str, ...] = get_args(Model)
PROBE = 0.01
"""Step in m by which the bend of the field along the robot's heading is measured."""


class Senses(NamedTuple):
    """What guidance knows at one moment: robot pose and goal pose (m, rad; each (N,)), obstacles ((M, N))."""

    x: FloatArray
    y: FloatArray
    yaw: FloatArray
    goal_x: FloatArray
    goal_y: FloatArray
    goal_yaw: FloatArray
    obstacles: Obstacles


class Memory(NamedTuple):
    """What guidance keeps from one moment to the next, each (N,): the wheel speeds last commanded (m/s)."""

    left: FloatArray
    right: FloatArray

    @classmethod
    def start(cls, rows: int) -> Memory:
        """Return the memory of ``rows`` robots that stand still."""
        return cls(np.zeros(rows), np.zeros(rows))

    def take(self, rows: Any) -> Memory:
        """Return the memory of the rows that an index or mask picks."""
        return Memory(*(part[rows] for part in self))


class Advice(NamedTuple):
    """What to do: heading to take (rad), speed (m/s), turn rate (rad/s), each (N,); and the new memory."""

    heading: FloatArray
    v: FloatArray
    w: FloatArray
    memory: Memory


def guide(
    senses: Senses,
    numbers: Numbers,
    robot: Robot,
    floor: Floor | None,
    memory: Memory,
    dt: float,
    model: str = "published",
) -> Advice:
    """Return heading and command for each row; wheel speed and acceleration limits always hold.

    dt is the time in s since the memory was made; ``floor`` gives walls to models that heed them.
    """
    goal = (senses.goal_x, senses.goal_y, np.cos(senses.goal_yaw), np.sin(senses.goal_yaw))
    speed = 0.5 * (memory.left + memory.right)
    cos_yaw, sin_yaw = np.cos(senses.yaw), np.sin(senses.yaw)
    velocity_x, velocity_y = speed * cos_yaw, speed * sin_yaw

    def field(x: Any, y: Any) -> tuple[Any, Any]:
        return published_vector(x, y, velocity_x, velocity_y, goal, senses.obstacles, numbers)

    here_x, here_y = field(senses.x, senses.y)
    next_x, next_y = field(senses.x + PROBE * cos_yaw, senses.y + PROBE * sin_yaw)
    heading = np.arctan2(here_y, here_x)
    turned = np.arctan2(here_x * next_y - here_y * next_x, here_x * next_x + here_y * next_y)
    error = wrap(heading - senses.yaw)
    distance = np.hypot(senses.x - senses.goal_x, senses.y - senses.goal_y)
    v, w = drive(error, turned / PROBE, distance, numbers, robot)
    left, right = limit_wheels(v, w, robot)
    most = robot.wheel_accel * dt
    left, right = limit_change(left, memory.left, most), limit_change(right, memory.right, most)
    return Advice(heading, 0.5 * (left + right), (right - left) / robot.track, Memory(left, right))
