"""The recorder over DDS: what is in a bag is what was published, however the process ends and whatever the disk does.

Bags are read back with ``mcap`` and ``mcap_ros2`` (Foxglove's libraries) and with ``rosbags`` (Ternaris').
"""

from __future__ import annotations

import resource
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

pytest.importorskip("rclpy")
from diagnostic_msgs.msg import DiagnosticArray
from geometry_msgs.msg import PoseArray, PoseStamped, TwistStamped
from mcap.reader import NonSeekingReader, make_reader
from mcap_ros2.decoder import DecoderFactory
from rcl_interfaces.msg import Parameter, ParameterEvent, ParameterType, ParameterValue
from ros_probe import NodeProcess, Probe
from rosbags.highlevel import AnyReader
from std_msgs.msg import String

from fieldnav_ros.bags import definitions
from fieldnav_ros.model import Layout, OutcomeKind, Pose
from fieldnav_ros.nodes import recorder_node
from fieldnav_ros.nodes.base import LATCHED, RELIABLE, SENSOR
from fieldnav_ros.nodes.convert import command_message, obstacles_message, pose_message
from fieldnav_ros.nodes.payloads import (
    DriveTo,
    EpisodeOutcome,
    ObserveEpisode,
    RunEpisode,
    Source,
    StopEpisode,
    encode,
)
from fieldnav_ros.resources import config_path

pytestmark = pytest.mark.ros
LAYOUT = Layout(start=Pose(x=0.5, y=0.8, yaw=0.0), goal=Pose(x=2.0, y=0.8, yaw=0.0))
Values = dict[str, list[Any]]


class Stack(Probe):
    """Publishes an episode's topics and keeps what it published, by the names a bag has them under."""

    def __init__(self) -> None:
        super().__init__()
        make = self.node.create_publisher
        self.publishers = {
            "/pose": make(PoseStamped, "pose", SENSOR),
            "/obstacles": make(PoseArray, "obstacles", SENSOR),
            "/goal": make(PoseStamped, "goal", LATCHED),
            "/heading": make(PoseStamped, "heading", RELIABLE),
            "/cmd_vel": make(TwistStamped, "cmd_vel", RELIABLE),
            "/episode/request": make(String, "episode/request", LATCHED),
            "/episode/outcome": make(String, "episode/outcome", RELIABLE),
            "/tuner/status": make(String, "tuner/status", LATCHED),
            "/parameter_events": make(ParameterEvent, "/parameter_events", 10),
        }
        self.sent: Values = {}
        self.diagnostics = self.hear(DiagnosticArray, "/diagnostics", 10)
        self.count = 0

    def send(self, topic: str, message: Any) -> None:
        self.publishers[topic].publish(message)
        self.sent.setdefault(topic, []).append(message)

    def ready(self) -> None:
        """Wait until the recorder hears every topic."""
        self.until(lambda: all(item.get_subscription_count() for item in self.publishers.values()))

    def run(self, name: str) -> None:
        request = RunEpisode(episode=name, set="s", layout=LAYOUT, frame="map", time_limit=10.0)
        self.send("/episode/request", String(data=encode(request)))

    def run_until_recording(self, name: str) -> None:
        self.run(name)
        self.until(lambda: name in self.shown().get("", ""))

    def stop(self, name: str) -> None:
        self.send("/episode/request", String(data=encode(StopEpisode(episode=name))))

    def report(self, name: str, source: Source = "judge") -> None:
        outcome = EpisodeOutcome(episode=name, kind=OutcomeKind.ARRIVED, time=1.0, stamp=0.0, source=source)
        self.send("/episode/outcome", String(data=encode(outcome)))

    def drive(self) -> None:
        """Publish a moment of an episode, every number of it different."""
        self.count += 1
        n = self.count
        self.send("/pose", pose_message(n / 7, n / 11, n / 13, "map", n * 20_000_000))
        self.send("/obstacles", obstacles_message([n / 3], [0.5], [0.1], "map", n * 20_000_000))  # type: ignore[arg-type]
        self.send("/heading", pose_message(n / 7, n / 11, -n / 13, "map", n * 20_000_000))
        self.send("/cmd_vel", command_message(n / 17, n / 19, "base_link", n, True))

    def drive_for(self, moments: int) -> None:
        end = self.count + moments
        self.until(lambda: self.count >= end, self.drive, every=0.005)

    def shown(self) -> dict[str, str]:
        for message in reversed(self.diagnostics):
            if message.status[0].name.endswith("recorder_node"):
                return {"": message.status[0].message, **{item.key: item.value for item in message.status[0].values}}
        return {}


