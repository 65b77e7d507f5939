"""How much floor time has gone by since it was last booked."""

from __future__ import annotations

import time

from fieldnav_ros.crowd import NANO


class FloorClock:
    """Runs while the floor is in use. ``kind``: by the wall clock, by the poses' stamps, or by episodes alone."""

    def __init__(self, kind: str, reset_s: float) -> None:
        """``reset_s``: what each reset counts for where only episodes tell the time."""
        self.by_episode = kind == "episode"
        self._by_pose, self._reset = kind == "pose", reset_s
        self._stamp: int | None = None
        self._passed = 0
        self._mark: float | None = None

    def hear(self, stamp: int) -> None:
        """Take the stamp of a pose (ns). A clock that is set back or stood still for long passes no time."""
        if self._stamp is not None and 0 < stamp - self._stamp < 10 * NANO:
            self._passed += stamp - self._stamp
        self._stamp = stamp

    def start(self) -> None:
        """Begin to count, where it does not already."""
        if self._mark is None:
            self._mark = self._now()

    def stop(self) -> float:
        """Count no longer; return what had not been booked (s)."""
        unbooked, self._mark = self.since(), None
        return unbooked

    def since(self) -> float:
        """Return what has gone by since the last booking (s); 0 where it does not run, or by episodes."""
        return 0.0 if self._mark is None or self.by_episode else self._now() - self._mark

    def book(self, episode_s: float = 0.0) -> float:
        """Return the same and begin anew; by episodes ``episode_s`` and a reset."""
        if self.by_episode:
            return episode_s + self._reset if episode_s else 0.0
        used = self.since()
        self._mark = self._now()
        return used

    def _now(self) -> float:
        return self._passed / NANO if self._by_pose else time.monotonic()
