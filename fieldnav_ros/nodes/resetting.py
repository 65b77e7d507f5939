"""Getting the robot to where its next episode starts: it drives there by itself, or somebody carries it."""

from __future__ import annotations

from collections.abc import Callable, Generator
from typing import Any

from rclpy.task import Future

from fieldnav_ros.crowd import NANO, Reading
from fieldnav_ros.model import Pose
from fieldnav_ros.nodes.base import FieldnavNode
from fieldnav_ros.nodes.in_service import InService
from fieldnav_ros.nodes.payloads import DriveTo
from fieldnav_ros.nodes.script import LateError, Wait
from fieldnav_ros.resets import Placing, Slack, distance_in_words, where
from fieldnav_ros.yard import Yard

QUICK_REST = 0.3
"""Seconds that a robot which drove there by itself must stand: no hand is near it."""
BACKUP = 30.0
"""Seconds beyond a drive's limit on our own clock, for where no poses come to tell the time."""


class Resetting:
    """Steps of a ``Script`` that end when the robot stands at its start; ``look`` must be given every pose."""

    def __init__(
        self,
        node: FieldnavNode,
        yard: Yard,
        service: InService,
        send: Callable[[DriveTo], None],
        stop: Callable[[], None],
    ) -> None:
        """``send`` publishes the request to drive, ``stop`` the word that ends it."""
        settings = node.settings
        self._node, self._yard, self._service = node, yard, service
        self._send, self._stop = send, stop
        self._drives = settings["return"] == "drive"
        self.needed = settings["return"] != "simulator"
        self._slack = Slack(settings["start_slack"], settings["start_turn"], settings["start_rest"])
        self._limit: float = settings["drive_limit"]
        self._start: Pose | None = None
        self._placing: Placing | None = None
        self._there: Future = Future()
        self._until: int | None = None
        self.phase = ""
        """driving or placing while the robot is awaited at its start, else empty."""

    @property
    def words(self) -> str:
        """Where to put the robot and what is wrong yet with where it stands; empty where nobody is asked."""
        if self.phase != "placing" or self._start is None or self._placing is None:
            return ""
        place = where(self._start, self._yard.mark_at(self._start))
        return f"Place the robot at {place}. {distance_in_words(self._placing.off, self._slack)}"

    def look(self, reading: Reading) -> None:
        """Take a pose."""
        if self._placing is None or self._there.done():
            return
        if self._placing.look(reading):
            self._there.set_result(True)
        elif self.phase == "driving":
            if self._until is None:
                self._until = reading.stamp + round(self._limit * NANO)
            if reading.stamp > self._until:
                self._there.set_result(False)

    def to(self, start: Pose, name: str, tell: Callable[[], None]) -> Generator[Wait, Any, bool]:
        """Wait until the robot stands at ``start``; False where that must be tried again. ``name`` is the drive's."""
        self._start = start
        try:
            if self._drives:
                if not (yield from self._service.put_champion()):
                    return False
                if (yield from self._drive(start, name, tell)):
                    return True
            self._await("placing", start, self._slack)
            tell()
            yield Wait(self._there)
            return True
        finally:
            self.phase, self._placing = "", None

    def _drive(self, start: Pose, name: str, tell: Callable[[], None]) -> Generator[Wait, Any, bool]:
        self._await("driving", start, Slack(self._slack.position, self._slack.heading, QUICK_REST))
        self._send(
            DriveTo(
                episode=name, goal=start, frame=self._yard.frame, time_limit=self._limit,
                source=self._node.get_fully_qualified_name(),
            )
        )  # fmt: skip
        tell()
        try:
            arrived = bool((yield Wait(self._there, self._limit + BACKUP)))
        except LateError:
            arrived = False
        self._stop()
        if not arrived:
            self._node.warn(
                "drives_failed",
                f"the robot did not get to its start within {self._limit:g} s: place it, or begin again to let it try",
            )
        return arrived

    def _await(self, phase: str, start: Pose, slack: Slack) -> None:
        self.phase, self._placing = phase, Placing(start, slack)
        self._there, self._until = Future(), None