def changed(name: str, value: float, node: str = "/guidance_node") -> ParameterEvent:
    given = ParameterValue(type=ParameterType.PARAMETER_DOUBLE, double_value=value)
    return ParameterEvent(node=node, changed_parameters=[Parameter(name=name, value=given)])


@pytest.fixture
def stack() -> Iterator[Stack]:
    with Stack() as made:
        yield made


def recorder(bags: Path, *words: str) -> NodeProcess:
    return NodeProcess("recorder_node", [f"bags:={bags}", "tail:=0.2", *words], [config_path("recorder.yaml")])


def recorded(folder: Path) -> bool:
    """Tell whether a bag is complete: its file ends as the specification says."""
    found = list(folder.glob("*.mcap"))
    return bool(found) and found[0].read_bytes().endswith(b"\x89MCAP0\r\n") and found[0].stat().st_size > 100


def by_mcap(folder: Path, seekable: bool = True) -> Values:
    [path] = folder.glob("*.mcap")
    result: Values = {}
    with path.open("rb") as file:
        reader = (
            make_reader(file, decoder_factories=[DecoderFactory()])
            if seekable
            else NonSeekingReader(file, decoder_factories=[DecoderFactory()])
        )
        try:
            for _, channel, _, message in reader.iter_decoded_messages(log_time_order=seekable):
                result.setdefault(channel.topic, []).append(message)
        except Exception:
            if seekable:
                raise
    return result


def by_rosbags(folder: Path) -> Values:
    result: Values = {}
    with AnyReader([folder]) as reader:
        for connection, _, data in reader.messages():
            result.setdefault(connection.topic, []).append(reader.deserialize(data, connection.msgtype))
    return result


def same(sent: Any, read: Any) -> bool:
    """Compare messages of different libraries field by field."""
    if hasattr(sent, "get_fields_and_field_types"):
        return all(same(getattr(sent, name), getattr(read, name)) for name in sent.get_fields_and_field_types())
    if isinstance(sent, (list, tuple)) or hasattr(sent, "tolist"):
        return len(sent) == len(read) and all(same(a, b) for a, b in zip(sent, read))
    return bool(sent == read)


def assert_holds(read: Values, sent: Values) -> None:
    for topic, messages in sent.items():
        assert len(read.get(topic, [])) == len(messages), topic
        assert all(same(a, b) for a, b in zip(messages, read[topic])), topic


def test_a_bag_holds_what_was_published_and_what_was_in_force_before(stack: Stack, tmp_path: Path) -> None:
    with recorder(tmp_path) as node:
        stack.ready()
        stack.send("/goal", pose_message(2.0, 0.8, 0.0, "map", 1))
        stack.send("/tuner/status", String(data="{}"))
        stack.publishers["/parameter_events"].publish(changed("field.turn_radius", 0.1))  # out of date by the next
        stack.send("/parameter_events", changed("field.turn_radius", 0.2))
        stack.send("/parameter_events", changed("drive.steer_gain", 5.0))
        stack.drive()
        before = {topic: len(sent) for topic, sent in stack.sent.items() if topic[1:] in ("pose", "obstacles")}
        stack.until(lambda: stack.shown().get("") == "waiting for an episode")
        stack.sent = {key: value for key, value in stack.sent.items() if key not in DRIVEN}
        assert before == {"/pose": 1, "/obstacles": 1}
        stack.run_until_recording("000001.ab.1")
        stack.drive_for(60)
        stack.report("000001.ab.1")
        stack.until(lambda: recorded(tmp_path / "000001.ab.1"))
        stack.drive()  # after the tail: in no bag
        assert node.end() == 0
    sent = {key: value[:-1] if key in DRIVEN else value for key, value in stack.sent.items()}
    read = by_mcap(tmp_path / "000001.ab.1")
    assert_holds(read, sent)
    assert_holds(by_rosbags(tmp_path / "000001.ab.1"), sent)
    assert read["/diagnostics"]
    with (tmp_path / "000001.ab.1" / "000001.ab.1_0.mcap").open("rb") as file:
        first = next(iter(make_reader(file).iter_messages()))
    assert first[1].topic == "/episode/request"


