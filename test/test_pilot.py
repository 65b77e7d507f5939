"""The state machine of guidance: when it drives, when it stands, what it remembers."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from fieldnav_ros.crowd import NANO, Crowd, Reading, Sighting
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.guide import DEFAULT_MODEL, Memory, Senses, guide
from fieldnav_ros.model import Pose, Robot
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.pending import slots
from fieldnav_ros.pilot import Halt, Order, Pilot, PilotRules
from fieldnav_ros.tracking import Rules
from fieldnav_ros.yard import Arrival, Floor

ROBOT = Robot(radius=0.06, track=0.1, wheel_speed=1.2, wheel_accel=4.0)
FLOOR = Floor(x=(0.0, 2.4), y=(0.0, 1.6))
RULES = PilotRules(ROBOT, FLOOR, Arrival())
GOAL = Pose(x=2.0, y=0.8, yaw=0.0)
MS = NANO // 1000
START = 100 * NANO


def pilot(**changes: object) -> Pilot:
    made = Pilot(replace(RULES, **changes), Crowd(Rules(), 0.06), DEFAULTS.numbers(), "published")  # type: ignore[arg-type]
    made.take_goal(GOAL)
    return made


def pose(ms: float, x: float = 0.5, y: float = 0.8, yaw: float = 0.0) -> Reading:
    return Reading(START + round(ms * MS), x, y, yaw)


def give(to: Pilot, reading: Reading, age: float = 0.0) -> Order | Halt | None:
    """Let a pose arrive ``age`` seconds after its stamp."""
    return to.on_pose(reading, reading.stamp, reading.stamp + round(age * NANO))


def kind(of: Order | Halt | None) -> str | None:
    return of.kind if isinstance(of, Halt) else ("order" if of else None)


def test_first_command_keeps_to_one_periods_acceleration() -> None:
    order = give(pilot(), pose(0))
    assert isinstance(order, Order)
    assert 0.0 < order.v <= ROBOT.wheel_accel * RULES.pose_period + 1e-12


def test_orders_are_those_of_guide() -> None:
    """The node adds nothing to the maths: same senses, same memory, same command."""
    made, memory = pilot(), Memory.start(1)
    for number in range(5):
        reading = pose(20.0 * number, x=0.5 + 0.01 * number, yaw=0.3)
        order = give(made, reading)
        row = [np.array([value]) for value in (reading.x, reading.y, reading.yaw, GOAL.x, GOAL.y, GOAL.yaw)]
        senses = Senses._make([*row, made.seen(0).obstacles])
        advice = guide(senses, DEFAULTS.numbers(), ROBOT, FLOOR, memory, 0.02, "published")
        memory = advice.memory
        assert isinstance(order, Order)
        assert (order.heading, order.v, order.w) == (advice.heading[0], advice.v[0], advice.w[0])


def test_a_drive_ends_at_its_goal_and_an_episode_by_whoever_judges_it() -> None:
    there = pose(0, GOAL.x, GOAL.y, GOAL.yaw)
    drive, episode = pilot(), pilot()
    drive.start_episode("d", GOAL, 10.0, stay=True)
    episode.start_episode("e", GOAL, 10.0)
    assert kind(give(episode, there)) == "order"
    assert kind(give(drive, there)) == "arrived"
    assert drive.episode == "d", "until it is told to stop: numbers must not change meanwhile"


@pytest.mark.parametrize(
    ("x", "yaw", "stay", "expected"),
    [
        (GOAL.x + 0.035, 0.0, True, "arrived"),
        (GOAL.x + 0.045, 0.0, True, "order"),
        (GOAL.x, math.radians(19.0), True, "arrived"),
        (GOAL.x, math.radians(21.0), True, "order"),
        (GOAL.x + 0.045, 0.0, False, "arrived"),
    ],
)
def test_a_drive_that_rolled_past_its_goal_is_tried_again(x: float, yaw: float, stay: bool, expected: str) -> None:
    """By hand: 1.3 times 3 cm and 15 degrees; a goal outside episodes is left at that."""
    made = pilot()
    if stay:
        made.start_episode("d", GOAL, 10.0, stay=True)
    assert kind(give(made, pose(0, GOAL.x, GOAL.y, GOAL.yaw))) == "arrived"
    assert kind(give(made, pose(20, x, GOAL.y, yaw))) == expected


def test_a_drive_is_given_up_after_its_time() -> None:
    made = pilot()
    made.start_episode("d", GOAL, 1.0, stay=True)
    kinds = [kind(give(made, pose(20.0 * number))) for number in range(200)]
    assert kinds[0] == "order"
    assert "episode_overdue" in kinds
    assert kinds[-1] == "no_goal"


def test_a_repeated_pose_gives_the_same_order_and_time_does_not_pass() -> None:
    made, other = pilot(), pilot()
    for number in range(4):
        expected = give(other, pose(20.0 * number))
        assert isinstance(expected, Order)
        for _ in range(3):
            order = give(made, pose(20.0 * number))
            assert isinstance(order, Order)
            assert (order.heading, order.v, order.w) == (expected.heading, expected.v, expected.w)


@pytest.mark.parametrize(
    ("reading", "age", "expected"),
    [
        (pose(20), 0.14, "order"),
        (pose(20), 0.16, "stale_pose"),
        (pose(20), -0.16, "clock_jump"),
        (pose(20, x=1.5), 0.0, "pose_jump"),
        (pose(20, yaw=math.pi), 0.0, "pose_jump"),
        (pose(20, x=0.55), 0.0, "order"),
        (pose(-1000), 0.0, "clock_jump"),
        (pose(-10), 0.0, None),
    ],
)
def test_moments_that_do_not_fit_stop_the_robot(reading: Reading, age: float, expected: str | None) -> None:
    made = pilot()
    give(made, pose(0))
    assert kind(give(made, reading, age)) == expected


@pytest.mark.parametrize(
    "halt",
    [
        lambda made: give(made, pose(100), age=1.0),
        lambda made: made.refuse(Halt("bad_pose", "")),
        lambda made: made.watch(START + 10 * NANO),
        lambda made: give(made, pose(100, x=2.0, y=0.1)),
    ],
)
def test_after_any_stop_the_command_starts_from_rest(halt: object) -> None:
    made = pilot()
    for number in range(6):
        give(made, pose(20.0 * number))
    assert isinstance(halt(made), Halt)  # type: ignore[operator]  # a function of the pilot
    made._last = None
    order = give(made, pose(300))
    assert isinstance(order, Order)
    assert abs(order.v) <= ROBOT.wheel_accel * RULES.pose_period + 1e-12


def test_a_gap_in_poses_is_no_licence_to_accelerate() -> None:
    made = pilot()
    give(made, pose(0))
    assert kind(give(made, pose(5000))) == "pose_gap"
    order = give(made, pose(5020))
    assert isinstance(order, Order)
    assert order.v <= ROBOT.wheel_accel * RULES.pose_period + 1e-12


def test_a_camera_that_repeats_itself_grows_old_also_by_arrival() -> None:
    made = pilot()
    made.on_pose(pose(0), moment=START, now=START)
    again = made.on_pose(pose(0), moment=START + 200 * MS, now=START + 200 * MS)
    assert kind(again) == "stale_pose"


def test_silence_is_seen_by_the_watch() -> None:
    made = pilot()
    assert kind(made.watch(START)) == "no_pose"
    give(made, pose(0))
    assert made.watch(START + 140 * MS) is None
    assert kind(made.watch(START + 160 * MS)) == "stale_pose"


def test_hold_outranks_everything_and_release_drives_on() -> None:
    made = pilot()
    give(made, pose(0))
    made.held = True
    assert kind(give(made, pose(20))) == kind(made.watch(START)) == "hold"
    made.held = False
    assert kind(give(made, pose(40))) == "order"


def test_goal_lost_or_never_there() -> None:
    made = pilot()
    made.take_goal(None)
    assert kind(give(made, pose(0))) == kind(made.watch(START)) == "no_goal"


def test_arrived_stays_arrived_until_another_goal_outside_episodes_only() -> None:
    made = pilot()
    near = {"x": GOAL.x - 0.02, "y": GOAL.y}
    assert kind(give(made, pose(0, **near))) == "arrived"
    assert kind(give(made, pose(20, x=GOAL.x - 0.06))) == "arrived"
    made.take_goal(GOAL)
    assert kind(give(made, pose(40, x=GOAL.x - 0.06))) == "order"
    made.start_episode("e", GOAL, 5.0)
    assert kind(give(made, pose(60, **near))) == "order"


def test_an_episode_that_nobody_ends_is_given_up() -> None:
    made = pilot(match_stamps=False)
    made.start_episode("e", GOAL, 0.1)
    kinds = [kind(give(made, pose(20.0 * number))) for number in range(120)]
    assert kinds[0] == "order"
    assert "episode_overdue" in kinds
    assert kinds[-1] == "no_goal"
    assert made.episode is None


def test_obstacles_that_cannot_be_used_stop_until_they_can() -> None:
    made = pilot()
    give(made, pose(0))
    made.on_bad_obstacles("obstacles", "nonsense")
    assert kind(give(made, pose(20))) == "bad_obstacles"
    made.on_obstacles("obstacles")
    assert kind(give(made, pose(40))) == "order"


def test_lockstep_waits_for_the_obstacles_of_the_very_moment() -> None:
    made = pilot(match_stamps=True)
    made.start_episode("e", GOAL, 5.0)
    assert give(made, pose(0)) is None
    made.crowd.see(Sighting(START + 1, np.zeros((2, 0))), START + 1)
    assert made.on_obstacles("obstacles") is None
    made.crowd.see(Sighting(START + 20 * MS, np.zeros((2, 0))), 0)
    assert give(made, pose(20)) is not None


def test_a_goal_that_comes_before_its_episode_moves_nothing_in_lockstep() -> None:
    """Or the first step would hang on which of two topics was the quicker."""
    made = pilot(match_stamps=True)
    nobody = Sighting(START, np.zeros((2, 0)))
    made.crowd.see(nobody, START)
    assert kind(give(made, pose(0))) == "no_goal"
    made.start_episode("e", GOAL, 5.0)
    made.crowd.see(nobody, START)
    assert kind(give(made, pose(0))) == "order"


@pytest.mark.parametrize("delay", [0.0, 0.06])
def test_a_robot_with_dead_time_is_guided_as_guide_says(delay: float) -> None:
    """The stated delay reaches the maths, with room to remember the commands on their way."""
    made, memory = pilot(command_delay=delay), Memory.start(1, slots(delay, 0.5 * RULES.pose_period))
    made.model = DEFAULT_MODEL
    for number in range(8):
        order = give(made, pose(20.0 * number, yaw=0.5))
        row = [np.array([value]) for value in (0.5, 0.8, 0.5, GOAL.x, GOAL.y, GOAL.yaw)]
        senses = Senses._make([*row, Obstacles.none(1)])
        advice = guide(senses, DEFAULTS.numbers(), ROBOT, FLOOR, memory, 0.02, DEFAULT_MODEL, delay)
        memory = advice.memory
        assert isinstance(order, Order)
        assert (order.heading, order.v, order.w) == (advice.heading[0], advice.v[0], advice.w[0])
