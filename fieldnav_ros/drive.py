"""From heading to a bounded, wheel-feasible velocity command. Pure numpy, N rows.

The law of Kim, Kim and Kwon, IEEE Trans. SMC-B 31(3), 2001, as used by Lim, Choi, Kim and Kim, IFAC World
Congress 2008: the turn rate follows the field's own turning along the path (feed-forward) plus K_w times the
signed root of the heading error; the speed is the least of what the wheels, the lateral acceleration R_m and
the distance left (K_p) allow.
"""

from __future__ import annotations

import math
from typing import Any, Protocol

import numpy as np

from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import Numbers


class Place(Protocol):
    """Whatever has a place on the floor (m) and a yaw (rad)."""

    @property
    def x(self) -> float: ...  # noqa: D102  (said above)
    @property
    def y(self) -> float: ...  # noqa: D102
    @property
    def yaw(self) -> float: ...  # noqa: D102


def wrap(angle: Any) -> Any:
    """Return angles (rad) brought into [-pi, pi)."""
    return angle - 2.0 * np.pi * np.floor(angle / (2.0 * np.pi) + 0.5)


def apart(one: Place, other: Place) -> tuple[float, float]:
    """Return how far ``other`` is from ``one`` (m), and the turn from the one's yaw to the other's (rad, [-pi, pi))."""
    return math.hypot(other.x - one.x, other.y - one.y), float(wrap(other.yaw - one.yaw))


class DriveLaw:
    """The law for a given bend of the field and distance to the goal; called with heading errors.

    bend: change of the field's heading per metre driven, rad/m; distance: to the goal, m. Each (N,) or broadcast.
    The wheels stay within ``robot.wheel_speed`` by construction: with v the speed and w = bend v + s the turn rate,
    |v| + |w| L/2 <= v_max bounds v by (2 v_max - L |s|) / (2 + L |bend|), and |v w| <= R_m by the root of
    bend v^2 + s v = R_m.

    Below ``ease`` (rad) the turn rate is proportional to the error, meeting the root there: the root's slope without
    bound at 0 makes the robot shiver about its heading, which costs speed (as published: 0).
    """

    def __init__(self, bend: Any, distance: Any, numbers: Numbers, robot: Robot, ease: float = 0.0) -> None:
        self._bend, self._gain, self._ease = bend, numbers.steer_gain, ease
        size = np.abs(bend)
        share = 1.0 / (2.0 + robot.track * size)
        self._most_straight, self._per_steer = 2.0 * robot.wheel_speed * share, robot.track * share
        self._side = 2.0 * numbers.lateral_accel
        self._side_bend = 2.0 * self._side * size
        self._homing = numbers.arrival_gain * distance
        self._most_turn = 2.0 * robot.wheel_speed / robot.track

    def __call__(self, error: Any) -> tuple[Any, Any]:
        """Return speed (m/s) and turn rate (rad/s) for heading errors: field heading less yaw, rad, in [-pi, pi)."""
        size = np.abs(error)
        steer = self._gain * (size / np.sqrt(np.maximum(size, self._ease)) if self._ease > 0.0 else np.sqrt(size))
        by_wheels = self._most_straight - self._per_steer * steer
        # the root in its stable form: no difference of nearly equal numbers, no division by a small bend
        by_side = self._side / np.maximum(steer + np.sqrt(steer * steer + self._side_bend), 1e-9)
        speed = np.maximum(np.minimum(np.minimum(by_wheels, by_side), self._homing), 0.0)
        turn = self._bend * speed + np.copysign(steer, error)
        return speed, np.minimum(np.maximum(turn, -self._most_turn), self._most_turn)


def limit_wheels(speed: Any, turn: Any, robot: Robot) -> tuple[Any, Any]:
    """Return wheel speeds (left, right; m/s) scaled so that neither exceeds the limit and the curvature stays."""
    half = 0.5 * robot.track * turn
    left, right = speed - half, speed + half
    scale = robot.wheel_speed / np.maximum(np.maximum(np.abs(left), np.abs(right)), robot.wheel_speed)
    return left * scale, right * scale


def limit_change(wheels: Any, before: Any, most: Any) -> Any:
    """Return wheel speeds (m/s) that differ from those before by no more than ``most`` (m/s)."""
    return before + np.minimum(np.maximum(wheels - before, -most), most)