DRIVEN = ("/pose", "/obstacles", "/heading", "/cmd_vel")


def test_types_and_hashes_in_a_bag_are_those_of_the_live_topics(stack: Stack, tmp_path: Path) -> None:
    with recorder(tmp_path):
        stack.ready()
        stack.run_until_recording("000001.ab.1")
        stack.stop("000001.ab.1")
        stack.until(lambda: recorded(tmp_path / "000001.ab.1"))
    with (tmp_path / "000001.ab.1" / "000001.ab.1_0.mcap").open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    channels = {channel.topic: channel for channel in summary.channels.values()}
    for topic in stack.publishers:
        [info, *_] = stack.node.get_publishers_info_by_topic(topic)
        channel = channels[topic]
        schema = summary.schemas[channel.schema_id]
        assert (schema.name, schema.encoding) == (info.topic_type, "ros2msg")
        assert channel.metadata["topic_type_hash"] == str(info.topic_type_hash), topic
        assert info.qos_profile.reliability.name.lower() in channel.metadata["offered_qos_profiles"]


def test_a_bag_of_a_killed_recorder_is_readable_up_to_the_cut(stack: Stack, tmp_path: Path) -> None:
    bag = tmp_path / "000002.ab.1"
    with recorder(tmp_path) as node:
        stack.ready()
        stack.run("000002.ab.1")
        stack.until(lambda: list(bag.glob("*.mcap")))
        stack.until(lambda: len(by_mcap(bag, seekable=False).get("/pose", [])) >= 50, stack.drive, every=0.01)
        node.end(signal.SIGKILL)
    read = by_mcap(bag, seekable=False)
    assert len(read["/pose"]) >= 50
    sent = [message.pose.position.x for message in stack.sent["/pose"]]
    assert [message.pose.position.x for message in read["/pose"]] == sent[: len(read["/pose"])]
    assert (bag / "metadata.yaml").is_file()


def test_a_full_disk_ends_one_bag_and_not_the_next(stack: Stack, tmp_path: Path) -> None:
    """RLIMIT_FSIZE stands for the disk: the system refuses writes beyond it (getrlimit(2)), with EFBIG for ENOSPC."""
    code = "import sys; from fieldnav_ros.nodes.recorder_node import main; sys.exit(main(sys.argv))"
    words = ["--ros-args", "-p", f"bags:={tmp_path}", "-p", "tail:=0.2"]
    child = subprocess.Popen(
        [sys.executable, "-c", code, *words],
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, 200_000)),
    )
    try:
        stack.ready()
        stack.run("000003.ab.1")
        stack.until(lambda: stack.shown().get("bags_given_up") == "1", stack.drive, every=0.002)
        stack.report("000003.ab.1")
        stack.run_until_recording("000004.ab.2")
        stack.drive_for(5)
        stack.report("000004.ab.2")
        stack.until(lambda: recorded(tmp_path / "000004.ab.2"))
        assert child.poll() is None
        assert len(by_mcap(tmp_path / "000004.ab.2")["/pose"]) == 5
        assert by_mcap(tmp_path / "000003.ab.1", seekable=False)["/pose"], "readable up to where the disk was full"
    finally:
        child.kill()
        child.wait()


