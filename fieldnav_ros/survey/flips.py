"""Flips: places where the heading asked for turns over faster than a robot at its speed can follow."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.survey.scene import Scene
from fieldnav_ros.world.paths import Paths

OVER = np.pi / 3
"""Angle (rad) beyond which a change of heading is a flip: following the old one brings less than half of the way."""
PARTS = 16
"""Pieces of time in which a turn is summed up."""


class Flip(NamedTuple):
    """A place (m, m) where the heading flips, the largest angle there (rad) and how many driven paths met it."""

    x: float
    y: float
    angle: float
    paths: int


def most_turn(speed: Any, lateral_accel: float, robot: Robot, way: Any = 0.0) -> FloatArray:
    """Return the largest angle (rad) by which a robot can turn while it travels its own length and ``way`` (m) more.

    At its speed (m/s), straight at first. The turn rate grows as the wheels' acceleration lets one wheel slow down and
    the other, up to its largest speed, speed up; it is bounded by the lateral acceleration (m/s^2) over the speed and
    by the wheels' largest speeds. A robot at rest may turn as far as it likes.
    """
    size = np.maximum(np.abs(speed), 1e-3)
    time = (2.0 * robot.radius + way) / size
    bound = np.minimum(lateral_accel / size, 2.0 * robot.wheel_speed / robot.track)
    room = np.maximum(robot.wheel_speed - size, 0.0)
    angle = np.zeros_like(size)
    for part in range(PARTS):
        change = robot.wheel_accel * time * (part + 0.5) / PARTS
        angle += np.minimum((change + np.minimum(change, room)) / robot.track, bound)
    return np.asarray(angle * time / PARTS)


def crossings(scene: Scene, paths: Paths, first: int = 0) -> FloatArray:
    """Return where driven paths meet flips: place (m, m), angle (rad) and number of the path, (N, 4).

    A flip is a change of the heading asked for (see ``world.paths.Paths``) by more than OVER, and by more than
    ``most_turn`` at the speed that the robot has there, with the set's lateral acceleration R_m. Along the path it
    is the change from one pose to the next, whose way is added to the robot's length; across it, the change to what
    the field would ask for ``world.paths.ASIDE`` to either side. ``first`` is the number of the first path.
    """
    angle = np.maximum(paths.along, paths.aside)
    angle[np.arange(len(angle))[:, None] >= paths.length] = 0.0
    step, path = np.nonzero(angle > OVER)
    speed = paths.speed[step, path]
    way = np.abs(speed) / scene.yard.plant.pose_rate
    fast = angle[step, path] > most_turn(speed, scene.parameters.lateral_accel, scene.yard.robot, way)
    step, path = step[fast], path[fast]
    return np.stack([*(part[step, path] for part in (paths.x, paths.y, angle)), first + path], axis=1)


def flips(scene: Scene, met: FloatArray) -> list[Flip]:
    """Return the places of ``crossings``, the largest angle first, those within a robot's length taken together."""
    result, left = list[Flip](), met[np.argsort(-met[:, 2], kind="stable")]
    while len(left):
        near = np.hypot(*(left[:, :2] - left[0, :2]).T) <= 2.0 * scene.yard.robot.radius
        x, y, angle, _ = left[0].tolist()
        result.append(Flip(x, y, angle, len(np.unique(left[near, 3]))))
        left = left[~near]
    return result
