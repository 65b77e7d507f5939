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

from fieldnav_ros.drive import DriveLaw, limit_change, wrap
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

_LOOK_TIMES = np.arange(1.0, LOOKS + 1.0, dtype=np.float32)[:, None]
_SOON = np.float32(1.5) - np.arange(LOOKS, dtype=np.float32)[:, None, None] / LOOKS
_BOTH = np.array([-1.0, 1.0], np.float32)[:, None, None]

NOWHERE = 1e3
"""A distance (m) that slows no robot."""


class Course(NamedTuple):
    """Courses to think through: yaw to take (rad), its bend (rad/m), signed share of the speed; (C, N) or broadcast.

    ``distance`` (m) is that to the goal, with which the speed falls; ``NOWHERE`` for a course that only gets out of
    the way: a robot that creeps near its goal must not be run over because of that.
    """

    facing: Any
    bend: Any
    pace: Any
    distance: Any


class Ahead(NamedTuple):
    """What comes of courses, each (C, N): where the robot is at the end (m, m, rad), crowding (s), touching.

    Crowding is the time spent in guard zones of obstacles and walls, weighted from 0 at their outer edge to 1 at the
    inner, the worst at each look counting; touching is 0, or 0.8 to 3 and the larger the sooner and the deeper.
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

    ``h``: seconds from look to look, (N,). Obstacles: ``places`` in m, (K, 2, M, N); with a distance d to them
    ``level - scale d^2`` is 0 at the outer edge of the guard zone and 1 at the inner, which needs no root, and
    ``1 - d^2 per_contact`` is 0 where touching begins; (M, N). Walls: the way to the low and the high ones, (2, N),
    infinite without a floor; ``wall_level - gap per_fade`` as above; ``wall_contact`` in m.
    """

    h: Any
    places: Any
    level: Any
    scale: Any
    per_contact: Any
    to_low: Any
    to_high: Any
    wall_level: Any
    per_fade: Any
    wall_contact: float

    @classmethod
    def of(cls, robots: Robots, obstacles: Obstacles, numbers: Numbers, robot: Robot, floor: Floor | None) -> Zones:
        """Look ``motion_lead`` seconds ahead, or as long as the goal is away. ``numbers`` in single precision.

        Obstacles keep their velocity; they do not go through walls but are taken to be turned back by them.
        """
        rows = len(robots.x)
        homing = (robots.distance + 2.0 * robot.radius) / (HOMING_PACE * robot.wheel_speed)
        h = np.maximum(np.minimum(numbers.motion_lead, homing.astype(np.float32)) / LOOKS, np.float32(1e-3))
        low, high = np.full((2, 1), -np.inf), np.full((2, 1), np.inf)
        if floor is not None:
            low, high = np.array([floor.x, floor.y]).T[:, :, None]
        origin = np.array([robots.x, robots.y])
        inner = numbers.guard_distance + (obstacles.radius.astype(np.float32) - robot.radius)
        outer = inner + 2.0 * numbers.guard_fade
        scale = 1.0 / (outer * outer - inner * inner)
        per_contact = np.square(1.0 / (obstacles.radius + (robot.radius + MARGIN)).astype(np.float32))
        # a wall is a disc of no size: what the guard distance keeps from an obstacle's centre, less the obstacle
        per_fade = np.broadcast_to(1.0 / numbers.guard_fade, (rows,))
        wall_level = np.broadcast_to((numbers.guard_distance - robot.radius) * per_fade + 1.0, (rows,))
        edge = (robot.radius if floor is None or floor.walled else 0.0) + MARGIN
        return cls(
            h, _places(obstacles, origin, h, low, high, floor is not None), outer * outer * scale, scale, per_contact,
            (origin - low).astype(np.float32), (high - origin).astype(np.float32), wall_level, per_fade, edge,
        )  # fmt: skip

    def take(self, rows: Any) -> Zones:
        """Return the zones of the rows that an index or mask picks."""
        return self._replace(**{name: part[..., rows] for name, part in zip(self._fields[:-1], self[:-1])})

    def along(self, track: Any) -> tuple[Any, Any]:
        """Return how deep in a zone (0 to 1 and on) and in a touch (0 to 1), (K, C, N), on tracks in m (K, 2, C, N).

        Below 0 they are outside.
        """
        gap = np.minimum(self.to_low[:, None] + track, self.to_high[:, None] - track)
        gap = np.minimum(gap[:, 0], gap[:, 1])
        deep, touch = self.wall_level - gap * self.per_fade, 1.0 - gap * np.float32(1.0 / self.wall_contact)
        if self.places.shape[2]:
            square = track[:, :, None] - self.places[:, :, :, None]
            square *= square
            square = square[:, 0] + square[:, 1]
            touch = np.maximum(touch, 1.0 - np.minimum.reduce(square * self.per_contact[:, None], axis=1))
            square *= self.scale[:, None]
            deep = np.maximum(deep, np.maximum.reduce(self.level[:, None] - square, axis=1))
        return deep, touch


