"""Single episodes on the parcel yard for tests: layouts by hand, and the headings that guidance gave on the way."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from fieldnav_ros.guide import Memory, Senses, guide
from fieldnav_ros.model import KINDS, Layout, Obstacle, OutcomeKind, Pose
from fieldnav_ros.parameters import ParameterSet, stack
from fieldnav_ros.resources import config_path
from fieldnav_ros.world import carts as others
from fieldnav_ros.world.judge import Track, look
from fieldnav_ros.world.plant import STEP, Motion, PlantRows, step
from fieldnav_ros.yard import Plant, load_yard

YARD = load_yard(config_path("yards/parcel_yard.yaml"))
EVERY = 2
"""Steps of the plant for each pose."""


class Ride(NamedTuple):
    """How an episode went: outcome, seconds, heading and speed at each pose."""

    kind: OutcomeKind
    time: float
    headings: np.ndarray
    speeds: np.ndarray

    def flips(self, beyond: float = np.pi / 2) -> int:
        """Return how often the heading changed by more than ``beyond`` (rad) from one pose to the next."""
        change = np.diff(self.headings)
        return int((np.abs(np.arctan2(np.sin(change), np.cos(change))) > beyond).sum())


def layout(start: tuple[float, float, float], goal: tuple[float, float, float], *carts: tuple[float, ...]) -> Layout:
    """Return a layout with carts given as x, y and, if they move, vx, vy."""
    obstacles = [Obstacle(**dict(zip(("x", "y", "vx", "vy"), cart)), radius=YARD.cart_radius) for cart in carts]
    return Layout(
        start=Pose(x=start[0], y=start[1], yaw=start[2]), goal=Pose(x=goal[0], y=goal[1], yaw=goal[2]),
        obstacles=tuple(obstacles),
    )  # fmt: skip


def ride(where: Layout, numbers: ParameterSet, model: str, limit: float = 8.0) -> Ride:
    """Drive an episode, 50 poses a second, on a plant without faults."""
    motion = Motion.at_rest(*(np.array([value]) for value in (where.start.x, where.start.y, where.start.yaw)))
    goal = Track(*(np.array([value]) for value in (where.goal.x, where.goal.y, where.goal.yaw)))
    crowd, memory, rows = others.gather([where]), Memory.start(1), PlantRows.of([Plant()])
    headings, speeds, table = [], [], stack([numbers])
    for number in range(round(limit / STEP)):
        if number % EVERY == 0:
            senses = Senses(motion.x, motion.y, motion.yaw, *goal, crowd)
            advice = guide(senses, table, YARD.robot, YARD.floor, memory, EVERY * STEP, model)
            memory = advice.memory
            headings.append(advice.heading[0])
            speeds.append(advice.v[0])
        after, crowd_after = step(motion, advice.v, advice.w, YARD.robot, rows), others.move(crowd, YARD.floor, STEP)
        found = look(
            Track(*motion[:3]), Track(*after[:3]), crowd, crowd_after, goal, YARD.robot.radius, YARD.floor, YARD.arrival
        )
        motion, crowd = after, crowd_after
        if found.code[0] >= 0:
            return Ride(KINDS[int(found.code[0])], (number + 1) * STEP, np.array(headings), np.array(speeds))
    return Ride(OutcomeKind.TIMEOUT, limit, np.array(headings), np.array(speeds))
