"""Could a contact have been avoided? The last second before it again, with other manoeuvres in place of guidance's."""

from __future__ import annotations

from typing import Any

import numpy as np

from fieldnav_ros.drive import limit_change
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import ParameterSet, stack
from fieldnav_ros.world import batch
from fieldnav_ros.world import carts as others
from fieldnav_ros.world.judge import Track, look
from fieldnav_ros.world.plant import STEP, Motion, PlantRows, step
from fieldnav_ros.yard import Plant, Yard

SHARES = np.array([-1.0, -0.5, 0.0, 0.5, 1.0])
MOMENTS = (20, 40, 60, 80, 100)
"""Steps before the contact at which an escape may begin."""
BEYOND = 20
"""Steps past the time of contact that an escape must last."""
STANDS = 0.05


class _Recorder(batch._Run):
    """A run that keeps where robot and carts were before each step."""

    def start_record(self) -> None:
        self.record: list[tuple[Motion, Obstacles]] = []

    def _step(self, number: int) -> None:
        self.record.append((self.motion, self.carts))
        super()._step(number)


def contacts(
    yard: Yard, layouts: list[Layout], plant: Plant, made: ParameterSet, model: str, limit: float
) -> tuple[int, int]:
    """Return how many of these episodes' contacts no escape avoids, and how many met a standing robot."""
    unavoidable = standing = 0
    for layout in layouts:
        run = _Recorder(yard, [layout], [plant], np.arange(1), stack([made]), model, limit, plant.command_delay)
        run.start_record()
        run.finish()
        last = round(float(run.time[0]) / STEP)
        record = run.record[:last]
        motion = record[-1][0]
        standing += bool(abs(0.5 * (motion.left[0] + motion.right[0])) < STANDS)
        unavoidable += not any(_escapes(yard, *record[max(0, last - back)], min(back, last)) for back in MOMENTS)
    return unavoidable, standing


def _escapes(yard: Yard, motion: Motion, carts: Obstacles, steps: int) -> bool:
    """Tell whether any manoeuvre from here lasts until ``BEYOND`` steps past the contact ``steps`` ahead."""
    left, right = (part.ravel() * yard.robot.wheel_speed for part in np.meshgrid(SHARES, SHARES))
    many = len(left)
    motion = Motion(*(np.repeat(part, many) for part in motion))
    carts = Obstacles(*(np.repeat(part, many, axis=1) for part in carts))
    goal = Track(np.full(many, 1e3), np.zeros(many), np.zeros(many))
    rows = PlantRows.of([Plant()], many)
    alive = np.ones(many, dtype=bool)
    for _ in range(steps + BEYOND):
        wheels: Any = [
            limit_change(wanted, now, yard.robot.wheel_accel * STEP)
            for wanted, now in ((left, motion.left), (right, motion.right))
        ]
        v, w = 0.5 * (wheels[0] + wheels[1]), (wheels[1] - wheels[0]) / yard.robot.track
        after, carts_after = step(motion, v, w, yard.robot, rows), others.move(carts, yard.floor, STEP)
        found = look(
            Track(*motion[:3]), Track(*after[:3]), carts, carts_after, goal, yard.robot.radius, yard.floor, yard.arrival
        )
        alive &= found.code < 0
        motion, carts = after, carts_after
    return bool(alive.any())
