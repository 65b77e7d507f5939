"""The robot counts as placed when it has stood at its start, heading included; until then the words say what to do."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.crowd import NANO, Reading
from fieldnav_ros.model import Pose
from fieldnav_ros.resets import Off, Placing, Slack, distance_in_words, where

START = Pose(x=0.4, y=0.8, yaw=math.pi - 0.05)
SLACK = Slack(position=0.10, heading=0.35, rest=1.0)
Step = tuple[float, float, float, float]


def seen(steps: list[Step]) -> list[bool]:
    """Return the answer to each pose, given as s, m, m, rad."""
    placing = Placing(START, SLACK)
    return [placing.look(Reading(round(t * NANO), x, y, yaw)) for t, x, y, yaw in steps]


def standing(x: float, y: float, yaw: float, seconds: float = 1.5) -> list[Step]:
    return [(0.1 * number, x, y, yaw) for number in range(round(10 * seconds) + 1)]


@pytest.mark.parametrize(
    ("name", "steps", "placed"),
    [
        ("at the start", standing(0.4, 0.8, START.yaw), True),
        ("yaw beyond the turn of the circle", standing(0.4, 0.8, -math.pi + 0.1), True),
        ("at the edge of the slack", standing(0.499, 0.8, START.yaw), True),
        ("too far", standing(0.51, 0.8, START.yaw), False),
        ("facing the other way", standing(0.4, 0.8, 0.0), False),
        ("for too short a time", standing(0.4, 0.8, START.yaw, 0.9), False),
        ("still being moved", [(0.1 * n, 0.32 + 0.01 * n, 0.8, START.yaw) for n in range(16)], False),
        ("still being turned", [(0.1 * n, 0.4, 0.8, START.yaw - 0.3 + 0.04 * n) for n in range(16)], False),
        ("poses shake a little", [(0.1 * n, 0.4 + 0.004 * (-1) ** n, 0.8, START.yaw) for n in range(16)], True),
        ("poses were missing", [*standing(0.4, 0.8, START.yaw, 0.5), (1.2, 0.4, 0.8, START.yaw)], False),
        ("lifted and put back", [*standing(0.4, 0.8, START.yaw, 0.8), (0.9, 1.0, 0.8, 0.0),
                                 *[(1.0 + 0.1 * n, 0.4, 0.8, START.yaw) for n in range(6)]], False),
        ("the clock was set back", [*standing(0.4, 0.8, START.yaw, 0.8), (-5.0, 0.4, 0.8, START.yaw),
                                    (-4.5, 0.4, 0.8, START.yaw)], False),
    ],
)  # fmt: skip
def test_when_the_robot_counts_as_placed(name: str, steps: list[Step], placed: bool) -> None:
    assert any(seen(steps)) is placed, name


@given(st.floats(-3, 3), st.floats(-3, 3), st.floats(-10, 10))
def test_placed_never_further_off_than_the_slack(x: float, y: float, yaw: float) -> None:
    """The distance by math.dist, the turn by the complex plane."""
    if any(seen(standing(x, y, yaw))):
        turn = abs(math.atan2(math.sin(START.yaw - yaw), math.cos(START.yaw - yaw)))
        assert math.dist((x, y), (START.x, START.y)) <= SLACK.position
        assert turn <= SLACK.heading + 1e-12


@pytest.mark.parametrize(
    ("off", "says"),
    [
        (None, "No pose"),
        (Off(0.53, 2.0), "0.53 m away"),
        (Off(0.05, math.radians(40)), "40 degrees to the left"),
        (Off(0.05, -math.radians(40)), "40 degrees to the right"),
        (Off(0.05, 0.1), "hands off"),
    ],
)
def test_words_say_the_next_thing_to_do(off: Off | None, says: str) -> None:
    assert says in distance_in_words(off, SLACK)


def test_a_turn_to_the_left_is_anticlockwise() -> None:
    """REP-103: yaw grows anticlockwise, which seen from above is to the robot's left."""
    placing = Placing(Pose(x=0.0, y=0.0, yaw=math.pi / 2), SLACK)
    placing.look(Reading(0, 0.0, 0.0, 0.0))
    assert "left" in distance_in_words(placing.off, SLACK)


def test_a_mark_is_named_with_its_place() -> None:
    assert where(Pose(x=0.4, y=0.8, yaw=math.pi / 2), "A") == "mark A (x 0.40 m, y 0.80 m, facing 90 degrees)"
    assert where(Pose(x=0.4, y=0.8, yaw=-math.pi / 2), None) == "x 0.40 m, y 0.80 m, facing -90 degrees"
