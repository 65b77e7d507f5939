"""The judge node: watches an episode from poses and obstacles, and says once how it ended."""

from __future__ import annotations

import sys
import time
from collections import deque
from collections.abc import Sequence
from typing import Any

from geometry_msgs.msg import PoseArray
from std_msgs.msg import String

from fieldnav_ros.crowd import NANO
from fieldnav_ros.judging import Judging, Patience
from fieldnav_ros.nodes.base import (
    EARLY,
    ERROR,
    LATCHED,
    MATCH_STAMPS,
    OK,
    RELIABLE,
    RELIABLE_INPUT,
    WARN,
    YARD,
    FieldnavNode,
    incoming_qos,
    run,
    yard_of,
)
from fieldnav_ros.nodes.convert import POSE_TYPES, reading_from, sighting_from
from fieldnav_ros.nodes.declare import Setting
from fieldnav_ros.nodes.payloads import EpisodeOutcome, EpisodeRequested, decode_outcome, decode_request, encode
from fieldnav_ros.tracking import Rules as TrackingRules
from fieldnav_ros.world.watch import START_SLACK, Ruling

SETTINGS: tuple[Setting, ...] = (
    YARD,
    Setting("pose_type", "PoseStamped", "message type of the topic pose", choices=tuple(POSE_TYPES)),
    Setting("frame", "", "frame of pose and obstacles; empty: as in the yard file"),
    Setting("pose_age_from", "stamp", "as for guidance: stamp or arrival", choices=("stamp", "arrival")),
    Setting("obstacle_radius", 0.0, "radius of obstacles in m; 0: as in the yard file", 0.0, 10.0),
    Setting("obstacle_timeout", 0.5, "s for which an obstacle out of sight still counts", 0.05, 10.0),
    Setting("obstacle_speed", 2.0, "largest plausible speed of an obstacle in m/s", 0.1, 20.0),
    Setting("obstacle_trust", 1.0, "trust in new positions, 1: no smoothing", 0.05, 1.0),
    Setting(
        "start_slack",
        START_SLACK,
        "m by which the first pose may be off the layout's start",
        0.0,
        100.0,
    ),
    Setting("start_timeout", 30.0, "s to wait for a pose near the start before the episode is void", 0.5, 600.0),
    Setting("silence_warning", 1.0, "s without a pose in an episode before a warning", 0.1, 60.0),
    Setting("silence_limit", 10.0, "s without a pose in an episode before it is void", 0.2, 600.0),
    MATCH_STAMPS,
    RELIABLE_INPUT,
)


