"""One episode of the built-in world, stepped from outside: what the simulator node shows of it. Pure.

The same plant, carts and noise as in the batched simulation, with one row; ``batch.simulate`` and a lockstep session
see the same poses.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.world import carts
from fieldnav_ros.world.noise import Tapes, is_quiet, record
from fieldnav_ros.world.plant import STEP, Delay, Motion, PlantRows, step
from fieldnav_ros.yard import Yard

GIVE = 0.005
"""Metres that a wall gives where it holds the robot, so that touching it is seen."""


class Shown(NamedTuple):
    """What the tracking system of the floor reports at a moment: steps since the start; pose in m, m, rad."""

    number: int
    x: float
    y: float
    yaw: float
    obstacles: Obstacles


class Stage:
    """Robot and carts from a layout's start on; commands go in, poses come out."""

    def __init__(self, yard: Yard, layout: Layout, tape_time: float, walls_hold: bool = False) -> None:
        """``tape_time`` (s) is for how long the plant's noise is drawn; after it, it starts over.

        ``walls_hold``: nothing gets through them; an episode ends where one is touched, a floor goes on.
        """
        start = layout.start
        self._yard = yard
        self._walls_hold = walls_hold and yard.floor.walled
        self._motion = Motion.at_rest(*(np.array([value]) for value in (start.x, start.y, start.yaw)))
        self._carts = carts.gather([layout])
        self._plant = PlantRows.of([yard.plant])
        self._delay = Delay(self._plant.delay)
        self._length = max(1, round(tape_time / STEP))
        self._tapes: Tapes | None = None if is_quiet(yard.plant) else record([layout], [yard.plant], self._length)
        self._poses_per_step = yard.plant.pose_rate * STEP
        self._due = 1
        self.number = 0
        self.command(0.0, 0.0)

    def command(self, v: float, w: float) -> None:
        """Set speed (m/s) and turn rate (rad/s) for the steps that follow."""
        self._v, self._w = np.array([v]), np.array([w])

    def step(self) -> bool:
        """Let STEP seconds pass; tell whether a pose is due afterwards."""
        v, w = self._delay.pass_through(self._v, self._w)
        grip = 1.0 if self._tapes is None else self._tapes.grip[self.number % self._length]
        self._motion = step(self._motion, v, w, self._yard.robot, self._plant, grip)
        if self._walls_hold:
            self._motion = self._motion._replace(
                x=self._held(self._motion.x, self._yard.floor.x), y=self._held(self._motion.y, self._yard.floor.y)
            )
        self._carts = carts.move(self._carts, self._yard.floor, STEP)
        self.number += 1
        if self.number * self._poses_per_step < self._due:
            return False
        self._due += 1
        return True

    def _held(self, place: FloatArray, side: tuple[float, float]) -> FloatArray:
        reach = self._yard.robot.radius - GIVE
        return np.clip(place, side[0] + reach, side[1] - reach)

    @property
    def lost(self) -> bool:
        """Whether the pose of this moment never comes."""
        return self._tapes is not None and bool(self._tapes.lost[self.number % self._length, 0])

    def show(self) -> Shown:
        """Return what can be seen now, with the plant's noise on the pose."""
        x, y, yaw = (float(part[0]) for part in self._motion[:3])
        if self._tapes is not None:
            at = self.number % self._length
            x, y, yaw = x + self._tapes.x[at, 0], y + self._tapes.y[at, 0], yaw + self._tapes.yaw[at, 0]
        return Shown(self.number, float(x), float(y), float(yaw), self._carts)
