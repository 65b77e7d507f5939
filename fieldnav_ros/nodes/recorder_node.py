"""The recorder node: one bag for each episode, its messages as they came off the wire."""

from __future__ import annotations

import sys
import time
from collections import deque
from collections.abc import Mapping, Sequence
from functools import partial
from pathlib import Path
from typing import Any, NamedTuple

from diagnostic_msgs.msg import DiagnosticArray
from geometry_msgs.msg import PoseArray, PoseStamped, Twist, TwistStamped
from nav_msgs.msg import Odometry
from rcl_interfaces.msg import ParameterEvent
from rclpy.event_handler import SubscriptionEventCallbacks
from rclpy.qos import DurabilityPolicy, HistoryPolicy, QoSProfile, ReliabilityPolicy
from rclpy.serialization import deserialize_message
from std_msgs.msg import String

from fieldnav_ros import __version__
from fieldnav_ros.bags.bag import Channel
from fieldnav_ros.bags.definitions import check_installed
from fieldnav_ros.bags.recorder import MOST_BYTES, MOST_MESSAGES, Recorder
from fieldnav_ros.crowd import NANO
from fieldnav_ros.errors import InputError
from fieldnav_ros.nodes.base import EARLY, MATCH_STAMPS, OK, RELIABLE_INPUT, WARN, FieldnavNode, run
from fieldnav_ros.nodes.convert import POSE_TYPES
from fieldnav_ros.nodes.declare import Setting
from fieldnav_ros.nodes.payloads import EpisodeRequested, decode_outcome, decode_request

SETTINGS: tuple[Setting, ...] = (
    Setting("bags", "bags", "folder for the bags, one for each episode; made where it is not there"),
    Setting("pose_type", "PoseStamped", "message type of the topic pose", choices=tuple(POSE_TYPES)),
    Setting("stamped_cmd", True, "cmd_vel is TwistStamped; false: Twist"),
    Setting("obstacle_odometry", [""], "topics of nav_msgs/Odometry, one obstacle each, to be recorded as well"),
    Setting("pose_age_from", "stamp", "as for the judge: stamp or arrival", choices=("stamp", "arrival")),
    Setting("tail", 0.5, "s that a bag goes on after the episode's outcome", 0.0, 60.0),
    Setting("queue_messages", MOST_MESSAGES, "messages kept while the disk is slow", 100, 1_000_000),
    Setting("queue_megabytes", MOST_BYTES / 2**20, "the same in MB", 1.0, 4096.0),
    MATCH_STAMPS,
    RELIABLE_INPUT,
)
DEPTH = 2000
"""Messages that the middleware keeps while this process is busy."""
MOST_PARAMETERS = 1000
CLOSING = 3.0
"""Seconds that the disk has to take the end of a bag when the node ends."""
GRAPH_AGE = 2.0
"""Seconds after which is asked again what publishers offer."""


class Topic(NamedTuple):
    """What is recorded: its role and name, message type, and QoS asked for."""

    role: str
    name: str
    kind: Any
    qos: QoSProfile


def _qos(reliable: bool = True, latched: bool = False) -> QoSProfile:
    return QoSProfile(
        depth=DEPTH,
        reliability=ReliabilityPolicy.RELIABLE if reliable else ReliabilityPolicy.BEST_EFFORT,
        durability=DurabilityPolicy.TRANSIENT_LOCAL if latched else DurabilityPolicy.VOLATILE,
    )


def topics(settings: Mapping[str, Any]) -> list[Topic]:
    """Return what is recorded, the request first: of messages that wait together it is taken first."""
    sensor = _qos(reliable=settings["match_stamps"] or settings["reliable"])
    cmd_vel = TwistStamped if settings["stamped_cmd"] else Twist
    return [
        Topic("episode/request", "episode/request", String, _qos(latched=True)),
        Topic("episode/outcome", "episode/outcome", String, _qos()),
        Topic("goal", "goal", PoseStamped, _qos(latched=True)),
        Topic("pose", "pose", POSE_TYPES[settings["pose_type"]], sensor),
        Topic("obstacles", "obstacles", PoseArray, sensor),
        Topic("heading", "heading", PoseStamped, _qos()),
        Topic("cmd_vel", "cmd_vel", cmd_vel, _qos()),
        Topic("tuner/status", "tuner/status", String, _qos(latched=True)),
        Topic("parameter_events", "/parameter_events", ParameterEvent, _qos()),
        Topic("diagnostics", "/diagnostics", DiagnosticArray, _qos()),
        *(Topic("obstacle_odometry", name, Odometry, sensor) for name in settings["obstacle_odometry"] if name),
    ]


class Kept(NamedTuple):
    """A message kept for the next bag: index of its channel, when it came (ns), itself."""

    channel: int
    came: int
    data: bytes


