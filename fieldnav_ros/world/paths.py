"""What robots do and are asked for on their way: driven paths of the batched simulation, for looking into a field."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.drive import wrap
from fieldnav_ros.guide import DEFAULT_MODEL, Memory, Senses, guide
from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import FloatArray, ParameterSet, stack
from fieldnav_ros.world.plant import STEP
from fieldnav_ros.world.trails import _Walk  # the same loop, so that a path goes where the outcome says
from fieldnav_ros.yard import Yard

ASIDE = 0.005
"""How far to either side (m) the field is looked at: about what a tracker's poses are off by (common practice)."""
ASIDE_EVERY = 4
"""Poses from one look aside to the next."""


class Paths(NamedTuple):
    """Driven paths, one row of N each, one column each STEP, (T, N): true pose (m, m, rad) and speed (m/s).

    ``along`` and ``aside`` are angles (rad) by which the field, at the last pose, asked for something else than before:
    than at the pose before; and, every ASIDE_EVERY poses, than it would ASIDE to the left or right. The angle is the
    change of the direction to travel in, but no more than what the robot would have to turn: standing and backing out
    ask for none. ``length`` (columns) and ``code`` (of ``OutcomeKind``), both (N,): what comes after ``length`` is not
    to be looked at.
    """

    x: FloatArray
    y: FloatArray
    yaw: FloatArray
    speed: FloatArray
    along: FloatArray
    aside: FloatArray
    length: np.ndarray
    code: np.ndarray


def paths(
    yard: Yard, layouts: Sequence[Layout], parameters: ParameterSet, time_limit: float, model: str = DEFAULT_MODEL
) -> Paths:
    """Run one set on layouts that all have obstacles or all have none, as ``batch.simulate`` would.

    On the yard's own plant; ``time_limit`` in s. Every step is kept: some 60 MB for a thousand layouts and 10 s.
    """
    rows = len(layouts)
    run = _Watched(
        yard, list(layouts), [yard.plant] * rows, np.arange(rows), stack([parameters], rows), model, time_limit, 0.0
    )
    return run.paths()


class _Watched(_Walk):
    """A chunk of rows that keeps all that a path tells; no row leaves it early."""

    def __init__(self, *arguments: Any) -> None:
        super().__init__(*arguments)
        self._looks = 0
        self._along = self._aside = np.zeros(len(self.place))
        self._kept = [self._now()]

    def _now(self) -> tuple[Any, ...]:
        motion = self.motion
        return motion.x, motion.y, motion.yaw, 0.5 * (motion.left + motion.right), self._along, self._aside

    def _advise(self, number: int) -> None:
        memory, since, way = self.memory, STEP * (number - self.advised), _way(self.asked, self.memory)
        super()._advise(number)
        x, y, yaw = self.motion.x, self.motion.y, self.motion.yaw
        now = _way(self.asked, self.memory)
        if self._looks:
            self._along = np.minimum(np.abs(wrap(now - way)), np.abs(wrap(self.asked - yaw)))
        self._looks += 1
        if self._looks % ASIDE_EVERY:
            return
        for side in (-ASIDE, ASIDE):
            senses = Senses(x - side * np.sin(yaw), y + side * np.cos(yaw), yaw, *self.goal, self.near)
            there = guide(senses, self.numbers, self.yard.robot, self.yard.floor, memory, since, self.model)
            angle = np.abs(wrap(_way(there.heading, there.memory) - now))
            self._aside = np.maximum(self._aside, np.minimum(angle, np.abs(wrap(there.heading - yaw))))

    def _step(self, number: int) -> None:
        super()._step(number)
        self._kept.append(self._now())
        self._along = self._aside = np.zeros(len(self.place))

    def paths(self) -> Paths:
        code, time, _, _ = self.finish()
        length = np.round(np.asarray(time) / STEP).astype(int) + 1
        x, y, yaw, speed, along, aside = (np.stack(part) for part in zip(*self._kept))
        return Paths(x, y, yaw, speed, along, aside, length, np.asarray(code))


def _way(heading: Any, memory: Memory) -> Any:
    """Return the direction to travel in (rad): the heading, or for models that may back out what they remember."""
    remembered = memory.course_x**2 + memory.course_y**2 > 0.0
    return np.where(remembered, np.arctan2(memory.course_y, memory.course_x), heading)
