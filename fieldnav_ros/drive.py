"""From heading to a bounded, wheel-feasible velocity command. Pure numpy, N rows.

The law of Kim, Kim and Kwon, IEEE Trans. SMC-B 31(3), 2001, as used by Lim, Choi, Kim and Kim, IFAC World
Congress 2008: the turn rate follows the field's own turning along the path (feed-forward) plus K_w times the
signed root of the heading error; the speed is the least of what the wheels, the lateral acceleration R_m and
the distance left (K_p) allow.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import Numbers


def wrap(angle: Any) -> Any:
    """Return angles (rad) brought into [-pi, pi)."""
    return angle - 2.0 * np.pi * np.floor(angle / (2.0 * np.pi) + 0.5)


def drive(
    error: Any, bend: Any, distance: Any, numbers: Numbers, robot: Robot, ease: float = 0.0
) -> tuple[Any, Any]:
    """Return speed (m/s) and turn rate (rad/s) for a heading error.

    error: field heading less yaw, rad, in [-pi, pi); bend: change of the field's heading per metre driven,
    rad/m; distance: to the goal, m. Each (N,). The wheels stay within ``robot.wheel_speed`` by construction:
    with v the speed and w = bend v + s the turn rate, |v| + |w| L/2 <= v_max bounds v by
    (2 v_max - L |s|) / (2 + L |bend|), and |v w| <= R_m by the root of bend v^2 + s v = R_m.

    Below ``ease`` (rad) the turn rate is proportional to the error, meeting the root there: the root's slope without
    bound at 0 makes the robot shiver about its heading, which costs speed (as published: 0).
    """
    size = np.abs(error)
    steer = numbers.steer_gain * (size / np.sqrt(np.maximum(size, ease)) if ease > 0.0 else np.sqrt(size))
    bend_size = np.abs(bend)
    by_wheels = (2.0 * robot.wheel_speed - robot.track * steer) / (2.0 + robot.track * bend_size)
    # the root in its stable form: no difference of nearly equal numbers, no division by a small bend
    by_side = 2.0 * numbers.lateral_accel / np.maximum(
        steer + np.sqrt(steer * steer + 4.0 * numbers.lateral_accel * bend_size), 1e-9
    )  # fmt: skip
    speed = np.minimum(np.minimum(by_wheels, by_side), numbers.arrival_gain * distance)
    speed = np.maximum(speed, 0.0)
    most = 2.0 * robot.wheel_speed / robot.track
    turn = np.minimum(np.maximum(bend * speed + np.copysign(steer, error), -most), most)
    return speed, turn


def limit_wheels(speed: Any, turn: Any, robot: Robot) -> tuple[Any, Any]:
    """Return wheel speeds (left, right; m/s) scaled so that neither exceeds the limit and the curvature stays."""
    half = 0.5 * robot.track * turn
    left, right = speed - half, speed + half
    scale = robot.wheel_speed / np.maximum(np.maximum(np.abs(left), np.abs(right)), robot.wheel_speed)
    return left * scale, right * scale


def limit_change(wheels: Any, before: Any, most: Any) -> Any:
    """Return wheel speeds (m/s) that differ from those before by no more than ``most`` (m/s)."""
    return before + np.minimum(np.maximum(wheels - before, -most), most)
