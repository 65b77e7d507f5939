"""Flips: what a robot at its speed can turn, and where the field asks for more."""

from __future__ import annotations

import math

import numpy as np
import pytest
from episodes import YARD, layout
from field.test_weaknesses import WIDE
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.model import Layout, Pose
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.survey.flips import crossings, flips, most_turn
from fieldnav_ros.survey.scene import Scene
from fieldnav_ros.world.paths import Paths, paths

ROBOT = YARD.robot
SCENE = Scene(YARD, DEFAULTS, "published", Pose(x=1.8, y=0.8, yaw=0.0))


def test_most_turn_is_an_arc_at_the_lateral_limit_where_wheels_do_not_matter() -> None:
    """With wheels of any acceleration: an arc as long as the robot, 2 r, of radius v^2/R_m (circular motion)."""
    able = ROBOT.model_copy(update={"wheel_accel": 1e6, "wheel_speed": 100.0})
    for speed, lateral in ((0.5, 1.0), (1.0, 2.0), (2.0, 6.0)):
        assert most_turn(speed, lateral, able) == pytest.approx(2.0 * ROBOT.radius * lateral / speed**2)
        assert most_turn(-speed, lateral, able, 0.1) == pytest.approx((2.0 * ROBOT.radius + 0.1) * lateral / speed**2)


def test_most_turn_is_uniform_angular_acceleration_where_the_lateral_limit_does_not_matter() -> None:
    """At half the largest speed both wheels change by a t: the turn rate is 2 a t/L and the angle a t^2/L."""
    speed = 0.5 * ROBOT.wheel_speed
    quick = ROBOT.model_copy(update={"radius": 0.02})
    time = 2.0 * quick.radius / speed
    assert most_turn(speed, 1e6, quick) == pytest.approx(ROBOT.wheel_accel * time**2 / ROBOT.track, rel=1e-9)
    # at full speed only one wheel can, by slowing down
    time = 2.0 * quick.radius / ROBOT.wheel_speed
    full = most_turn(ROBOT.wheel_speed, 1e6, quick)
    assert full == pytest.approx(0.5 * ROBOT.wheel_accel * time**2 / ROBOT.track, rel=1e-9)


@given(speed=st.floats(0.0, 1.2), more=st.floats(0.0, 0.5), lateral=st.floats(0.3, 12.0))
def test_the_faster_the_less_it_turns(speed: float, more: float, lateral: float) -> None:
    slow, fast = most_turn(np.array([speed, min(speed + more, 1.2)]), lateral, ROBOT)
    assert fast <= slow * (1.0 + 1e-9)


def test_a_robot_that_hardly_moves_can_follow_anything() -> None:
    assert most_turn(0.05, DEFAULTS.lateral_accel, ROBOT) > math.pi


def driven(along: float, speed: float, length: int = 3, aside: float = 0.0) -> Paths:
    """Return two paths of three steps with one change of heading in each, 5 cm apart."""
    still = np.zeros((3, 2))
    change, beside = still.copy(), still.copy()
    change[2], beside[2] = along, aside
    place = np.array([1.0, 1.05]) + still
    return Paths(place, 0.8 + still, still, speed + still, change, beside, np.full(2, length), np.zeros(2, dtype=int))


@pytest.mark.parametrize(
    ("case", "count"),
    [
        (driven(3.0, 1.0), 1),
        (driven(-0.0, 1.0, aside=3.0), 1),
        (driven(1.0, 1.0), 0),
        (driven(3.0, 0.05), 0),
        (driven(3.0, 1.0, length=2), 0),
    ],
    ids=["along", "across", "still leads on", "too slow to matter", "after the end"],
)
def test_what_counts_as_a_flip(case: Paths, count: int) -> None:
    met = crossings(SCENE, case)
    assert len(met) == 2 * count
    found = flips(SCENE, met)
    assert len(found) == count  # both paths met it within a robot's length
    assert all(flip.paths == 2 and flip.angle == pytest.approx(3.0) for flip in found)


def test_places_farther_apart_than_the_robot_is_long_are_two() -> None:
    met = np.array([[1.0, 0.8, 2.0, 0], [1.0 + 2.0 * ROBOT.radius + 1e-3, 0.8, 3.0, 1]])
    found = flips(SCENE, met)
    assert [flip.angle for flip in found] == [3.0, 2.0]
    assert flips(SCENE, np.empty((0, 4))) == []


def test_a_row_of_carts_flips_the_published_field_and_the_floor_without_them_does_not() -> None:
    """The row that makes the published composition dither before it, met at speed."""
    row: Layout = layout((0.4, 0.8, 0.0), (2.0, 0.8, 0.0), (1.2, 0.803), (1.2, 0.953), (1.2, 0.653))
    for where, some in ((row, True), (row.model_copy(update={"obstacles": ()}), False)):
        scene = Scene(YARD, WIDE, "published", where.goal, where.obstacles)
        found = flips(scene, crossings(scene, paths(YARD, [where], WIDE, 8.0, "published")))
        assert bool(found) is some
        assert all(0.7 < flip.x < 1.2 and abs(flip.y - 0.8) < 0.2 for flip in found)
