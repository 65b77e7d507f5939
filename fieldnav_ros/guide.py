"""One moment of guidance: what is sensed, through the field and the drive law, to a command. Pure, N rows.

The batch simulator calls this with thousands of rows, the guidance node with one.
"""

from __future__ import annotations

from typing import Any, Literal, NamedTuple, get_args

import numpy as np

from fieldnav_ros.drive import DriveLaw, limit_change, limit_wheels, wrap
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.field.foresight import EASE, Course, Robots
from fieldnav_ros.field.heading import Goal, Habit, guidance_course, published_vector, waits
from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import FloatArray, Numbers
from fieldnav_ros.pending import Pending
from fieldnav_ros.yard import Floor

Model = Literal["foresight", "published"]
MODELS: tuple[str, ...] = get_args(Model)
DEFAULT_MODEL: Model = "foresight"
PROBE = 0.01
"""Step in m by which the bend of the published field along the robot's heading is measured."""
STEADY = 0.3
"""Largest share of the heading error, and of the way to the goal, that one command may take away before the next.

Gains that suit a hundred poses a second would otherwise make the robot swing about its course at thirty.
"""
SHORTEST = 1e-3
"""Time in s that commands are at least taken to be apart."""
FARTHEST = 1e6
"""Places and speeds beyond this (m, m/s) are taken as this, so that squares of finite input stay finite."""


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
    """What guidance keeps from one moment to the next, each with N as its last axis.

    The wheel speeds last commanded (m/s); the habits of the field (see ``heading.Habit``); and the commands that may
    still be on their way, (K, N): wheel speeds and the seconds each was the newest. K is 0 without a command delay.
    """

    left: FloatArray
    right: FloatArray
    side: FloatArray
    course_x: FloatArray
    course_y: FloatArray
    waited: FloatArray
    sent_left: FloatArray
    sent_right: FloatArray
    sent_for: FloatArray

    @classmethod
    def start(cls, rows: int, slots: int = 0) -> Memory:
        """Return the memory of ``rows`` robots that stand still and remember ``slots`` commands.

        ``pending.slots(command_delay, dt)`` says how many are needed.
        """
        return cls(*(np.zeros(rows) for _ in range(6)), *(np.zeros((slots, rows)) for _ in range(3)))

    def take(self, rows: Any) -> Memory:
        """Return the memory of the rows that an index or mask picks."""
        return Memory(*(part[..., rows] for part in self))


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
    dt: Any,
    model: str = DEFAULT_MODEL,
    command_delay: float = 0.0,
) -> Advice:
    """Return heading and command for each row; wheel speed and acceleration limits always hold.

    ``dt`` is the time in s since the memory was made, a float or (N,); ``floor`` gives walls to models that heed
    them. With a ``command_delay`` (s) the advice is for the moment when the command reaches the wheels: the pose is
    carried on by the commands still on their way, obstacles by their velocity; this holds for the default model.
    Any finite input gives finite advice.
    """
    x, y, goal_x, goal_y = (_near(part) for part in (senses.x, senses.y, senses.goal_x, senses.goal_y))
    obstacles = Obstacles(*(_near(part) for part in senses.obstacles))
    goal = Goal(goal_x, goal_y, np.cos(senses.goal_yaw), np.sin(senses.goal_yaw))
    yaw = wrap(senses.yaw)
    sent = Pending(memory.sent_left, memory.sent_right, memory.sent_for)
    habit = Habit(memory.side, memory.course_x, memory.course_y, memory.waited)
    if model == "published":
        heading, v, w = _published(Robots(x, y, yaw, memory.left, memory.right, _apart(x, y, goal)),
                                   goal, obstacles, numbers, robot)  # fmt: skip
    else:
        if command_delay > 0.0:
            sent = sent.passed(dt)
            x, y, yaw = sent.carry_on(x, y, yaw, command_delay, robot.track)
            obstacles = obstacles._replace(
                x=obstacles.x + command_delay * obstacles.vx, y=obstacles.y + command_delay * obstacles.vy
            )
        robots = Robots(x, y, yaw, memory.left, memory.right, _apart(x, y, goal))
        course, side = guidance_course(robots, goal, obstacles, numbers, robot, floor, habit)
        heading, v, w = _follow(course, robots, numbers, robot, dt)
        way = np.where(course.pace < 0.0, -1.0, 1.0)
        habit = Habit(side, way * np.cos(heading), way * np.sin(heading), habit.waited)
    left, right = limit_wheels(v, w, robot)
    most = robot.wheel_accel * dt
    left, right = limit_change(left, memory.left, most), limit_change(right, memory.right, most)
    habit = habit._replace(waited=waits(habit.waited, left, right, dt))
    new = Memory(left, right, *habit, *sent.add(left, right))
    return Advice(heading, 0.5 * (left + right), (right - left) / robot.track, new)


def _near(part: Any) -> Any:
    return np.minimum(np.maximum(part, -FARTHEST), FARTHEST)


def _apart(x: Any, y: Any, goal: Goal) -> Any:
    dx, dy = x - goal.x, y - goal.y
    return np.sqrt(dx * dx + dy * dy)


def _follow(course: Course, robots: Robots, numbers: Numbers, robot: Robot, dt: Any) -> tuple[Any, Any, Any]:
    error = wrap(course.facing - robots.yaw)
    v, w = DriveLaw(course.bend, course.distance, numbers, robot, EASE)(error)
    most = STEADY / np.maximum(dt, SHORTEST)
    v = np.minimum(v, most * course.distance)
    turn = most * np.abs(error) + np.abs(course.bend) * v
    w = np.minimum(np.maximum(w, -turn), turn)
    return course.facing, v * course.pace, w


def _published(
    robots: Robots, goal: Goal, obstacles: Obstacles, numbers: Numbers, robot: Robot
) -> tuple[Any, Any, Any]:
    speed = 0.5 * (robots.left + robots.right)
    cos_yaw, sin_yaw = np.cos(robots.yaw), np.sin(robots.yaw)

    def field(x: Any, y: Any) -> tuple[Any, Any]:
        return published_vector(x, y, speed * cos_yaw, speed * sin_yaw, goal, obstacles, numbers)

    here_x, here_y = field(robots.x, robots.y)
    next_x, next_y = field(robots.x + PROBE * cos_yaw, robots.y + PROBE * sin_yaw)
    heading = np.arctan2(here_y, here_x)
    turned = np.arctan2(here_x * next_y - here_y * next_x, here_x * next_x + here_y * next_y)
    v, w = DriveLaw(turned / PROBE, robots.distance, numbers, robot)(wrap(heading - robots.yaw))
    return heading, v, w
