"""The tuner beside a stack played by the test: a robot placed by hand, outcomes from three sources, a match watched."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

pytest.importorskip("rclpy", reason="starts real nodes")

from geometry_msgs.msg import PoseStamped, TwistStamped
from rcl_interfaces.srv import GetParameters
from ros_probe import NodeProcess, Probe
from std_msgs.msg import String
from std_srvs.srv import Trigger

from fieldnav_ros.model import OutcomeKind, Pose
from fieldnav_ros.nodes.base import LATCHED, RELIABLE
from fieldnav_ros.nodes.convert import pose_message
from fieldnav_ros.nodes.payloads import (
    EpisodeOutcome,
    ObserveEpisode,
    Request,
    RunEpisode,
    TunerStatus,
    decode_request,
    decode_status,
    encode,
)
from fieldnav_ros.nodes.service_link import NAMES
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.events import Event
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.yard import load_yard

pytestmark = pytest.mark.ros
YARD = load_yard(config_path("yards/parcel_yard.yaml"))


class Site(Probe):
    """Poses of a robot that is where the test says, and everything the tuner says and hears."""

    def __init__(self) -> None:
        super().__init__()
        self.at = Pose(x=1.2, y=0.8, yaw=0.0)
        self._pose = self.node.create_publisher(PoseStamped, "pose", RELIABLE)
        self.goal = self.node.create_publisher(PoseStamped, "goal", LATCHED)
        self._outcome = self.node.create_publisher(String, "episode/outcome", RELIABLE)
        self.commands = self.hear(TwistStamped, "cmd_vel", RELIABLE)
        self._statuses = self.hear(String, "tuner/status", LATCHED)
        self._requests = self.hear(String, "episode/request", LATCHED)

    def send_pose(self) -> None:
        self._pose.publish(pose_message(self.at.x, self.at.y, self.at.yaw, "map", self.now()))

    def wait(self, condition: Callable[[], Any]) -> Any:
        """Wait while poses go on."""
        return self.until(condition, self.send_pose)

    @property
    def status(self) -> TunerStatus | None:
        return decode_status(self._statuses[-1].data) if self._statuses else None

    @property
    def requests(self) -> list[Request]:
        return [decode_request(message.data) for message in self._requests]

    @property
    def running(self) -> RunEpisode | None:
        last = self.requests[-1] if self._requests else None
        return last if isinstance(last, RunEpisode) else None

    def begin(self) -> None:
        self.wait(lambda: self.status)
        assert self.call(Trigger, "tuner_node/begin", Trigger.Request()).success

    def report(self, episode: str, source: Any, kind: OutcomeKind = OutcomeKind.ARRIVED, time: float = 3.0) -> None:
        outcome = EpisodeOutcome(episode=episode, kind=kind, time=time, stamp=0.0, source=source)
        self._outcome.publish(String(data=encode(outcome)))

    def numbers(self) -> list[float]:
        answer = self.call(GetParameters, "guidance_node/get_parameters", GetParameters.Request(names=NAMES))
        return [value.double_value for value in answer.values]


@pytest.fixture
def site() -> Iterator[Site]:
    with NodeProcess("guidance_node"), Site() as site:
        yield site


def tuner(folder: Path, **parameters: object) -> NodeProcess:
    given = {"ledger": folder / "s.ledger", "champion_file": folder / "c.yaml", "seed": 3, **parameters}
    return NodeProcess("tuner_node", [f"{name}:={value}" for name, value in given.items()])


def events_of(folder: Path, kind: str) -> list[Any]:
    with Ledger.read(folder / "s.ledger") as reader:
        events: list[Event] = list(reader.events())
    return [event for event in events if event.kind == kind]


def test_a_robot_carried_to_its_mark_is_sent_off_only_when_it_stands_there(site: Site, tmp_path: Path) -> None:
    with tuner(tmp_path, **{"return": "operator", "starts": "marks", "outcomes": "referee", "start_rest": 0.5}):
        site.begin()
        site.wait(lambda: site.status and site.status.state == "placing" and "m away" in site.status.todo)
        assert site.status is not None
        mark = next(mark for mark in YARD.marks if f"mark {mark.name} " in site.status.todo)
        site.at = Pose(x=mark.x, y=mark.y, yaw=mark.yaw + math.pi / 2)
        site.wait(lambda: site.status and "Turn it 90 degrees to the right" in site.status.todo)
        assert not [request for request in site.requests if isinstance(request, RunEpisode)]
        assert all(command.twist.linear.x == command.twist.angular.z == 0.0 for command in site.commands)
        site.at = Pose(x=mark.x + 0.03, y=mark.y, yaw=mark.yaw)
        request = site.wait(lambda: site.running)
        assert YARD.mark_at(request.layout.start) == mark.name
        assert request.layout.obstacles == (), "nobody puts the other carts anywhere"
        site.report(request.episode, "referee")
        site.wait(lambda: site.status and site.status.episodes_done == 1)
        assert site.status.last[0].source == "referee"


def test_only_the_first_report_of_the_chosen_source_counts_and_the_others_are_kept_with_a_reason(
    site: Site, tmp_path: Path
) -> None:
    with tuner(tmp_path, outcomes="operator"):
        site.wait(lambda: site.status)
        nothing = site.call(Trigger, "tuner_node/void_last", Trigger.Request())
        assert (nothing.success, nothing.message) == (False, "there is no last outcome to take back")
        site.begin()
        first = site.wait(lambda: site.running)
        site.report(first.episode, "judge", OutcomeKind.CONTACT)
        site.report(first.episode, "referee", OutcomeKind.TIMEOUT)
        site.wait(lambda: len(events_of(tmp_path, "report_ignored")) == 2)
        assert site.running == first, "reports of others end nothing"
        site.report(first.episode, "operator", OutcomeKind.ARRIVED, 4.5)
        second = site.wait(lambda: site.running and site.running.episode != first.episode and site.running)
        site.report(first.episode, "operator", OutcomeKind.ARRIVED, 4.5)  # double
        site.report(first.episode, "operator", OutcomeKind.CONTACT)  # contradicting, and late
        site.report("000999.none.1", "operator")
        site.wait(lambda: len(events_of(tmp_path, "report_ignored")) == 5)
        site.report(second.episode, "operator", OutcomeKind.CONTACT)
        site.wait(lambda: len(events_of(tmp_path, "episode_scored")) == 2)
    scored = events_of(tmp_path, "episode_scored")
    assert [(event.outcome.kind.value, event.source) for event in scored] == [
        ("arrived", "operator"), ("contact", "operator")
    ]  # fmt: skip
    assert scored[0].outcome.time == 4.5
    reasons = [event.reason for event in events_of(tmp_path, "report_ignored")]
    for reason, part in zip(reasons, ("not from the judge", "not from the referee", "second report", "contradicts",
                                      "no such episode")):  # fmt: skip
        assert part in reason


def test_in_a_match_goals_are_judged_and_recorded_and_no_number_changes(site: Site, tmp_path: Path) -> None:
    before = site.numbers()
    with tuner(tmp_path, mode="observe"):
        site.wait(lambda: site.status and site.status.state == "observing" and site.status.pose_age is not None)
        site.wait(lambda: site.status and site.status.in_service == "initial")
        assert not site.call(Trigger, "tuner_node/begin", Trigger.Request()).success
        site.goal.publish(pose_message(2.0, 0.8, 0.0, "map", site.now()))
        request = site.wait(lambda: [item for item in site.requests if isinstance(item, ObserveEpisode)])[0]
        assert (request.layout.start, request.layout.goal) == (site.at, Pose(x=2.0, y=0.8, yaw=0.0))
        site.wait(lambda: any(command.twist.linear.x > 0.0 for command in site.commands))  # guidance minds the goal
        site.report(request.episode, "judge", OutcomeKind.ARRIVED, 2.5)
        (event,) = site.wait(lambda: events_of(tmp_path, "episode_observed"))
    assert (event.set_id, event.cost, event.source) == ("initial", 2.5, "judge")
    assert events_of(tmp_path, "episode_scored") == []
    assert site.numbers() == before == list(DEFAULTS.to_ros().values())
