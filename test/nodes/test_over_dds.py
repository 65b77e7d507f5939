"""Nodes in processes of their own, over DDS: stopping, holding, refusing, judging, and a whole episode."""

from __future__ import annotations

import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

pytest.importorskip("rclpy", reason="starts real nodes")

from diagnostic_msgs.msg import DiagnosticArray
from geometry_msgs.msg import PoseArray, PoseStamped, TwistStamped
from rcl_interfaces.msg import Parameter, ParameterType, ParameterValue
from rcl_interfaces.srv import GetParameters, SetParametersAtomically
from ros_probe import NodeProcess, Probe
from std_msgs.msg import Bool, String
from visualization_msgs.msg import MarkerArray

from fieldnav_ros.model import Layout, Outcome, Pose
from fieldnav_ros.nodes.base import LATCHED, RELIABLE, SENSOR
from fieldnav_ros.nodes.convert import nanoseconds, pose_message
from fieldnav_ros.nodes.payloads import RunEpisode, StopEpisode, decode_outcome, encode
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.resources import config_path
from fieldnav_ros.world.batch import simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.yard import load_yard

pytestmark = pytest.mark.ros
YARD = load_yard(config_path("yards/parcel_yard.yaml"))
GOAL = Pose(x=2.0, y=0.8, yaw=0.0)
DOUBLE = ParameterType.PARAMETER_DOUBLE
LOCKSTEP = config_path("lockstep.yaml")


class Stack(Probe):
    """The rest of a robot's software: sends poses, goals and requests, hears commands and diagnostics."""

    def __init__(self) -> None:
        super().__init__()
        make = self.node.create_publisher
        self._pose, self._goal = make(PoseStamped, "pose", RELIABLE), make(PoseStamped, "goal", LATCHED)
        self._hold, self._request = make(Bool, "hold", LATCHED), make(String, "episode/request", LATCHED)
        self.outcome = make(String, "episode/outcome", RELIABLE)
        self.commands = self.hear(TwistStamped, "cmd_vel", RELIABLE)
        self.headings = self.hear(PoseStamped, "heading", RELIABLE)
        self.diagnostics = self.hear(DiagnosticArray, "/diagnostics", 10)
        self.sent: set[int] = set()

    def send_pose(self) -> None:
        """Tell of a robot that stands, now."""
        now = self.now()
        self.sent.add(now)
        self._pose.publish(pose_message(0.5, 0.8, 0.0, "map", now))

    def send_goal(self, frame: str = "map") -> None:
        self._goal.publish(pose_message(GOAL.x, GOAL.y, GOAL.yaw, frame, self.now()))

    def hold(self, wanted: bool) -> None:
        self._hold.publish(Bool(data=wanted))

    def ask(self, payload: RunEpisode | StopEpisode | str) -> None:
        self._request.publish(String(data=payload if isinstance(payload, str) else encode(payload)))

    def is_driving(self) -> bool:
        return bool(self.commands) and self.commands[-1].twist.linear.x > 0.0

    def stands(self) -> bool:
        return bool(self.commands) and is_zero(self.commands[-1])

    def drive(self) -> None:
        self.until(self.is_driving, self.send_pose)

    def shown(self, node: str) -> dict[str, str]:
        """Return the newest diagnostics of a node, message included."""
        for message in reversed(self.diagnostics):
            if message.status[0].name.endswith(node):
                return {"": message.status[0].message, **{item.key: item.value for item in message.status[0].values}}
        return {}


def is_zero(command: TwistStamped) -> bool:
    parts = (command.twist.linear, command.twist.angular)
    return all(getattr(part, axis) == 0.0 for part in parts for axis in "xyz")


def run_request(name: str, layout: Layout | None = None, limit: float = 60.0) -> RunEpisode:
    layout = layout or Layout(start=Pose(x=0.5, y=0.8, yaw=0.0), goal=GOAL)
    return RunEpisode(episode=name, set="s", layout=layout, frame="map", time_limit=limit, arrival=YARD.arrival)


@pytest.fixture
def stack() -> Iterator[Stack]:
    with Stack() as made:
        yield made


