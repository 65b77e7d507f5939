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
"""Share of the largest speed at which the goal and a robot's length bound the time ahead: what is beyond does not
matter."""
EASE = 0.05
"""Heading error (rad) below which the robot steers in proportion."""
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


class Zones(NamedTuple):
    """Guard zones and edges of obstacles and walls at each look, seen from where each robot is now; single precision.

    ``h``: seconds from look to look, (N,). Obstacles: places (m; (K, M, N)), and with a distance d to them
    ``level - scale d^2`` is 0 at the outer edge of the guard zone and 1 at the inner, which needs no root; ``contact``
    is the square of the distance that counts as touching (M, N). Walls: the way to each of the four (N,), empty without
    a floor; ``wall_level - gap / fade`` as above; ``wall_contact`` in m.
    """

    h: Any
    x: Any
    y: Any
    level: Any
    scale: Any
    contact: Any
    walls: Any
    wall_level: Any
    per_fade: Any
    wall_contact: float

    @classmethod
    def of(cls, robots: Robots, obstacles: Obstacles, numbers: Numbers, robot: Robot, floor: Floor | None) -> Zones:
        """Look ``motion_lead`` seconds ahead, or as long as the goal is away.

        Obstacles keep their velocity; they do not go through walls but are taken to be turned back by them.
        """
        lead, guard, fade = (
            np.asarray(part, np.float32) for part in (numbers.motion_lead, numbers.guard_distance, numbers.guard_fade)
        )
        homing = (robots.distance + 2.0 * robot.radius) / (HOMING_PACE * robot.wheel_speed)
        h = np.maximum(np.minimum(lead, homing.astype(np.float32)) / LOOKS, np.float32(1e-3))
        radius = obstacles.radius.astype(np.float32)
        inner = guard + (radius - robot.radius)
        outer = inner + 2.0 * fade
        scale = 1.0 / (outer * outer - inner * inner)
        x = _places(obstacles.x, obstacles.vx, obstacles.radius, robots.x, h, floor.x if floor else None)
        y = _places(obstacles.y, obstacles.vy, obstacles.radius, robots.y, h, floor.y if floor else None)
        contact = np.square(radius + (robot.radius + MARGIN))
        walls = np.empty((0, len(robots.x)), np.float32)
        if floor is not None:
            sides = (robots.x - floor.x[0], floor.x[1] - robots.x, robots.y - floor.y[0], floor.y[1] - robots.y)
            walls = np.array(sides, np.float32)
        # a wall is a disc of no size: what the guard distance keeps from an obstacle's centre, less the obstacle
        per_fade = 1.0 / np.broadcast_to(fade, h.shape)
        wall_level = (guard - robot.radius) * per_fade + 1.0
        edge = (robot.radius if floor is None or floor.walled else 0.0) + MARGIN
        return cls(h, x, y, outer * outer * scale, scale, contact, walls, wall_level, per_fade, edge)

    def take(self, rows: Any) -> Zones:
        """Return the zones of the rows that an index or mask picks."""
        return Zones._make([*(part[..., rows] for part in self[:-1]), self.wall_contact])

    def at(self, look: int, x: Any, y: Any) -> tuple[Any, Any]:
        """Return how deep in a zone (0 to 1 and beyond) and whether touching, at a look, at x, y (m; (C, N))."""
        deep: Any = np.float32(0.0)
        touch: Any = False
        if self.x.shape[1]:
            square = x - self.x[look][:, None]
            square *= square
            dy = y - self.y[look][:, None]
            dy *= dy
            square += dy
            touch = np.minimum.reduce(square - self.contact[:, None]) < 0.0
            square *= self.scale[:, None]
            deep = np.maximum.reduce(self.level[:, None] - square)
        if len(self.walls):
            west, east, south, north = self.walls
            gap = np.minimum(np.minimum(west + x, east - x), np.minimum(south + y, north - y))
            deep = np.maximum(deep, self.wall_level - gap * self.per_fade)
            touch = touch | (gap < self.wall_contact)
        return deep, touch


def _places(
    place: Any, speed: Any, radius: Any, origin: Any, h: Any, side: tuple[float, float] | None
) -> Any:
    """Return one coordinate of the obstacles at each look, less ``origin``, (K, M, N)."""
    looks = np.arange(1.0, LOOKS + 1.0, dtype=np.float32)[:, None, None]
    places = (place - origin).astype(np.float32) + (looks * h) * speed.astype(np.float32)
    if side is not None:
        low, high = ((side[0] + radius) - origin).astype(np.float32), ((side[1] - radius) - origin).astype(np.float32)
        for wall, sign in ((low, 1.0), (high, -1.0)):
            places -= wall
            np.abs(places, out=places)
            places *= sign
            places += wall
    return places


def look_ahead(robots: Robots, course: Course, zones: Zones, numbers: Numbers, robot: Robot) -> Ahead:
    """Drive each course ahead to the last look of ``zones``, and say what comes of it.

    Reckoned in single precision about the robot's own place: a thought, not a command, and twice as fast.
    """
    numbers = Numbers(*(np.asarray(part, np.float32) for part in numbers))
    facing, bend, pace = (np.asarray(part, np.float32) for part in course)
    yaw, left, right, distance = (np.asarray(part, np.float32) for part in robots[2:])
    h = zones.h
    most, quarter, bend_size = robot.wheel_accel * h, 0.25 * h, np.abs(bend)
    turning = quarter * (2.0 / robot.track)
    x: Any = 0.0
    y: Any = 0.0
    crowding: Any = 0.0
    touching: Any = 0.0
    for look in range(LOOKS):
        error = wrap(facing - yaw)
        v, w = drive(error, bend, distance, numbers, robot, EASE)
        # a look is long, so the turn must not swing past what it is to turn
        enough = np.abs(error) / h + bend_size * v
        half = np.minimum(np.maximum(w, -enough), enough) * (0.5 * robot.track)
        v = v * pace
        new_left, new_right = limit_change(v - half, left, most), limit_change(v + half, right, most)
        to_left, to_right = left + new_left, right + new_right
        left, right = new_left, new_right
        travel, turned = quarter * (to_left + to_right), turning * (to_right - to_left)
        middle = yaw + 0.5 * turned
        x, y, yaw = x + travel * np.cos(middle), y + travel * np.sin(middle), yaw + turned
        facing = facing + bend * travel
        deep, touch = zones.at(look, x, y)
        crowding = crowding + np.minimum(np.maximum(deep, 0.0), 1.0)
        touching = np.maximum(touching, touch * np.float32(1.5 - look / LOOKS))
    return Ahead(robots.x + x, robots.y + y, yaw, h * crowding, touching)
