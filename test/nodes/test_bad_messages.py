"""At least 10,000 messages of every kind of badness into the guidance node: what comes out is always safe.

The node is real, its callbacks are called directly and its commands caught, so that hypothesis can look for the
sequence that breaks it and shrink it.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

pytest.importorskip("rclpy", reason="needs a real node")

import rclpy
from geometry_msgs.msg import PoseArray, PoseStamped
from nav_msgs.msg import Odometry
from rclpy.context import Context
from rclpy.parameter import Parameter
from std_msgs.msg import Bool, String

from fieldnav_ros.crowd import NANO
from fieldnav_ros.model import Layout, OutcomeKind, Pose
from fieldnav_ros.nodes import payloads
from fieldnav_ros.nodes.convert import command_message, nanoseconds, pose_message, stamp_of
from fieldnav_ros.nodes.guidance_node import GuidanceNode
from fieldnav_ros.parameters import TABLE

pytestmark = pytest.mark.ros
EXAMPLES, SHORTEST = 300, 36
TIMEOUT, PERIOD, WHEEL, ACCEL, TRACK = 0.15, 0.02, 1.2, 4.0, 0.1
ROUNDING = 1e-9


@dataclass
class Floor:
    """The node, a clock of ours, and what it has published since the last reset."""

    node: GuidanceNode
    now: int = 1000 * NANO
    x: float = 0.5
    y: float = 0.8
    commands: list[tuple[int, float, float]] = field(default_factory=list)
    stamps: set[int] = field(default_factory=set)

    def publish(self, message: Any) -> None:
        stamp, twist = nanoseconds(message.header.stamp), message.twist
        self.commands.append((stamp, twist.linear.x, twist.angular.z))


@pytest.fixture(scope="module")
def node() -> Iterator[GuidanceNode]:
    context = Context()
    rclpy.init(context=context)
    made = GuidanceNode(context=context, parameter_overrides=[Parameter("obstacle_odometry", value=["cart"])])
    yield made
    made.leave()
    context.try_shutdown()


odd = st.sampled_from([math.nan, math.inf, -math.inf, 1e300, -1e5, 1e-320, 0.0])
number = st.one_of(odd, st.floats(0.1, 2.3), st.floats(width=64))
frame = st.sampled_from(["map", "map", "map", "map", "", "odom", "MAP", "x" * 5000])
quaternion = st.one_of(
    st.just((0.0, 0.0, 0.0, 1.0)),
    st.floats(-3.1, 3.1).map(lambda yaw: (0.0, 0.0, math.sin(yaw / 2), math.cos(yaw / 2))),
    st.tuples(number, number, number, number),
)
offset = st.one_of(
    st.just(0.0), st.floats(-0.2, 0.2), st.sampled_from([-1e3, -1.0, 1.0, 1e6, -0.15, -0.150001, 0.15, 0.151])
)
near = st.tuples(st.floats(-0.03, 0.03), st.floats(-0.03, 0.03))
text = st.one_of(
    st.text(max_size=50),
    st.sampled_from(["", "{}", "null", "[" * 5000, '{"action":"run"}', "x" * 100_000, '{"action":"stop","episode":1}']),
)
names = st.sampled_from(["e1", "e2", "e3"])
pose_of_layout = st.builds(Pose, x=st.floats(-1e4, 1e4), y=st.floats(-1e4, 1e4), yaw=st.floats(-100, 100))
frames_of_requests, limits = st.sampled_from(["map", "map", "odom"]), st.floats(0.01, 600.0)
requests = st.one_of(
    st.builds(payloads.StopEpisode, episode=names),
    st.builds(payloads.DriveTo, episode=names, goal=pose_of_layout, frame=frames_of_requests, time_limit=limits),
    *(
        st.builds(
            kind,
            episode=names,
            set=st.just("s"),
            layout=st.builds(Layout, start=pose_of_layout, goal=pose_of_layout),
            frame=frames_of_requests,
            time_limit=limits,
            outcomes=st.sampled_from([None, "judge", "operator"]),
        )
        for kind in (payloads.RunEpisode, payloads.ObserveEpisode)
    ),
).map(payloads.encode)
outcomes = st.builds(
    payloads.EpisodeOutcome,
    episode=names,
    kind=st.sampled_from(OutcomeKind),
    time=st.just(1.0),
    stamp=st.just(1.0),
    source=st.just("judge"),
).map(payloads.encode)
event = st.one_of(
    st.tuples(st.just("good_pose"), near),
    st.tuples(st.just("good_pose"), near),
    st.tuples(st.just("pose"), st.tuples(frame, number, number, quaternion, offset)),
    st.tuples(st.just("late_pose"), offset),
    st.tuples(st.just("obstacles"), st.tuples(frame, st.lists(st.tuples(number, number), max_size=8), offset)),
    st.tuples(st.just("crowd"), st.integers(150, 300)),
    st.tuples(st.just("mover"), st.tuples(frame, number, number, number, quaternion, offset)),
    st.tuples(st.just("goal"), st.tuples(frame, number, number, quaternion)),
    st.tuples(st.just("good_goal"), st.tuples(st.floats(0.2, 2.2), st.floats(0.2, 1.4), st.floats(-3, 3))),
    st.tuples(st.just("hold"), st.booleans()),
    st.tuples(st.just("request"), text | requests),
    st.tuples(st.just("outcome"), text | outcomes),
    st.tuples(st.just("wait"), st.sampled_from([0.001, 0.02, 0.02, 0.1, 0.16, 2.0, -0.5])),
    st.tuples(st.just("set"), st.tuples(st.sampled_from(TABLE), st.floats(0.0, 1.0))),
)


def stamped(message: Any, floor: Floor, frame_id: str, seconds: float) -> Any:
    message.header.frame_id = frame_id
    moment = max(0, floor.now + round(seconds * NANO))
    message.header.stamp = stamp_of(moment if moment < 2**31 * NANO else 2**31 * NANO - 1)
    return message


def place(pose: Any, x: float, y: float, orientation: tuple[float, ...]) -> None:
    pose.position.x, pose.position.y = x, y
    pose.orientation.x, pose.orientation.y, pose.orientation.z, pose.orientation.w = orientation


def act(floor: Floor, kind: str, given: Any) -> None:  # one branch for each kind of message
    """Do one thing to the node."""
    node = floor.node
    if kind in ("good_pose", "late_pose"):
        if kind == "good_pose":
            floor.now += round(PERIOD * NANO)
            floor.x = min(max(floor.x + given[0], 0.1), 2.3)
            floor.y = min(max(floor.y + given[1], 0.1), 1.5)
        message = stamped(PoseStamped(), floor, "map", 0.0 if kind == "good_pose" else given)
        place(message.pose, floor.x, floor.y, (0.0, 0.0, 0.0, 1.0))
        floor.stamps.add(nanoseconds(message.header.stamp))
        node.on_pose(message)
    elif kind == "pose":
        message = stamped(PoseStamped(), floor, given[0], given[4])
        place(message.pose, given[1], given[2], given[3])
        floor.stamps.add(nanoseconds(message.header.stamp))
        node.on_pose(message)
    elif kind in ("obstacles", "crowd"):
        places = [(0.01 * index, 1.0) for index in range(given)] if kind == "crowd" else given[1]
        crowd = stamped(
            PoseArray(), floor, "map" if kind == "crowd" else given[0], 0.0 if kind == "crowd" else given[2]
        )
        for x, y in places:
            crowd.poses.append(pose_message(0.0, 0.0, 0.0, "map", 0).pose)
            crowd.poses[-1].position.x, crowd.poses[-1].position.y = x, y
        node.on_obstacles(crowd)
    elif kind == "mover":
        other = stamped(Odometry(), floor, given[0], given[5])
        place(other.pose.pose, given[1], given[2], given[4])
        other.twist.twist.linear.x = given[3]
        node.on_mover("cart", other)
    elif kind == "goal":
        message = stamped(PoseStamped(), floor, given[0], 0.0)
        place(message.pose, given[1], given[2], given[3])
        node.on_goal(message)
    elif kind == "good_goal":
        x, y, yaw = given
        node.on_goal(pose_message(x, y, yaw, "map", floor.now))
    elif kind == "hold":
        node.on_hold(Bool(data=given))
    elif kind == "request":
        node.on_request(String(data=given))
    elif kind == "outcome":
        node.on_outcome(String(data=given))
    elif kind == "wait":
        floor.now += round(given * NANO)
        node._watch()
    else:
        row, unit = given
        parameter = Parameter(row.ros_name, value=float(row.from_unit(unit)))
        done = node.set_parameters([parameter])[0]
        assert done.successful == (node.pilot.episode is None)


class Watcher:
    """Holds every command to what is safe, against the one that came before it."""

    def __init__(self) -> None:
        self.base = self.last = (0.0, 0.0)
        self.stamp: int | None = None

    def check(self, floor: Floor, stamp: int, v: float, w: float) -> None:
        """Check one command at the moment it was published."""
        assert math.isfinite(v)
        assert math.isfinite(w)
        wheels = (v - 0.5 * TRACK * w, v + 0.5 * TRACK * w)
        assert max(map(abs, wheels)) <= WHEEL + ROUNDING
        if stamp not in floor.stamps:
            assert (v, w) == (0.0, 0.0)
            self.base = self.last = (0.0, 0.0)
            self.stamp = None
            return
        assert abs(floor.now - stamp) <= TIMEOUT * NANO
        assert not floor.node.pilot.held
        assert floor.node.pilot.goal is not None
        passed = TIMEOUT
        if stamp != self.stamp:
            passed = TIMEOUT if self.stamp is None else min(TIMEOUT, max(PERIOD, (stamp - self.stamp) / NANO))
            self.base, self.stamp, self.passed = self.last, stamp, passed
        for wheel, before in zip(wheels, self.base):
            assert abs(wheel - before) <= ACCEL * self.passed + ROUNDING
        self.last = wheels


COUNT = {"messages": 0, "driven": 0}


@settings(
    max_examples=EXAMPLES,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow, HealthCheck.data_too_large],
)
@given(events=st.lists(event, min_size=SHORTEST, max_size=2 * SHORTEST))
def test_never_a_non_finite_over_limit_or_stale_command(node: GuidanceNode, events: list[tuple[str, Any]]) -> None:
    floor, watcher = fresh(node), Watcher()
    for kind, given_ in events:
        before = len(floor.commands)
        act(floor, kind, given_)
        COUNT["messages"] += 1
        for stamp, v, w in floor.commands[before:]:
            watcher.check(floor, stamp, v, w)
            COUNT["driven"] += (v, w) != (0.0, 0.0)
        if node.pilot.goal is None or node.pilot.held:
            assert not floor.commands or floor.commands[-1][1:] == (0.0, 0.0)


def test_there_were_enough_messages_and_the_robot_did_drive() -> None:
    """Guards the test above: it would prove nothing if every message had been refused."""
    assert COUNT["messages"] >= 10_000
    assert COUNT["driven"] > COUNT["messages"] / 100


def fresh(node: GuidanceNode) -> Floor:
    """Return a floor on which nothing has happened, with a goal and a robot on its way."""
    floor = Floor(node)
    node._now = lambda: floor.now  # type: ignore[method-assign]  # a clock that the test sets
    node._command = floor  # type: ignore[assignment]  # only its publish is used
    node.pilot.held = False
    node.pilot.end_episode()
    node.pilot._start_anew()
    node.pilot._blind.clear()
    node._ended = ""
    defaults = [Parameter(row.ros_name, value=row.default) for row in TABLE]
    assert node.set_parameters_atomically(defaults).successful  # every example starts from the same node
    node.on_goal(pose_message(2.0, 0.8, 0.0, "map", floor.now))
    for _ in range(3):
        act(floor, "good_pose", (0.01, 0.0))
    assert any(command[1:] != (0.0, 0.0) for command in floor.commands)
    floor.commands.clear()
    node.on_hold(Bool(data=True))
    node.on_hold(Bool(data=False))
    floor.commands.clear()
    return floor


def test_a_command_is_caught_as_the_checks_expect_it() -> None:
    """The catcher reads stamp and speeds where guidance puts them."""
    floor = Floor(None)  # type: ignore[arg-type]  # no node is needed
    floor.publish(command_message(0.5, -1.0, "base_link", 7, True))
    assert floor.commands == [(7, 0.5, -1.0)]