class RecorderNode(FieldnavNode):
    """Hears everything an episode is made of; a thread writes it. No disk can hold it up."""

    def __init__(self, **options: Any) -> None:
        check_installed()
        super().__init__("recorder_node", SETTINGS, **options)
        given = self.settings
        self._recorder = Recorder(
            _folder(given["bags"]), given["queue_messages"], int(given["queue_megabytes"] * 2**20)
        )  # fmt: skip
        self._lockstep: bool = given["match_stamps"]
        self._running: EpisodeRequested | None = None
        self._ends: float | None = None
        self._latched: dict[str, Kept] = {}
        self._parameters: dict[tuple[str, str], Kept] = {}
        self._early: deque[Kept] = deque(maxlen=EARLY)
        self._offered: list[Channel] = []
        self._asked_graph = -GRAPH_AGE
        self._dropped_before, self._said_drops = 0, False
        self._topics = topics(given)
        self._names: list[str] = []
        self._listeners: dict[int, Any] = {}
        for index in range(len(self._topics)):
            self._listen(index, self._topics[index].qos)
        self.create_timer(0.1, self._look_at_clock)
        self.state("waiting for an episode")
        self.log.info(f"recording to {Path(given['bags']).resolve()}")

    @property
    def _episode(self) -> str:
        return self._running.episode if self._running is not None else ""

    def values(self) -> dict[str, object]:
        """Return what diagnostics show of the recording."""
        tally = self._recorder.tally
        return {
            "episode": self._episode, "bags": tally.bags, "bags_given_up": tally.failed_bags,
            "messages_written": tally.written, "messages_waiting": self._recorder.waiting,
            "messages_dropped": tally.dropped, "messages_lost_with_a_bag": tally.lost,
        }  # fmt: skip

    def close(self) -> None:
        """Complete the bag."""
        if not self._recorder.close(CLOSING):
            self.log.error(f"the disk has not taken the last bag within {CLOSING:g} s; it is cut off")

    # -- hearing

    def _listen(self, index: int, qos: QoSProfile) -> None:
        topic = self._topics[index]
        if index in self._listeners:
            self.destroy_subscription(self._listeners[index])
        act = {
            "episode/request": self._on_request,
            "episode/outcome": self._on_outcome,
            "goal": self._on_latched,
            "tuner/status": self._on_latched,
            "parameter_events": self._on_parameters,
            "pose": self._on_sensor,
            "obstacles": self._on_sensor,
        }.get(topic.role, self._keep)
        strict = qos.reliability == ReliabilityPolicy.RELIABLE or qos.durability == DurabilityPolicy.TRANSIENT_LOCAL
        events = SubscriptionEventCallbacks(incompatible_qos=partial(self._loosen, index)) if strict else None
        self._listeners[index] = listener = self.create_subscription(
            topic.kind, topic.name, partial(act, index), qos, raw=True, event_callbacks=events
        )
        if index == len(self._names):
            self._names.append(listener.topic_name)

    def _loosen(self, index: int, _event: Any) -> None:
        """Hear a publisher that offers less than is asked for, at the price of what it may lose."""
        self.log.warning(f"{self._names[index]}: a publisher offers less than reliable delivery; some may be missing")
        self._listen(index, _qos(reliable=False))

    def _keep(self, index: int, data: bytes) -> None:
        if self._episode:
            now = time.time_ns()
            self._recorder.put(index, now, now, data)

    def _on_sensor(self, index: int, data: bytes) -> None:
        self._keep(index, data)
        if self._lockstep and (self._ends is not None or not self._episode):
            # in lockstep an episode's first poses may overtake its request, as for the judge
            self._early.append(Kept(index, time.time_ns(), data))

    def _on_latched(self, index: int, data: bytes) -> None:
        self._latched[self._topics[index].role] = Kept(index, time.time_ns(), data)
        self._keep(index, data)

    def _on_parameters(self, index: int, data: bytes) -> None:
        """Keep the newest event about each parameter, so that a bag holds the values in force when it begins."""
        event = deserialize_message(data, ParameterEvent)
        kept = Kept(index, time.time_ns(), data)
        for parameter in (*event.new_parameters, *event.changed_parameters, *event.deleted_parameters):
            self._parameters.pop((event.node, parameter.name), None)  # the newest go last
            self._parameters[event.node, parameter.name] = kept
        while len(self._parameters) > MOST_PARAMETERS:
            self._parameters.pop(next(iter(self._parameters)))
        self._keep(index, data)

    def _on_request(self, index: int, data: bytes) -> None:
        request = self.decoded(decode_request, deserialize_message(data, String))
        if isinstance(request, EpisodeRequested) and request.episode != self._episode:
            self._begin(request, Kept(index, time.time_ns(), data))
            return
        self._keep(index, data)
        # a drive to the next start is judged by nobody: no episode, but the end of one
        if request is not None and not isinstance(request, EpisodeRequested) and self._running is not None:
            self._end_soon()

    def _on_outcome(self, index: int, data: bytes) -> None:
        self._keep(index, data)
        outcome = self.decoded(decode_outcome, deserialize_message(data, String))
        if outcome is not None and self._running is not None and self._running.ended_by(outcome):
            self._end_soon()

    # -- bags

    def _begin(self, asked: EpisodeRequested, request: Kept) -> None:
        if self._running is not None:
            self._recorder.end()
        episode = asked.episode
        self._running, self._ends = asked, None
        self._dropped_before, self._said_drops = self._recorder.tally.dropped, False
        self.counts["episodes"] += 1
        self._recorder.begin(episode, self._channels(), self._about(episode))
        # what was there before the request is logged at the request's time, as rosbag2 does with latched messages;
        # when it came stays in the publish time
        in_force = sorted(set(self._parameters.values()), key=lambda kept: kept.came)
        for kept in (request, *self._latched.values(), *in_force, *self._early):
            self._recorder.put(kept.channel, request.came, kept.came, kept.data)
        self._early.clear()
        self.state(f"recording episode {episode}")

    def _about(self, episode: str) -> dict[str, str]:
        given = self.settings
        return {
            "schema": "1", "episode": episode, "software": f"fieldnav_ros {__version__}",
            "match_stamps": "true" if given["match_stamps"] else "false", "pose_age_from": given["pose_age_from"],
        }  # fmt: skip

    def _channels(self) -> list[Channel]:
        now = time.monotonic()
        if now - self._asked_graph >= GRAPH_AGE:
            self._asked_graph = now
            self._offered = [
                Channel(topic.role, name, _type_name(topic.kind), self._offers(name, topic.qos))
                for topic, name in zip(self._topics, self._names)
            ]
        return self._offered

    def _offers(self, name: str, asked: QoSProfile) -> tuple[Mapping[str, Any], ...]:
        """Return what the topic's publishers offer, so that a player offers the same."""
        found = [info.qos_profile for info in self.get_publishers_info_by_topic(name)]
        return tuple(_qos_entry(profile) for profile in (found or [asked])[:10])

    def _end_soon(self) -> None:
        if self._ends is None:
            self._ends = time.monotonic() + self.settings["tail"]

    def _look_at_clock(self) -> None:
        if self._ends is not None and time.monotonic() >= self._ends:
            self._recorder.end()
            self.state(f"episode {self._episode} recorded", OK)
            self._running, self._ends = None, None
        tally = self._recorder.tally
        while tally.failures:
            sentence = f"{tally.failures.popleft()}; the session goes on, recording with the next episode"
            self.log.warning(sentence)
            self.state(sentence, WARN)
        if tally.dropped > self._dropped_before:
            if not self._said_drops:
                self.log.warning(f"the disk is too slow: messages of episode {self._episode} are dropped")
            self._said_drops = True
            self.state(f"the disk is too slow: {tally.dropped - self._dropped_before} messages dropped", WARN)


