"""Single episodes for tests: layouts by hand, the headings given on the way, and episodes driven as nodes do."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from fieldnav_ros.crowd import NANO, Crowd, Reading, Sighting
from fieldnav_ros.guide import DEFAULT_MODEL, Memory, Senses, guide
from fieldnav_ros.model import KINDS, Layout, Obstacle, Outcome, OutcomeKind, Pose
from fieldnav_ros.parameters import DEFAULTS, ParameterSet, stack
from fieldnav_ros.pilot import Order, Pilot, PilotRules
from fieldnav_ros.resources import config_path
from fieldnav_ros.tracking import Rules as TrackingRules
from fieldnav_ros.world import carts as others
from fieldnav_ros.world.judge import Track, look
from fieldnav_ros.world.plant import STEP, Motion, PlantRows, step
from fieldnav_ros.world.stage import Stage
from fieldnav_ros.world.watch import EpisodeWatch, Rules
from fieldnav_ros.yard import Plant, Yard, load_yard

YARD = load_yard(config_path("yards/parcel_yard.yaml"))
EXACT = TrackingRules(alpha=1.0)
"""For positions without noise."""
STEP_NS = round(STEP * NANO)
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


def as_nodes_do(
    yard: Yard, layout: Layout, limit: float, parameters: ParameterSet = DEFAULTS
) -> tuple[list[tuple[Sighting, Reading]], Outcome]:
    """Run guidance, world and judge as in a lockstep session, without the messages between them.

    Returns what was seen at each pose, and what the judge's rules said.
    """
    rules = PilotRules(yard.robot, yard.floor, yard.arrival, match_stamps=True)
    pilot = Pilot(rules, Crowd(EXACT, yard.cart_radius), parameters.numbers(), DEFAULT_MODEL)
    pilot.start_episode("e", layout.goal, limit)
    crowd = Crowd(EXACT, yard.cart_radius)
    watch = EpisodeWatch(layout, Rules(yard.robot, yard.floor, yard.arrival, limit), crowd)
    stage, seen = Stage(yard, layout, limit + 1.0), list[tuple[Sighting, Reading]]()
    while True:
        shown = stage.show()
        stamp = NANO + shown.number * STEP_NS
        sighting = Sighting(stamp, np.stack([shown.obstacles.x[:, 0], shown.obstacles.y[:, 0]]))
        reading = Reading(stamp, shown.x, shown.y, shown.yaw)
        seen.append((sighting, reading))
        crowd.see(sighting, stamp)
        ruling = watch.look_at(reading, stamp)
        if ruling is not None:
            return seen, ruling.outcome
        pilot.crowd.see(sighting, stamp)
        order = pilot.on_pose(reading, stamp, stamp)
        assert isinstance(order, Order)
        stage.command(order.v, order.w)
        while not (stage.step() and not stage.lost):
            pass
