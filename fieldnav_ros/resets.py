"""Between two episodes: whether the robot stands at the next start, and what to say while it does not. Pure."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

from fieldnav_ros.crowd import NANO, Reading
from fieldnav_ros.drive import apart, wrap
from fieldnav_ros.model import Pose

STILL = 0.02
"""Metres by which poses of a standing robot may differ: the tracker's noise; STILL_TURN the same in rad."""
STILL_TURN = 0.12
LONGEST_GAP = 0.5
"""Seconds without a pose after which a robot has not been seen to stand."""


@dataclass(frozen=True)
class Slack:
    """How near (m, rad) and for how long (s) the robot must stand at a start."""

    position: float = 0.10
    heading: float = 0.35
    rest: float = 1.0


class Off(NamedTuple):
    """How far from the start: m, and the turn that is still needed in rad, anticlockwise positive."""

    distance: float
    turn: float


class Placing:
    """Watches poses until the robot has stood at ``start``; ``look`` takes them in the order of their stamps."""

    def __init__(self, start: Pose, slack: Slack) -> None:
        self._start, self._slack = start, slack
        self._since: Reading | None = None
        self._last: Reading | None = None

    @property
    def off(self) -> Off | None:
        """How far off the newest pose is; None before any."""
        return None if self._last is None else Off(*apart(self._last, self._start))

    def look(self, reading: Reading) -> bool:
        """Take a pose; tell whether the robot has stood at the start for as long as it must."""
        before, self._last = self._last, reading
        if before is not None and not 0 <= reading.stamp - before.stamp <= LONGEST_GAP * NANO:
            self._since = None
        if not self._near():
            self._since = None
            return False
        if self._since is None or self._moved(self._since, reading):
            self._since = reading
        return reading.stamp - self._since.stamp >= self._slack.rest * NANO

    def _near(self) -> bool:
        off = self.off
        return off is not None and off.distance <= self._slack.position and abs(off.turn) <= self._slack.heading

    def _moved(self, first: Reading, now: Reading) -> bool:
        far, turn = apart(first, now)
        return far > STILL or abs(turn) > STILL_TURN


def where(start: Pose, mark: str | None) -> str:
    """Return the start in words; ``mark`` is its name on the floor."""
    place = f"x {start.x:.2f} m, y {start.y:.2f} m, facing {math.degrees(float(wrap(start.yaw))):.0f} degrees"
    return f"mark {mark} ({place})" if mark else place


def distance_in_words(off: Off | None, slack: Slack) -> str:
    """Return what is still wrong with where the robot stands, as a sentence."""
    if off is None:
        return "No pose of the robot has come yet."
    if off.distance > slack.position:
        return f"It is {off.distance:.2f} m away."
    if abs(off.turn) > slack.heading:
        side = "left" if off.turn > 0 else "right"
        return f"Turn it {abs(math.degrees(off.turn)):.0f} degrees to the {side}."
    return "There: hands off, let it stand."
