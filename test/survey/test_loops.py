"""Loops: paths that come back on themselves; a known one of the published composition."""

from __future__ import annotations

import math

import numpy as np
from episodes import YARD, layout
from field.test_weaknesses import WIDE

from fieldnav_ros.model import OutcomeKind, Pose
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.survey.loops import Loop, loops, rounds
from fieldnav_ros.survey.scene import Scene
from fieldnav_ros.world.paths import Paths, paths
from fieldnav_ros.world.plant import STEP

SCENE = Scene(YARD, DEFAULTS, "published", Pose(x=1.8, y=0.8, yaw=0.0))
TIME = STEP * np.arange(801.0)


def one(x: np.ndarray, y: np.ndarray, yaw: np.ndarray, kind: OutcomeKind = OutcomeKind.TIMEOUT) -> Paths:
    speed = np.hypot(np.gradient(x, STEP), np.gradient(y, STEP))
    none = np.zeros_like(x)
    x, y, yaw, speed, none = (part[:, None] for part in (x, y, yaw, speed, none))
    return Paths(x, y, yaw, speed, none, none, np.array([len(x)]), np.array([kind.code]))


def circle(radius: float, kind: OutcomeKind = OutcomeKind.TIMEOUT) -> Paths:
    """A circle driven with 0.5 m/s, ever again."""
    turn = 0.5 / radius * TIME
    return one(1.0 + radius * np.cos(turn), 0.8 + radius * np.sin(turn), turn + 0.5 * math.pi, kind)


def test_a_circle_is_found_as_one_round_of_its_own_length() -> None:
    (found,) = rounds(SCENE, circle(0.2))
    length = np.hypot(np.diff(found.x), np.diff(found.y)).sum()
    slack = YARD.arrival.position + 0.5 * 5 * STEP  # as close as counts, and from one compared place to the next
    assert abs(length - 2.0 * math.pi * 0.2) < slack
    assert math.hypot(found.x.mean() - 1.0, found.y.mean() - 0.8) < 0.02


def test_what_is_no_loop() -> None:
    assert rounds(SCENE, circle(0.2, OutcomeKind.ARRIVED)) == []
    assert rounds(SCENE, circle(0.4 * YARD.robot.radius)) == []  # shivers within its own length
    straight = one(0.2 + 0.2 * TIME, 0.8 + 0.0 * TIME, 0.0 * TIME)
    assert rounds(SCENE, straight) == []
    out_and_back = one(0.2 + 0.2 * np.minimum(TIME, 8.0 - TIME), 0.8 + 0.0 * TIME, math.pi * (TIME > 4.0))
    assert rounds(SCENE, out_and_back) == []  # the same places, facing the other way


def test_loops_about_one_middle_are_one() -> None:
    here, there = (np.array([x, x + 0.1]) for x in (1.0, 1.3))
    found = loops(SCENE, [Loop(here, here), Loop(here + 0.05, here), Loop(there, there)])
    assert [item.paths for item in found] == [2, 1]


def test_a_cart_behind_the_goal_makes_the_published_field_go_round_before_it() -> None:
    """Its repulsion never lets the robot in: it comes back on itself near the goal until time is up."""
    where = layout((0.4, 0.8, 0.0), (1.6, 0.8, 0.0), (1.78, 0.8))
    scene = Scene(YARD, WIDE, "published", where.goal, where.obstacles)
    driven = paths(YARD, [where.model_copy(update={"start": Pose(x=0.4, y=y, yaw=0.0)}) for y in (0.4, 0.6, 1.2)],
                   WIDE, 10.0, "published")  # fmt: skip
    found = loops(scene, rounds(scene, driven))
    assert found
    assert all(math.hypot(item.x.mean() - 1.6, item.y.mean() - 0.8) < 0.2 for item in found)
    lead = DEFAULTS.model_copy(update={"motion_lead": 0.3})
    own = Scene(YARD, lead, "foresight", where.goal, where.obstacles)
    assert rounds(own, paths(YARD, [where], lead, 10.0, "foresight")) == []