@pytest.fixture
def guidance() -> Iterator[NodeProcess]:
    with NodeProcess("guidance_node", files=[config_path("guidance.yaml")]) as node:
        yield node


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_last_command_of_a_node_that_ends_is_zero_and_is_seen(
    stack: Stack, guidance: NodeProcess, number: signal.Signals
) -> None:
    stack.send_goal()
    stack.drive()
    stack.commands.clear()
    guidance.child.send_signal(number)
    # poses go on until the end: only the node itself stops the robot
    stack.until(lambda: guidance.child.poll() is not None, stack.send_pose)
    stack.until(stack.stands)
    assert guidance.child.returncode == 0


FAULTY = """
import sys
from fieldnav_ros.nodes import guidance_node
from fieldnav_ros.pilot import Pilot
calls, sound = [], Pilot.on_pose
def on_pose(self, *given):
    calls.append(1)
    return sound(self, *given) if len(calls) < 50 else calls.on_purpose
Pilot.on_pose = on_pose
sys.exit(guidance_node.main(["guidance_node"]))
"""


def test_a_fault_in_the_program_itself_still_stops_the_robot(stack: Stack) -> None:
    child = subprocess.Popen([sys.executable, "-c", FAULTY], stderr=subprocess.PIPE)
    try:
        stack.send_goal()
        stack.drive()
        stack.commands.clear()
        stack.until(lambda: child.poll() is not None, stack.send_pose)
        stack.until(stack.stands)
        assert child.returncode == 1
        assert child.stderr is not None
        assert b"stopped by a fault in this program" in child.stderr.read()
    finally:
        child.kill()
        child.communicate()


def test_silence_hold_and_a_lost_goal_stop_the_robot_and_say_why(stack: Stack, guidance: NodeProcess) -> None:
    stack.send_goal()
    stack.drive()
    command = stack.commands[-1]
    assert nanoseconds(command.header.stamp) in stack.sent
    stack.until(lambda: stack.headings, stack.send_pose)
    assert nanoseconds(stack.headings[-1].header.stamp) in stack.sent

    stack.until(stack.stands)  # no poses meanwhile
    assert nanoseconds(stack.commands[-1].header.stamp) not in stack.sent
    stack.until(lambda: "old, may be at most 0.15 s" in stack.shown("guidance_node").get("", ""))

    stack.drive()
    stack.hold(True)
    stack.until(stack.stands, stack.send_pose)
    stack.until(lambda: stack.shown("guidance_node").get("") == "held by the operator", stack.send_pose)
    stack.hold(False)
    stack.drive()

    stack.send_goal(frame="odom")
    stack.until(stack.stands, stack.send_pose)
    stack.until(lambda: int(stack.shown("guidance_node").get("stopped_bad_goal", "0")) == 1, stack.send_pose)


def test_parameters_change_between_episodes_only_and_all_at_once(stack: Stack, guidance: NodeProcess) -> None:
    def put(**values: float) -> Any:
        parameters = [
            Parameter(name=name.replace("__", "."), value=ParameterValue(type=DOUBLE, double_value=value))
            for name, value in values.items()
        ]
        request = SetParametersAtomically.Request(parameters=parameters)
        return stack.call(SetParametersAtomically, "guidance_node/set_parameters_atomically", request).result

    def get() -> list[float]:
        request = GetParameters.Request(names=["field.turn_radius", "drive.steer_gain"])
        answer = stack.call(GetParameters, "guidance_node/get_parameters", request)
        return [value.double_value for value in answer.values]

    assert put(field__turn_radius=0.2, drive__steer_gain=7.0).successful
    assert not put(field__turn_radius=0.3, drive__steer_gain=99.0).successful
    assert get() == [0.2, 7.0]

    stack.ask(run_request("e1"))
    stack.drive()
    refused = put(field__turn_radius=0.3)
    assert not refused.successful
    assert refused.reason.startswith("refused: an episode is running")
    assert get() == [0.2, 7.0]

    stack.ask(StopEpisode(episode="e1"))
    stack.until(stack.stands, stack.send_pose)
    assert put(field__turn_radius=0.3).successful
    assert get() == [0.3, 7.0]


