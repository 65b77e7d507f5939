"""Observe mode: during a match nothing is changed; each new goal is judged and recorded as an episode."""

from __future__ import annotations

import secrets
import time
from collections import deque
from collections.abc import Callable

from geometry_msgs.msg import PoseStamped
from rclpy.task import Future

from fieldnav_ros.drive import apart
from fieldnav_ros.model import Layout, Outcome, OutcomeKind, Pose
from fieldnav_ros.nodes.base import LATCHED, FieldnavNode
from fieldnav_ros.nodes.convert import goal_from
from fieldnav_ros.nodes.in_service import InService, Steps, pause_until
from fieldnav_ros.nodes.keeper import Keeper
from fieldnav_ros.nodes.payloads import EpisodeOutcome, ObserveEpisode
from fieldnav_ros.nodes.pose_feed import PoseFeed
from fieldnav_ros.yard import Yard

NO_OUTCOME = Outcome(kind=OutcomeKind.VOID, time=0.0)
LOOK_EVERY = 5.0
"""Seconds between two looks at what guidance holds; LOOK_AGAIN where it is not known to be the champion."""
LOOK_AGAIN = 0.5


class Observer:
    """Turns goals into requests to judge; ``steps`` record what came of them."""

    def __init__(
        self,
        node: FieldnavNode,
        yard: Yard,
        keeper: Keeper,
        service: InService,
        feed: PoseFeed,
        send: Callable[[ObserveEpisode], None],
    ) -> None:
        self._node, self._yard, self._keeper, self._service = node, yard, keeper, service
        self._feed, self._send = feed, send
        self._token, self.count = secrets.token_hex(3), 0
        self.episode: ObserveEpisode | None = None
        self._ended: deque[tuple[ObserveEpisode, Outcome, str]] = deque()
        self._wake: Future = Future()
        self._since = 0.0
        self._frame = node.settings["frame"] or yard.frame
        node.create_subscription(PoseStamped, "goal", self._on_goal, LATCHED)

    def report(self, report: EpisodeOutcome) -> bool:
        """Take an outcome; tell whether it was the one waited for."""
        if self.episode is None or not self.episode.ended_by(report):
            return False
        self._end(report.outcome(), report.source)
        return True

    def steps(self) -> Steps:
        """Record each outcome with the set that guidance was seen to hold; for ever."""
        while True:
            self._wake = Future()
            if not self._ended:
                yield from pause_until(self._wake, LOOK_EVERY if self._service.confirmed else LOOK_AGAIN)
            if self._service.link.there():
                yield from self._service.look()
            self._look_at_clock()
            while self._ended:
                episode, outcome, source = self._ended.popleft()
                name, set_id = episode.episode, self._service.confirmed
                self._keeper.commit(self._keeper.session.observe(name, set_id, episode.layout, outcome, source))

    def _end(self, outcome: Outcome, source: str) -> None:
        if self.episode is not None:
            self._ended.append((self.episode, outcome, source))
            self.episode = None
            if not self._wake.done():
                self._wake.set_result(None)

    def _look_at_clock(self) -> None:
        limit = self._keeper.session.config.time_limit + self._node.settings["outcome_deadline"]
        if self.episode is not None and time.monotonic() - self._since > limit:
            self._node.warn("outcomes_late", f"episode {self.episode.episode}: no outcome in time; it does not count")
            self._end(NO_OUTCOME, "tuner")

    def _on_goal(self, message: PoseStamped) -> None:
        goal = self._node.usable("bad_goals", goal_from, message, self._frame)
        if goal is None:
            return
        here = self._feed.newest
        if here is None:
            self._node.warn("goals_unseen", "a goal came before any pose of the robot: not judged")
            return
        start = Pose(x=here.x, y=here.y, yaw=here.yaw)
        if self._same(goal, start) or (self.episode is not None and self._same(goal, self.episode.layout.goal)):
            return
        self._end(NO_OUTCOME, "tuner")  # the stack wants something else now
        self.count += 1
        self._since = time.monotonic()
        self.episode = ObserveEpisode(
            episode=f"observed-{self.count:06d}.{self._token}",
            set=self._service.confirmed or "unknown",
            layout=Layout(start=start, goal=goal),
            frame=self._yard.frame,
            time_limit=self._keeper.session.config.time_limit,
            arrival=self._yard.arrival,
            grade=self._keeper.session.config.grade,
            source=self._node.get_fully_qualified_name(),
            outcomes=self._node.settings["outcomes"],
        )
        self._send(self.episode)

    def _same(self, one: Pose, other: Pose) -> bool:
        """Tell whether two poses are the same as far as arriving goes: some stacks repeat or refine their goals."""
        far, turn = apart(one, other)
        return far <= self._yard.arrival.position and abs(turn) <= self._yard.arrival.heading
