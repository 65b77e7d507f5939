"""What the terminal beside the floor hears and says: status, requests, diagnostics; services and outcomes."""

from __future__ import annotations

import time
from collections.abc import Callable

from diagnostic_msgs.msg import DiagnosticArray
from rclpy.context import Context
from rclpy.task import Future
from std_msgs.msg import String

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.nodes.base import LATCHED, OK, RELIABLE
from fieldnav_ros.nodes.payloads import EpisodeOutcome, RunEpisode, decode_request, encode
from fieldnav_ros.nodes.watch import Watch

NODES = ("guidance_node", "judge_node", "recorder_node", "simulator_node")
TROUBLE_LASTS = 3.0
"""Seconds after which another node's trouble counts as over when it has not been told again."""
ANSWER_LIMIT = 3.0
"""Seconds to wait for an answer of the tuner."""
Say = Callable[[str], None]


class PitLink(Watch):
    """A ``Watch`` that also knows which episode runs, since when, and what troubles the other nodes."""

    def __init__(self, context: Context, tuner: str, namespace: str) -> None:
        super().__init__(context, tuner, namespace)
        self._asked: tuple[str, Future, float, Say] | None = None
        self._running: tuple[RunEpisode, float] | None = None
        self._troubles: dict[str, tuple[float, str]] = {}
        self.heard_at = time.monotonic()
        self.release_wanted = False
        """Whether a match call was asked for and no answer has come."""
        self._outcomes = self._node.create_publisher(String, "episode/outcome", RELIABLE)
        self._node.create_subscription(String, "episode/request", self._on_request, LATCHED)
        self._node.create_subscription(DiagnosticArray, "/diagnostics", self._on_diagnostics, 10)

    @property
    def troubles(self) -> tuple[str, ...]:
        """What other nodes said lately of their troubles."""
        since = time.monotonic() - TROUBLE_LASTS
        return tuple(sentence for when, sentence in self._troubles.values() if when >= since)

    @property
    def age(self) -> float:
        """Seconds since the newest status."""
        return time.monotonic() - self.heard_at

    def ask_for(self, service: str, say: Say) -> None:
        """Call a service; ``say`` gets its answer, or that there was none."""
        self.release_wanted = service == "release"
        self._drop_call()
        future = self.ask(service)
        if future is None:
            say(f"{service}: no tuner is there" + (", still trying" if self.release_wanted else ""))
            return
        self._asked = (service, future, time.monotonic(), say)

    def look(self) -> None:
        """Tell of answers that came or failed to; a match call is made again until it is answered."""
        if self._asked is not None:
            service, future, since, say = self._asked
            if future.done():
                answer = future.result()
                self._asked, self.release_wanted = None, False
                say(f"{service}: {answer.message}" if answer is not None else f"{service}: failed")
            elif time.monotonic() - since > ANSWER_LIMIT:
                self._drop_call()
                say(f"{service}: the tuner does not answer")
        elif self.release_wanted:
            again = self.ask("release")
            if again is not None:
                self._asked = ("release", again, time.monotonic(), lambda sentence: None)

    def report(self, kind: OutcomeKind) -> str:
        """Publish the operator's outcome for the episode that runs; return what was done."""
        if self._running is None:
            return "no episode is running"
        request, since = self._running
        passed = time.monotonic() - since
        seconds = request.time_limit if kind is OutcomeKind.TIMEOUT else min(passed, request.time_limit)
        outcome = EpisodeOutcome(
            episode=request.episode, kind=kind, time=seconds, source="operator",
            stamp=self._node.get_clock().now().nanoseconds * 1e-9,
        )  # fmt: skip
        self._outcomes.publish(String(data=encode(outcome)))
        return f"reported: {kind.value} after {seconds:.1f} s"

    def _drop_call(self) -> None:
        if self._asked is not None:
            self._services[self._asked[0]].remove_pending_request(self._asked[1])
            self._asked = None

    def _on_status(self, message: String) -> None:
        super()._on_status(message)
        self.heard_at = time.monotonic()
        status = self.status
        if status is not None and self._running is not None and status.episode == self._running[0].episode:
            # the tuner's word, for a terminal that came in the middle of an episode
            request, since = self._running
            asked = self.heard_at - status.episode_time if status.episode_time is not None else since
            self._running = request, min(since, asked)

    def _on_request(self, message: String) -> None:
        try:
            request = decode_request(message.data)
        except InputError:
            return
        self._running = (request, time.monotonic()) if isinstance(request, RunEpisode) else None

    def _on_diagnostics(self, message: DiagnosticArray) -> None:
        for status in message.status:
            name = status.name.split("/")[-1]
            if name in NODES and status.hardware_id == self._node.get_namespace():
                self._troubles.pop(name, None)
                if status.level != OK:
                    self._troubles[name] = time.monotonic(), f"{name}: {status.message}"