def test_malformed_json_is_counted_told_and_ignored(stack: Stack, guidance: NodeProcess) -> None:
    with NodeProcess("judge_node"), NodeProcess("simulator_node"):
        nodes = ("guidance_node", "judge_node", "simulator_node")
        stack.until(lambda: all(stack.shown(node) for node in nodes))
        stack.send_goal()
        stack.drive()
        for text in ('{"action": "run"', "x" * 100_000, '{"action": "run", "episode": NaN}'):
            stack.outcome.publish(String(data=text))
        stack.until(
            lambda: all(int(stack.shown(node).get("malformed_messages", "0")) == 3 for node in nodes), stack.send_pose
        )
        stack.drive()


def test_pictures_of_the_field_come_while_somebody_looks(stack: Stack, guidance: NodeProcess) -> None:
    pictures = stack.hear(MarkerArray, "field", RELIABLE)
    stack.send_goal()
    found = stack.until(lambda: [p for p in pictures if "heading" in {m.ns for m in p.markers}], stack.send_pose)
    assert {marker.ns for marker in found[0].markers} >= {"floor", "goal", "heading"}
    assert all(marker.header.frame_id == "map" for marker in found[0].markers)
    assert len(found[0].markers) < 250


def test_lockstep_episodes_end_as_in_the_batch_and_the_same_again(stack: Stack) -> None:
    """Simulator, guidance and judge as processes; the batch is the same world without messages.

    With the published field: the default one chooses between courses, so that the last digit of a quaternion may
    change a time by some hundredths of a second.
    """
    layouts = draw_many(YARD, "empty", 4, seed=11)
    batch = simulate(YARD, "empty", layouts, [DEFAULTS], model="published")
    heard = stack.hear(String, "episode/outcome", RELIABLE)
    results: list[Outcome] = []
    with (
        NodeProcess("simulator_node", files=[LOCKSTEP]),
        NodeProcess("guidance_node", ["field.model:=published"], files=[LOCKSTEP]),
        NodeProcess("judge_node", files=[LOCKSTEP]),
    ):
        for number in range(2 * len(layouts)):
            layout = layouts[number % len(layouts)]
            stack.ask(run_request(f"e{number}", layout, limit=YARD.grade("empty").time_limit))
            stack.until(lambda: len(heard) > len(results))
            outcome = decode_outcome(heard[-1].data)
            assert (outcome.episode, outcome.source) == (f"e{number}", "judge")
            results.append(outcome.outcome())
    for column, (first, second) in enumerate(zip(results, results[len(layouts) :])):
        expected = batch.outcome(0, column)
        assert first == second
        assert first.kind == expected.kind
        assert 0.0 <= first.time - expected.time + 1e-9 < 0.02


def test_paced_floor_is_driven_to_a_goal_sent_by_hand(stack: Stack, tmp_path: Path) -> None:
    """No tuner, no judge: the graph that a developer starts with, in real time, best-effort poses."""
    poses = stack.hear(PoseStamped, "pose", SENSOR)
    stack.hear(PoseArray, "obstacles", SENSOR)
    with NodeProcess("simulator_node", ["mode:=paced"]), NodeProcess("guidance_node"):
        stack.until(lambda: poses)
        stack.send_goal()
        stack.until(lambda: poses[-1].pose.position.x > GOAL.x - 0.05, every=1.0)
        stack.until(lambda: stack.shown("guidance_node").get("", "").startswith("arrived"))
    assert abs(poses[-1].pose.position.x - GOAL.x) < 0.3


def test_judge_calls_an_episode_void_when_poses_stop(stack: Stack) -> None:
    heard = stack.hear(String, "episode/outcome", RELIABLE)
    with NodeProcess("judge_node", ["silence_limit:=1.0", "silence_warning:=0.3"]):
        stack.until(lambda: stack.shown("judge_node"))
        stack.ask(run_request("e1"))
        stack.until(lambda: stack.shown("judge_node").get("episode") == "e1", stack.send_pose)
        outcome = decode_outcome(stack.until(lambda: heard)[0].data)
        assert outcome.kind.value == "void"
        assert "no pose for" in outcome.detail
