"""The obstacles around the robot, from whatever tells of them, as they are at the moment of a pose. No ROS in here."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.nodes.convert import NANO, Mover, Sighting
from fieldnav_ros.tracking import Rules, Tracks, follow


class View(NamedTuple):
    """Obstacles at one moment ((M, 1)), how far they were moved on in time (s), and the sources left out as too old."""

    obstacles: Obstacles
    lag: float
    left_out: tuple[str, ...]


class Crowd:
    """Obstacles tracked from bare positions, and those that report place and velocity themselves.

    Every message comes with its ``moment`` in ns: its stamp, or its time of arrival where clocks differ; a pose's
    moment is on the same clock. Velocities come from the stamps of one source, which agree with each other.
    """

    def __init__(self, rules: Rules, radius: float) -> None:
        self._rules, self._radius = rules, radius
        self.forget()

    def forget(self) -> None:
        """Drop everything, as at the start of an episode."""
        self._tracks = Tracks.none()
        self._movers: dict[str, tuple[Mover, int]] = {}
        self._moment: int | None = None
        self._epoch = 0
        self.stamp: int | None = None

    def see(self, sighting: Sighting, moment: int) -> None:
        """Take in bare positions."""
        if self.stamp is None:
            self._epoch = sighting.stamp
        # seconds since the first sighting: the same episode gives the same digits at any time of day
        seconds = (sighting.stamp - self._epoch) / NANO
        tracks = follow(self._tracks, seconds, sighting.x, sighting.y, self._rules)
        if tracks is not self._tracks:
            self._tracks, self._moment, self.stamp = tracks, moment, sighting.stamp

    def hear(self, source: str, mover: Mover, moment: int) -> None:
        """Take in what one obstacle says of itself."""
        self._movers[source] = (mover, moment)

    def at(self, moment: int, ahead: float = 0.0) -> View:
        """Return the obstacles ``ahead`` seconds after the moment (ns) of a pose, at uniform motion."""
        columns: list[tuple[float, float, float, float]] = []
        left_out: list[str] = []
        lag = 0.0
        if self._moment is not None:
            lag = (moment - self._moment) / NANO
            if abs(lag) > self._rules.patience:
                left_out, lag = ["obstacles"], 0.0
            else:
                now = self._tracks.stamp + lag
                there = self._tracks.at(now + ahead)
                fresh = now - there.seen <= self._rules.patience
                columns = list(zip(there.x[fresh], there.y[fresh], there.vx[fresh], there.vy[fresh]))
        for source, (mover, when) in self._movers.items():
            behind = (moment - when) / NANO
            if abs(behind) > self._rules.patience:
                left_out.append(source)
                continue
            lag = max(lag, behind, key=abs)
            dt = behind + ahead
            columns.append((mover.x + mover.vx * dt, mover.y + mover.vy * dt, mover.vx, mover.vy))
        table = np.array(columns, dtype=float).reshape(-1, 4).T[:, :, None]
        return View(Obstacles._make([*table, np.full(table.shape[1:], self._radius)]), lag, tuple(left_out))
