"""Two published ways to steer to a pose, as yardsticks: batched like ``guide`` and limited by the same wheels.

Each has its numbers in a table of its own, so that all are tuned alike. They are written from the papers named.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from fieldnav_ros.drive import limit_change, limit_wheels, wrap
from fieldnav_ros.guide import Advice, Memory, Senses
from fieldnav_ros.model import Robot
from fieldnav_ros.yard import Floor


@dataclass(frozen=True)
class Range:
    """A number to tune: where to begin and how far it may go, on a log scale."""

    name: str
    start: float
    low: float
    high: float

    def at(self, unit: float) -> float:
        """Map 0..1 to the range."""
        return self.low * math.exp(min(max(unit, 0.0), 1.0) * math.log(self.high / self.low))

    def unit(self) -> float:
        """Return where in 0..1 the start is."""
        return math.log(self.start / self.low) / math.log(self.high / self.low)


@dataclass(frozen=True)
class Peer:
    """A rule from senses to speed and turn rate, with its numbers and where it is published."""

    source: str
    ranges: tuple[Range, ...]
    rule: Callable[[Senses, Any, Robot, Floor | None], tuple[Any, Any]]

    def guide(
        self, senses: Senses, values: Any, robot: Robot, floor: Floor | None, memory: Memory, dt: Any, *_: Any
    ) -> Advice:
        """Do as ``fieldnav_ros.guide.guide`` does, with this rule and the numbers in ``values`` (one array each)."""
        v, w = self.rule(senses, values, robot, floor)
        most = robot.wheel_accel * dt
        left, right = limit_wheels(v, w, robot)
        left, right = limit_change(left, memory.left, most), limit_change(right, memory.right, most)
        after = memory._replace(left=left, right=right)
        return Advice(senses.yaw, 0.5 * (left + right), (right - left) / robot.track, after)


def potential(senses: Senses, values: Any, robot: Robot, floor: Floor | None) -> tuple[Any, Any]:
    """Artificial potential field: attraction to the goal, repulsion within rho_0 of obstacles' edges and of walls.

    Khatib, Int. J. Robotics Research 5(1), 1986: F_rep = eta (1/rho - 1/rho_0) / rho^2 grad rho. The force gives the
    heading; the turn rate follows the heading error, the speed the distance left and how well the heading is met. A
    point has no heading, so within ``near`` of the goal the robot turns on the spot.
    """
    reach, eta, near, steer, slow, cruise, narrow = values
    to_x, to_y = senses.goal_x - senses.x, senses.goal_y - senses.y
    distance = np.sqrt(to_x * to_x + to_y * to_y)
    force_x, force_y = to_x / np.maximum(distance, 1e-9), to_y / np.maximum(distance, 1e-9)

    def push(away_x: Any, away_y: Any, radius: Any) -> tuple[Any, Any]:
        length = np.sqrt(away_x * away_x + away_y * away_y)
        rho = np.maximum(length - radius - robot.radius, 1e-3)
        size = np.where(rho < reach, eta * (1.0 / rho - 1.0 / reach) / (rho * rho), 0.0) / np.maximum(length, 1e-9)
        return size * away_x, size * away_y

    crowd = senses.obstacles
    for one in range(len(crowd.x)):
        x, y = push(senses.x - crowd.x[one], senses.y - crowd.y[one], crowd.radius[one])
        force_x, force_y = force_x + x, force_y + y
    if floor is not None:
        for side, sign in ((floor.x[0], 1.0), (floor.x[1], -1.0)):
            force_x = force_x + push(sign * np.maximum(sign * (senses.x - side), 1e-3), 0.0, 0.0)[0]
        for side, sign in ((floor.y[0], 1.0), (floor.y[1], -1.0)):
            force_y = force_y + push(0.0, sign * np.maximum(sign * (senses.y - side), 1e-3), 0.0)[1]
    there = distance < near
    heading = np.where(there, senses.goal_yaw, np.arctan2(force_y, force_x))
    error = wrap(heading - senses.yaw)
    speed = np.minimum(cruise, slow * distance) * np.maximum(np.cos(error), 0.0) ** narrow
    return np.where(there, 0.0, speed), steer * error


def polar(senses: Senses, values: Any, robot: Robot, floor: Floor | None) -> tuple[Any, Any]:
    """Closed loop steering in polar coordinates, as published with no regard to obstacles.

    Aicardi, Casalino, Bicchi and Balestrino, IEEE Robotics & Automation Magazine 2(1), 1995: u = gamma e cos(alpha),
    omega = k alpha + gamma (cos(alpha) sin(alpha) / alpha)(alpha + h theta). The wheels' limits scale both alike.
    """
    gamma, k, h = values
    to_x, to_y = senses.goal_x - senses.x, senses.goal_y - senses.y
    direction = np.arctan2(to_y, to_x)
    alpha, theta = wrap(direction - senses.yaw), wrap(direction - senses.goal_yaw)
    speed = gamma * np.sqrt(to_x * to_x + to_y * to_y) * np.cos(alpha)
    ratio = np.cos(alpha) * np.sinc(alpha / np.pi)
    return speed, k * alpha + gamma * ratio * (alpha + h * theta)


PEERS: dict[str, Peer] = {
    "potential_field": Peer(
        "Khatib, Int. J. Robotics Research 5(1), 1986",
        (
            Range("reach", 0.15, 0.02, 0.6), Range("eta", 1e-3, 1e-6, 0.1), Range("near", 0.02, 0.005, 0.03),
            Range("steer", 8.0, 1.0, 40.0), Range("slow", 4.0, 1.0, 40.0), Range("cruise", 0.8, 0.2, 1.2),
            Range("narrow", 2.0, 0.2, 10.0),
        ),
        potential,
    ),
    "polar_controller": Peer(
        "Aicardi, Casalino, Bicchi and Balestrino, IEEE Robotics & Automation Magazine 2(1), 1995",
        (Range("gamma", 3.0, 0.5, 40.0), Range("k", 6.0, 0.5, 60.0), Range("h", 1.0, 0.1, 10.0)),
        polar,
    ),
}  # fmt: skip
