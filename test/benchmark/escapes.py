"""Could a contact have been avoided? The last second before it again, with other manoeuvres in place of guidance's."""

from __future__ import annotations

from typing import Any

import numpy as np

from fieldnav_ros.drive import limit_change
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.guide import Memory, Senses, guide
from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import ParameterSet, stack
from fieldnav_ros.pending import slots
from fieldnav_ros.world import carts as others
from fieldnav_ros.world.judge import Track, look
from fieldnav_ros.world.noise import record
from fieldnav_ros.world.plant import STEP, Delay, Motion, PlantRows, step
from fieldnav_ros.yard import Plant, Yard

SHARES = np.array([-1.0, -0.5, 0.0, 0.5, 1.0])
MOMENTS = (20, 40, 60, 80, 100)
"""Steps before the contact at which an escape may begin."""
BEYOND = 20
"""Steps past the time of contact that an escape must last."""
STANDS = 0.05


def replay(
    yard: Yard, layout: Layout, plant: Plant, made: ParameterSet, model: str, last: int
) -> list[tuple[Motion, Obstacles]]:
    """Return where robot and carts were before each of the first ``last`` steps, as the batch simulator had them."""
    motion = Motion.at_rest(*(np.array([value]) for value in (layout.start.x, layout.start.y, layout.start.yaw)))
    goal = [np.array([value]) for value in (layout.goal.x, layout.goal.y, layout.goal.yaw)]
    carts, rows, numbers = others.gather([layout]), PlantRows.of([plant]), stack([made])
    delay, tapes = Delay(rows.delay), record([layout], [plant], last)
    per_step, delayed = plant.pose_rate * STEP, plant.command_delay
    memory = Memory.start(1, slots(delayed, STEP * int(1.0 / per_step + 1e-9)))
    advised, due, found = -1.0 / per_step, 0, []
    v, w = np.zeros(1), np.zeros(1)
    for number in range(last):
        found.append((motion, carts))
        if number * per_step >= due:
            due += 1
            if not tapes.lost[number, 0]:
                x, y, yaw = motion.x + tapes.x[number], motion.y + tapes.y[number], motion.yaw + tapes.yaw[number]
                senses = Senses._make([x, y, yaw, *goal, carts])
                dt = STEP * (number - advised)
                advice = guide(senses, numbers, yard.robot, yard.floor, memory, dt, model, delayed)
                v, w, memory, advised = advice.v, advice.w, advice.memory, float(number)
        motion = step(motion, *delay.pass_through(v, w), yard.robot, rows, tapes.grip[number])
        carts = others.move(carts, yard.floor, STEP)
    return found


def contacts(
    yard: Yard, layouts: list[Layout], times: np.ndarray, plant: Plant, made: ParameterSet, model: str
) -> tuple[int, int]:
    """Return how many contacts, at these times (s) of episodes, no escape avoids, and how many met a standing robot."""
    unavoidable = standing = 0
    for layout, when in zip(layouts, times):
        last = round(float(when) / STEP)
        steps = replay(yard, layout, plant, made, model, last)
        motion = steps[-1][0]
        standing += bool(abs(0.5 * (motion.left[0] + motion.right[0])) < STANDS)
        unavoidable += not any(_escapes(yard, *steps[max(0, last - back)], min(back, last)) for back in MOMENTS)
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