def _places(obstacles: Obstacles, origin: Any, h: Any, low: Any, high: Any, walled: bool) -> Any:
    """Return where the obstacles are at each look, less ``origin``, (K, 2, M, N)."""
    speed = np.array([obstacles.vx, obstacles.vy], np.float32)
    start = (np.array([obstacles.x, obstacles.y]) - origin[:, None]).astype(np.float32)
    places = start + (_LOOK_TIMES * h)[:, None, None] * speed
    if walled and len(obstacles.x):
        edge = (low[:, None] + obstacles.radius - origin[:, None]).astype(np.float32)
        places -= edge
        np.abs(places, out=places)
        places += edge
        edge = (high[:, None] - obstacles.radius - origin[:, None]).astype(np.float32)
        np.subtract(edge, places, out=places)
        np.abs(places, out=places)
        np.subtract(edge, places, out=places)
    return places


def look_ahead(robots: Robots, course: Course, zones: Zones, numbers: Numbers, robot: Robot) -> Ahead:
    """Drive each course ahead to the last look of ``zones``, and say what comes of it. ``numbers`` in single precision.

    Reckoned in single precision about the robot's own place: a thought, not a command, and twice as fast.
    """
    facing, bend, pace, distance = (np.asarray(part, np.float32) for part in course)
    h = zones.h
    yaw, left, right = np.array(robots[2:5], np.float32)
    wheels = np.array([left, right])[:, None]
    law = DriveLaw(bend, distance, numbers, robot, EASE)
    most, quarter, turning = robot.wheel_accel * h, 0.25 * h, (0.5 / robot.track) * h
    bend_size, per_look = np.abs(bend), 1.0 / h
    error = wrap(facing - yaw)
    track = np.empty((LOOKS, 2, *error.shape), np.float32)
    place: Any = 0.0
    for look in range(LOOKS):
        v, w = law(error)
        # a look is long, so the turn must not swing past what it is to turn
        enough = np.abs(error) * per_look + bend_size * v
        half = np.minimum(np.maximum(w, -enough), enough) * (0.5 * robot.track)
        new = limit_change(v * pace + _BOTH * half, wheels, most)
        wheels = wheels + new
        travel, turned = quarter * (wheels[0] + wheels[1]), turning * (wheels[1] - wheels[0])
        wheels = new
        middle = yaw + 0.5 * turned
        ahead = track[look]
        np.cos(middle, out=ahead[0])
        np.sin(middle, out=ahead[1])
        ahead *= travel
        ahead += place
        place = ahead
        yaw = yaw + turned
        error = error + (bend * travel - turned)
    deep, touch = zones.along(track)
    crowding = np.minimum(np.maximum(deep, 0.0), 1.0).sum(axis=0) * h
    touching = (_SOON * np.where(touch > 0.0, 1.0 + np.minimum(touch, 1.0), 0.0)).max(axis=0)
    return Ahead(robots.x + place[0], robots.y + place[1], yaw, crowding, touching)
