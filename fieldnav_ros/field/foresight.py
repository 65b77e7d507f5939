"""Foresight: what comes of a course within the next moments, and which of a few courses is best.

Each course is driven ahead in thought, with the drive law and the limits of the wheels as they are, against
obstacles that keep their velocity: a dynamic window (Fox, Burgard and Thrun, IEEE Robotics & Automation Magazine
4(1), 1997) whose candidates are courses of the field, judged among moving obstacles in space and time (Fiorini and
Shiller, Int. J. Robotics Research 17(7), 1998). The way left to the goal stands for all that comes later.

Shapes: N rows, C courses, M obstacles, K looks ahead.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.drive import drive, limit_change, wrap
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import Numbers
from fieldnav_ros.yard import Floor

LOOKS = 3
"""Looks into the time ahead, evenly spread."""
HOMING_PACE = 0.7
"""Share of the largest speed at which the goal bounds the time ahead: what lies beyond it does not matter."""
MARGIN = 0.01
"""Gap in m below which a course counts as one that touches."""


class Course(NamedTuple):
    """Courses to think through: yaw to take (rad), its bend (rad/m), signed share of the speed; (C, N) or broadcast."""

    facing: Any
    bend: Any
    pace: Any


class Ahead(NamedTuple):
    """What comes of courses, each (C, N): where the robot is at the end (m, m, rad), crowding (s), touching.

    Crowding is the time spent in guard zones of obstacles and walls, weighted from 0 at their outer edge to 1 at the
    inner, the worst at each look counting; touching is 0, or 0.5 to 1.5 and the larger the sooner it happens.
    """

    x: Any
    y: Any
    yaw: Any
    crowding: Any
    touching: Any


class Robots(NamedTuple):
    """Where robots are and what their wheels do, each (N,): m, m, rad, m/s, m/s; and how far the goal is (m)."""

    x: Any
    y: Any
    yaw: Any
    left: Any
    right: Any
    distance: Any

    def take(self, rows: Any) -> Robots:
        """Return the robots that an index or mask picks."""
        return Robots(*(part[rows] for part in self))


def look_ahead(
    robots: Robots, course: Course, obstacles: Obstacles, numbers: Numbers, robot: Robot, floor: Floor | None
) -> Ahead:
    """Drive each course ahead for ``motion_lead`` seconds, or as long as the goal is away, and say what comes of it.

    Reckoned in single precision about the robot's own place: a thought, not a command, and twice as fast.
    """
    numbers = Numbers(*(np.asarray(part, np.float32) for part in numbers))
    distance = robots.distance.astype(np.float32)
    lead = np.minimum(numbers.motion_lead, (distance + 0.02) / (HOMING_PACE * robot.wheel_speed))
    h = np.maximum(lead / LOOKS, 1e-3)
    bounds = _Zones(robots, obstacles, numbers, robot, floor)
    facing, bend, pace = (np.asarray(part, np.float32) for part in course)
    yaw, left, right = (part.astype(np.float32) for part in (robots.yaw, robots.left, robots.right))
    most, quarter, per_track, bend_size = robot.wheel_accel * h, 0.25 * h, 2.0 / robot.track, np.abs(bend)
    x: Any = 0.0
    y: Any = 0.0
    crowding: Any = 0.0
    touching: Any = 0.0
    for look in range(LOOKS):
        error = wrap(facing - yaw)
        v, w = drive(error, bend, distance, numbers, robot)
        # a look is long, so the turn must not swing past what it is to turn
        enough = np.abs(error) / h + bend_size * v
        half = np.minimum(np.maximum(w, -enough), enough) * (0.5 * robot.track)
        v = v * pace
        new_left, new_right = limit_change(v - half, left, most), limit_change(v + half, right, most)
        to_left, to_right = left + new_left, right + new_right
        left, right = new_left, new_right
        travel = quarter * (to_left + to_right)
        turned = (quarter * per_track) * (to_right - to_left)
        middle = yaw + 0.5 * turned
        x, y, yaw = x + travel * np.cos(middle), y + travel * np.sin(middle), yaw + turned
        facing = facing + bend * travel
        crowd, touch = bounds.at(x, y, (look + 1) * h)
        crowding = crowding + np.minimum(np.maximum(crowd, 0.0), 1.0)
        touching = np.maximum(touching, np.where(touch, np.float32(1.5 - look / LOOKS), np.float32(0.0)))
    return Ahead(robots.x + x, robots.y + y, yaw, h * crowding, touching)


class _Zones:
    """Guard zones and edges of obstacles and walls, seen from where each robot is now, in single precision."""

    def __init__(
        self, robots: Robots, obstacles: Obstacles, numbers: Numbers, robot: Robot, floor: Floor | None
    ) -> None:
        self.x = (obstacles.x - robots.x).astype(np.float32)
        self.y = (obstacles.y - robots.y).astype(np.float32)
        self.vx, self.vy = obstacles.vx.astype(np.float32), obstacles.vy.astype(np.float32)
        radius = obstacles.radius.astype(np.float32)
        inner = numbers.guard_distance + (radius - robot.radius)
        outer = inner + 2.0 * numbers.guard_fade
        # (outer^2 - d^2) / (outer^2 - inner^2) is 0 at the outer edge, 1 at the inner, and needs no root
        self.scale = 1.0 / (outer * outer - inner * inner)
        self.level = outer * outer * self.scale
        self.contact = np.square(radius + (robot.radius + MARGIN))
        self.walls: Any = None
        if floor is not None:
            sides = (robots.x - floor.x[0], floor.x[1] - robots.x, robots.y - floor.y[0], floor.y[1] - robots.y)
            self.walls = [side.astype(np.float32) for side in sides]
            # a wall is a disc of no size: what the guard distance keeps from an obstacle's centre, less the obstacle
            self.per_fade = 1.0 / numbers.guard_fade
            self.wall_level = (numbers.guard_distance - robot.radius) * self.per_fade + 1.0
            self.wall_contact = (robot.radius if floor.walled else 0.0) + MARGIN

    def at(self, x: Any, y: Any, t: Any) -> tuple[Any, Any]:
        """Return how deep in a guard zone (0 to 1 and beyond) and whether touching, ``t`` s from now at x, y (m)."""
        deep: Any = np.float32(0.0)
        touch: Any = False
        if len(self.x):
            dx = x[:, None] - (self.x + t * self.vx)
            dy = y[:, None] - (self.y + t * self.vy)
            dx *= dx
            dy *= dy
            dx += dy
            touch = np.min(dx - self.contact, axis=1) < 0.0
            dx *= self.scale
            deep = np.max(self.level - dx, axis=1)
        if self.walls is not None:
            west, east, south, north = self.walls
            gap = np.minimum(np.minimum(west + x, east - x), np.minimum(south + y, north - y))
            deep = np.maximum(deep, self.wall_level - gap * self.per_fade)
            touch = touch | (gap < self.wall_contact)
        return deep, touch