class JudgeNode(FieldnavNode):
    """Wires topics to a ``Judging`` and publishes its ruling once."""

    def __init__(self, **options: Any) -> None:
        super().__init__("judge_node", SETTINGS, **options)
        given = self.settings
        self._yard = yard_of(given["yard"])
        self._frame: str = given["frame"] or self._yard.frame
        self._by_arrival = given["pose_age_from"] == "arrival" and not given["match_stamps"]
        self._judging = Judging(
            self._yard,
            TrackingRules(
                fastest=given["obstacle_speed"], patience=given["obstacle_timeout"], alpha=given["obstacle_trust"]
            ),
            given["obstacle_radius"] or self._yard.cart_radius,
            Patience.model_validate({name: given[name] for name in Patience.model_fields}),
        )
        self._episode: EpisodeRequested | None = None
        self._early: deque[Any] = deque(maxlen=EARLY)
        self._ended = ""
        incoming = incoming_qos(given)
        # the request first: of messages that wait together, the executor takes them in this order
        self.create_subscription(String, "episode/request", self._on_request, LATCHED)
        self._outcome = self.create_publisher(String, "episode/outcome", RELIABLE)
        self.create_subscription(POSE_TYPES[given["pose_type"]], "pose", self._on_pose, incoming)
        self.create_subscription(PoseArray, "obstacles", self._on_obstacles, incoming)
        self.create_subscription(String, "episode/outcome", self._on_outcome, RELIABLE)
        self.create_timer(0.2, self._look_at_clock)
        self.state("waiting for an episode")
        self.log.info(f"judging on {self._yard.name!r}")

    def values(self) -> dict[str, object]:
        """Return what diagnostics show of the judge."""
        return {"episode": self._episode.episode if self._episode else ""}

    def _on_request(self, message: String) -> None:
        request = self.decoded(decode_request, message)
        if request is None:
            return
        running = self._episode.episode if self._episode else ""
        if not isinstance(request, EpisodeRequested):
            if running:
                self._drop("stopped by request, not judged")
            return
        if request.episode not in (running, self._ended):
            self._begin(request)

    def _begin(self, request: EpisodeRequested) -> None:
        self._episode = request
        self._judging.begin(request.layout, request.arrival, request.time_limit, time.monotonic())
        self.state(f"judging episode {request.episode}")
        if request.frame != self._frame:
            self._rule(self._judging.give_up(f"frame of the request is {request.frame!r}, must be {self._frame!r}"))
        for early in list(self._early):
            (self._on_obstacles if isinstance(early, PoseArray) else self._on_pose)(early)
        self._early.clear()

    def _on_outcome(self, message: String) -> None:
        outcome = self.decoded(decode_outcome, message)
        if outcome is not None and self._episode is not None and self._episode.ended_by(outcome):
            self._drop(f"ended by the {outcome.source}: {outcome.kind.value}")

    def _on_pose(self, message: Any) -> None:
        if not self._judging.running:
            self._keep(message)
            return
        reading = self.usable("bad_poses", reading_from, message, self._frame)
        if reading is not None:
            self._rule(self._judging.pose(reading, self._moment(reading.stamp), time.monotonic()))

    def _moment(self, stamp: int) -> int:
        return time.monotonic_ns() if self._by_arrival else stamp

    def _keep(self, message: Any) -> None:
        """Keep what comes before the request: in lockstep an episode's first poses may overtake it."""
        if self.settings["match_stamps"]:
            self._early.append(message)

    def _on_obstacles(self, message: PoseArray) -> None:
        if not self._judging.running:
            self._keep(message)
            return
        sighting = self.usable("bad_obstacles", sighting_from, message, self._frame)
        if sighting is not None:
            self._rule(self._judging.sighting(sighting, self._moment(sighting.stamp)))

    def _look_at_clock(self) -> None:
        if self._episode is None:
            return
        now = time.monotonic()
        name = self._episode.episode
        self._rule(self._judging.clock(now))
        silent = self._judging.silence(now)
        if self._judging.running and silent > self.settings["silence_warning"]:
            sentence = f"no pose for {silent:.1f} s in episode {name}"
            self.state(sentence, WARN)
            self.warn("silences", sentence)

    def _rule(self, ruling: Ruling | None) -> None:
        """Publish the ruling and forget the episode, in the other order: our own outcome comes back to us."""
        if self._episode is None or ruling is None:
            return
        outcome = ruling.outcome
        payload = EpisodeOutcome(
            episode=self._episode.episode,
            kind=outcome.kind,
            time=outcome.time,
            clearance=outcome.clearance,
            stamp=ruling.stamp / NANO,
            source="judge",
            detail=ruling.detail,
        )
        self._drop(f"{outcome.kind.value} after {outcome.time:.2f} s {ruling.detail}".rstrip())
        if ruling.detail:
            self.warn("void_episodes", f"episode {payload.episode} is void: {ruling.detail}")
            self.state(f"episode {payload.episode} is void: {ruling.detail}", ERROR)
        self._outcome.publish(String(data=encode(payload)))

    def _drop(self, how: str) -> None:
        if self._episode is not None:
            self._ended = self._episode.episode
            self.counts["episodes"] += 1
            self.state(f"episode {self._ended}: {how}", OK)
        self._episode = None
        self._judging.drop()
        self._early.clear()


def main(args: Sequence[str] | None = None) -> int:
    """Run the judge node; return the exit code."""
    return run("judge_node", lambda context: JudgeNode(context=context), args, events=True)


if __name__ == "__main__":
    sys.exit(main())