def _folder(path: str) -> Path:
    folder = Path(path)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"bags: the folder {folder} cannot be made: {error.strerror}") from error
    return folder.resolve()


def _type_name(kind: Any) -> str:
    return f"{kind.__module__.split('.')[0]}/msg/{kind.__name__}"


def _qos_entry(profile: QoSProfile) -> Mapping[str, Any]:
    """Return a profile as rosbag2's metadata.yaml has it; what discovery does not tell (history) as is usual."""
    keep_all = profile.history == HistoryPolicy.KEEP_ALL
    return {
        "history": "keep_all" if keep_all else "keep_last",
        "depth": profile.depth or (0 if keep_all else 10),
        "reliability": profile.reliability.name.lower(),
        "durability": profile.durability.name.lower(),
        "deadline": _duration(profile.deadline),
        "lifespan": _duration(profile.lifespan),
        "liveliness": profile.liveliness.name.lower(),
        "liveliness_lease_duration": _duration(profile.liveliness_lease_duration),
        "avoid_ros_namespace_conventions": False,
    }


def _duration(duration: Any) -> dict[str, int]:
    # 0 means infinite; rosbag2 writes the largest duration there is
    nanoseconds = duration.nanoseconds or 2**63 - 1
    return {"sec": nanoseconds // NANO, "nsec": nanoseconds % NANO}


def main(args: Sequence[str] | None = None) -> int:
    """Run the recorder node; return the exit code."""
    return run("recorder_node", lambda context: RecorderNode(context=context), args, events=True)


if __name__ == "__main__":
    sys.exit(main())
