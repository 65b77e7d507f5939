"""Velocities of obstacles from bare positions: who is who by assignment, how fast by an alpha-beta filter. Pure.

A camera says where carts are, not which cart is which. Each sighting is paired with the track whose predicted place
it fits best: minimum-cost assignment (Kuhn, Naval Research Logistics Quarterly 2, 1955; here SciPy's
``linear_sum_assignment``), with pairs ruled out that the fastest cart could not have driven. The filter is the
alpha-beta filter with Benedict and Bordner's relation beta = alpha^2 / (2 - alpha) (IRE Trans. Automatic Control
7(4), 1962); alpha = 1 takes pure differences, right where positions carry no noise.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from pydantic import Field
from scipy.optimize import linear_sum_assignment

from fieldnav_ros.model import Frozen, Positive
from fieldnav_ros.parameters import FloatArray

SAME_MOMENT = 1e-3
"""Sightings closer in time (s) than this tell nothing about velocity."""
_RULED_OUT = 1e12


class Rules(Frozen):
    """What the tracker assumes."""

    fastest: Positive = Field(default=2.0, description="largest plausible speed of an obstacle in m/s")
    slack: float = Field(default=0.05, ge=0, description="m by which a position may be wrong")
    patience: Positive = Field(default=0.5, description="s for which an obstacle out of sight is kept, moving on")
    alpha: float = Field(default=0.6, gt=0, le=1, description="trust in a new position; 1: pure differences")

    @property
    def beta(self) -> float:
        """Gain on velocity that goes with alpha (Benedict and Bordner 1962)."""
        return self.alpha**2 / (2.0 - self.alpha)


class Tracks(NamedTuple):
    """Obstacles followed, each field (M,): place (m), velocity (m/s), when last seen (s), sightings so far."""

    x: FloatArray
    y: FloatArray
    vx: FloatArray
    vy: FloatArray
    seen: FloatArray
    sightings: NDArray[np.int64]
    stamp: float
    """Time of the newest sighting in s; minus infinity before the first."""

    @classmethod
    def none(cls) -> Tracks:
        """Return the state before anything was seen."""
        empty = np.zeros(0)
        return cls(empty, empty, empty, empty, empty, np.zeros(0, dtype=np.int64), -np.inf)

    def take(self, rows: Any) -> Tracks:
        """Return the tracks that an index or mask picks."""
        parts = zip(self._fields[:6], self[:6])
        return self._replace(**{name: part[rows] for name, part in parts})

    def at(self, stamp: float) -> Tracks:
        """Return the tracks moved on at their velocities to another moment (s)."""
        ahead = stamp - self.seen
        return self._replace(x=self.x + self.vx * ahead, y=self.y + self.vy * ahead)


def follow(tracks: Tracks, stamp: float, x: FloatArray, y: FloatArray, rules: Rules) -> Tracks:
    """Return the tracks after a sighting of obstacles at x, y (m; (K,)) at the moment ``stamp`` (s).

    The result holds the sighted obstacles first, in the order given, then those out of sight for no longer than
    ``rules.patience``, still at the place where they were last seen (``at`` moves them on). A new obstacle has no
    velocity until its second sighting. A sighting from before the newest one changes nothing, unless it is older
    by more than the patience: then the clock was set back and everything starts anew.
    """
    if stamp < tracks.stamp - rules.patience:
        tracks = Tracks.none()
    if stamp < tracks.stamp:
        return tracks
    kept = tracks.seen >= stamp - rules.patience
    old = tracks.take(kept)
    of_track, of_place = _pair(old, stamp, x, y, rules)
    count = len(x)
    vx, vy, sightings = np.zeros(count), np.zeros(count), np.ones(count, dtype=np.int64)
    seen, new_x, new_y = np.full(count, stamp), np.array(x, dtype=float), np.array(y, dtype=float)
    if len(of_track):
        put = of_place
        new_x[put], new_y[put], vx[put], vy[put], seen[put], sightings[put] = _filtered(
            old.take(of_track),
            stamp, new_x[put], new_y[put], rules,
        )  # fmt: skip
    lost = np.ones(len(old.x), dtype=bool)
    lost[of_track] = False
    return Tracks(
        np.concatenate([new_x, old.x[lost]]), np.concatenate([new_y, old.y[lost]]),
        np.concatenate([vx, old.vx[lost]]), np.concatenate([vy, old.vy[lost]]),
        np.concatenate([seen, old.seen[lost]]), np.concatenate([sightings, old.sightings[lost]]), stamp,
    )  # fmt: skip


def _pair(
    old: Tracks, stamp: float, x: FloatArray, y: FloatArray, rules: Rules
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return index arrays of tracks and sightings that belong together."""
    ahead = old.at(stamp)
    cost = (ahead.x[:, None] - x) ** 2 + (ahead.y[:, None] - y) ** 2
    moved = np.hypot(old.x[:, None] - x, old.y[:, None] - y)
    reach = rules.fastest * (stamp - old.seen) + rules.slack
    possible = moved <= reach[:, None]
    of_track, of_place = linear_sum_assignment(np.where(possible, cost, _RULED_OUT))
    good = possible[of_track, of_place]
    return of_track[good], of_place[good]


def _filtered(
    old: Tracks, stamp: float, x: FloatArray, y: FloatArray, rules: Rules
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray, NDArray[np.int64]]:
    """Return x, y, vx, vy, time seen and number of sightings of tracks that were seen again."""
    dt = stamp - old.seen
    timed = dt >= SAME_MOMENT
    # two sightings give the first velocity as it is; the filter's start is exact for uniform motion
    first = old.sightings == 1
    alpha = np.where(first, 1.0, rules.alpha)
    rate = np.where(timed, np.where(first, 1.0, rules.beta) / np.where(timed, dt, 1.0), 0.0)
    ahead = old.at(stamp)
    miss_x, miss_y = x - ahead.x, y - ahead.y
    vx, vy = old.vx + rate * miss_x, old.vy + rate * miss_y
    scale = rules.fastest / np.maximum(np.hypot(vx, vy), rules.fastest)
    # the moment of an untimed sighting stays the old one, or velocity would come from no time at all later on
    return (
        np.where(timed, ahead.x + alpha * miss_x, old.x), np.where(timed, ahead.y + alpha * miss_y, old.y),
        vx * scale, vy * scale, np.where(timed, stamp, old.seen), old.sightings + timed,
    )  # fmt: skip