def test_no_request_writes_over_a_bag_or_outside_the_folder(stack: Stack, tmp_path: Path) -> None:
    bags, outside = tmp_path / "bags", tmp_path / "outside"
    (bags / "000005.ab.1").mkdir(parents=True)
    outside.mkdir()
    (bags / "link").symlink_to(outside)
    with recorder(bags):
        stack.ready()
        for number, name in enumerate(("000005.ab.1", "link"), start=1):
            stack.run(name)
            stack.until(lambda number=number: stack.shown().get("bags_given_up") == str(number))  # type: ignore[misc]
        for name in ("../outside", "..", "/tmp/x", ".hidden", "a/b"):
            text = encode(RunEpisode(episode="NAME", set="s", layout=LAYOUT, frame="map", time_limit=1.0))
            stack.send("/episode/request", String(data=text.replace("NAME", name)))
        stack.until(lambda: stack.shown().get("malformed_messages") == "5")
        stack.run_until_recording("000006.ab.1")
        stack.stop("000006.ab.1")
        stack.until(lambda: recorded(bags / "000006.ab.1"))
    assert not list(outside.iterdir())
    assert sorted(path.name for path in bags.iterdir()) == ["000005.ab.1", "000006.ab.1", "link"]
    assert not list((bags / "000005.ab.1").iterdir())
    assert sorted(path.name for path in tmp_path.iterdir()) == ["bags", "outside"]


def test_what_is_judged_is_recorded_and_ends_with_the_outcome_that_counts(stack: Stack, tmp_path: Path) -> None:
    """A watched way to a goal gets its bag, a drive to the next start none; the judge's word does not end it here."""
    with recorder(tmp_path):
        stack.ready()
        watched = ObserveEpisode(
            episode="match.1", set="s", layout=LAYOUT, frame="map", time_limit=10.0, outcomes="referee"
        )  # fmt: skip
        stack.send("/episode/request", String(data=encode(watched)))
        stack.until(lambda: "match.1" in stack.shown().get("", ""))
        stack.report("match.1")
        stack.drive_for(100)
        assert not recorded(tmp_path / "match.1")
        stack.report("match.1", source="referee")
        stack.until(lambda: recorded(tmp_path / "match.1"))
        drive = DriveTo(episode="d.1", goal=LAYOUT.start, frame="map", time_limit=10.0)
        stack.send("/episode/request", String(data=encode(drive)))
        stack.run_until_recording("000008.ab.1")
        stack.stop("000008.ab.1")
        stack.until(lambda: recorded(tmp_path / "000008.ab.1"))
    assert len(by_mcap(tmp_path / "match.1")["/episode/outcome"]) == 2
    assert sorted(path.name for path in tmp_path.iterdir()) == ["000008.ab.1", "match.1"]


def test_a_publisher_that_offers_less_is_heard_all_the_same(stack: Stack, tmp_path: Path) -> None:
    """A stack's own controller may publish commands with best effort."""
    with recorder(tmp_path):
        stack.ready()
        loose = stack.node.create_publisher(TwistStamped, "cmd_vel", SENSOR)
        stack.until(loose.get_subscription_count)
        stack.run_until_recording("000007.ab.1")
        loose.publish(command_message(0.25, 0.5, "base_link", 1, True))
        stack.report("000007.ab.1")
        stack.until(lambda: recorded(tmp_path / "000007.ab.1"))
    assert [message.twist.linear.x for message in by_mcap(tmp_path / "000007.ab.1")["/cmd_vel"]] == [0.25]


def test_without_its_libraries_the_recorder_says_what_to_install(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    monkeypatch.setattr(definitions, "LIBRARIES", ("no_such_library", "rosbags"))
    monkeypatch.chdir(tmp_path)
    assert recorder_node.main(["recorder_node"]) == 1
    said = capsys.readouterr().err
    assert said.count("\n") == 1
    assert "no_such_library is not installed" in said
    assert "python3 -m pip install" in said
    assert not list(tmp_path.iterdir())
