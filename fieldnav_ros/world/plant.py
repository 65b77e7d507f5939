"""The robot as the world moves it: delayed commands, limited wheels, exact arcs. Pure numpy, N rows."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.drive import limit_change, limit_wheels
from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.yard import Plant

STEP = 0.01
"""Integration step in s."""


class Motion(NamedTuple):
    """State of the robots, each (N,): pose (m, m, rad) and wheel speeds (m/s)."""

    x: FloatArray
    y: FloatArray
    yaw: FloatArray
    left: FloatArray
    right: FloatArray

    @classmethod
    def at_rest(cls, x: FloatArray, y: FloatArray, yaw: FloatArray) -> Motion:
        """Return robots that stand at the given poses."""
        return cls(x, y, yaw, np.zeros_like(x), np.zeros_like(x))


class PlantRows(NamedTuple):
    """What a plant does to each row, each (N,): see ``yard.Plant`` for meanings; ``delay`` is in steps."""

    accel_scale: FloatArray
    delay: Any
    mismatch: FloatArray

    @classmethod
    def of(cls, plants: Sequence[Plant], repeat: int = 1) -> PlantRows:
        """Return the rows of ``plants``, each ``repeat`` times in a row."""
        return cls(
            np.repeat([plant.accel_scale for plant in plants], repeat),
            np.repeat([round(plant.command_delay / STEP) for plant in plants], repeat),
            np.repeat([plant.wheel_mismatch for plant in plants], repeat),
        )


def arc(x: Any, y: Any, yaw: Any, travel: Any, turned: Any) -> tuple[Any, Any, Any]:
    """Return the pose after an exact circular arc of length ``travel`` (m) that turns by ``turned`` (rad).

    The chord is travel * sin(h)/h along yaw + h with h = turned/2; the series of sin(h)/h, cut after h^8,
    is exact to 1e-10 for |h| <= 0.5 and to 3e-8 for |h| <= 1, far more than one step turns.
    """
    half = 0.5 * turned
    square = half * half
    chord = travel * (1.0 - square / 6.0 * (1.0 - square / 20.0 * (1.0 - square / 42.0 * (1.0 - square / 72.0))))
    middle = yaw + half
    return x + chord * np.cos(middle), y + chord * np.sin(middle), yaw + turned


def step(motion: Motion, v: Any, w: Any, robot: Robot, rows: PlantRows, grip: Any = 1.0) -> Motion:
    """Return the motion one STEP later under speed ``v`` (m/s) and turn rate ``w`` (rad/s); see ``follow``."""
    return follow(motion, *limit_wheels(v, w, robot), robot, rows, grip)


def follow(motion: Motion, left: Any, right: Any, robot: Robot, rows: PlantRows, grip: Any = 1.0) -> Motion:
    """Return the motion one STEP later while the wheels are to take the speeds ``left`` and ``right`` (m/s).

    They follow within their acceleration, evenly over the step, so that the mean of their speeds before
    and after gives the way travelled; the mismatch makes one wheel travel further than the other; ``grip`` is
    the share of the wheels' travel that reaches the floor. Yaw is not wrapped.
    """
    most = robot.wheel_accel * rows.accel_scale * STEP
    left, right = limit_change(left, motion.left, most), limit_change(right, motion.right, most)
    # right/left = 1 + mismatch with a mean of 1
    half = 0.5 * STEP * grip / (1.0 + 0.5 * rows.mismatch)
    left_way, right_way = half * (motion.left + left), half * (1.0 + rows.mismatch) * (motion.right + right)
    pose = arc(motion.x, motion.y, motion.yaw, 0.5 * (left_way + right_way), (right_way - left_way) / robot.track)
    return Motion(*pose, left, right)


class Delay:
    """Commands, two numbers each, on their way to the wheels: a ring as long as the longest delay, (steps, N)."""

    def __init__(self, delay: Any) -> None:
        self._delay = np.asarray(delay)
        self._at = 0
        steps = int(self._delay.max(initial=0)) + 1
        self._v = np.zeros((steps, self._delay.size))
        self._w = np.zeros((steps, self._delay.size))

    def pass_through(self, v: Any, w: Any) -> tuple[Any, Any]:
        """Take the command of this step, return the one that reaches the wheels now (zero before the first)."""
        steps = len(self._v)
        if steps == 1:
            return v, w
        self._v[self._at], self._w[self._at] = v, w
        due = (self._at - self._delay) % steps
        columns = np.arange(self._delay.size)
        self._at = (self._at + 1) % steps
        return self._v[due, columns], self._w[due, columns]

    def keep(self, rows: Any) -> None:
        """Keep the rows that an index or mask picks."""
        self._delay, self._v, self._w = self._delay[rows], self._v[:, rows], self._w[:, rows]
