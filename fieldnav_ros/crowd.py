"""The obstacles around the robot, from whatever tells of them, as they are at the moment of a pose. Pure.

Times are whole nanoseconds, so that stamps compare exactly.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.tracking import Rules, Tracks, follow

NANO = 1_000_000_000


class Reading(NamedTuple):
    """A pose and when it was so: stamp in ns, m, m, rad."""

    stamp: int
    x: float
    y: float
    yaw: float


class Sighting(NamedTuple):
    """Obstacles without names and when they were there: stamp in ns, places in m, (2, K)."""

    stamp: int
    places: FloatArray


class Mover(NamedTuple):
    """One obstacle that reports its own motion: stamp in ns, m, m/s in the floor's frame."""

    stamp: int
    x: float
    y: float
    vx: float
    vy: float


class View(NamedTuple):
    """Obstacles at one moment ((M, 1)), how far they were moved on in time (s), and the sources left out as too old."""

    obstacles: Obstacles
    lag: float
    left_out: tuple[str, ...]


class Pairing:
    """Brings poses and sightings of the same stamp together, in whatever order they come; for lockstep."""

    KEPT = 2000

    def __init__(self) -> None:
        self._poses: dict[int, Reading] = {}
        self._sightings: dict[int, Sighting] = {}

    def put(self, item: Reading | Sighting) -> tuple[Reading, Sighting] | None:
        """Take in a pose or a sighting; return the pair that it completes."""
        if isinstance(item, Reading):
            self._keep(self._poses, item)
        else:
            self._keep(self._sightings, item)
        if item.stamp in self._poses and item.stamp in self._sightings:
            return self._poses.pop(item.stamp), self._sightings.pop(item.stamp)
        return None

    def _keep(self, kept: dict[int, Any], item: Reading | Sighting) -> None:
        kept[item.stamp] = item
        while len(kept) > self.KEPT:
            kept.pop(next(iter(kept)))


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
        # seconds since the first sighting of a run of them: the same episode gives the same digits at any time of day
        if self.stamp is None or abs(sighting.stamp - self.stamp) > self._rules.patience * NANO:
            self._tracks, self._epoch = Tracks.none(), sighting.stamp
        seconds = (sighting.stamp - self._epoch) / NANO
        tracks = follow(self._tracks, seconds, sighting.places, self._rules)
        if tracks is not self._tracks:
            self._tracks, self._moment, self.stamp = tracks, moment, sighting.stamp

    def hear(self, source: str, mover: Mover, moment: int) -> None:
        """Take in what one obstacle says of itself."""
        self._movers[source] = (mover, moment)

    def at(self, moment: int) -> View:
        """Return the obstacles at the moment (ns) of a pose, moved on at uniform motion."""
        tables: list[FloatArray] = []
        left_out: list[str] = []
        lag = 0.0
        if self._moment is not None:
            lag = (moment - self._moment) / NANO
            if abs(lag) > self._rules.patience:
                left_out, lag = ["obstacles"], 0.0
            else:
                tables.append(self._tracked(self._tracks.stamp + lag))
        for source, (mover, when) in self._movers.items():
            behind = (moment - when) / NANO
            if abs(behind) > self._rules.patience:
                left_out.append(source)
                continue
            lag = max(lag, behind, key=abs)
            x, y = mover.x + mover.vx * behind, mover.y + mover.vy * behind
            tables.append(np.array([[x], [y], [mover.vx], [mover.vy]]))
        if not tables:
            return View(Obstacles.none(1), lag, tuple(left_out))
        table = tables[0] if len(tables) == 1 else np.concatenate(tables, axis=1)
        x, y, vx, vy = table[:, :, None]
        return View(Obstacles(x, y, vx, vy, np.full(x.shape, self._radius)), lag, tuple(left_out))

    def _tracked(self, now: float) -> FloatArray:
        """Return x, y, vx, vy (4, M) of the tracks that are fresh enough, moved on to ``now`` (s)."""
        tracks = self._tracks
        fresh = now - tracks.seen <= self._rules.patience
        if not fresh.all():
            tracks = tracks.take(fresh)
        return np.concatenate([tracks.places_at(now), tracks.velocity])
