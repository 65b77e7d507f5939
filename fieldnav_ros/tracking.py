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
    """Obstacles followed: place (m) and velocity (m/s), each (2, M); when last seen (s) and how often, each (M,)."""

    place: FloatArray
    velocity: FloatArray
    seen: FloatArray
    sightings: NDArray[np.int64]
    stamp: float
    """Time of the newest sighting in s; minus infinity before the first."""

    @classmethod
    def none(cls) -> Tracks:
        """Return the state before anything was seen."""
        return cls(np.zeros((2, 0)), np.zeros((2, 0)), np.zeros(0), np.zeros(0, dtype=np.int64), -np.inf)

    def take(self, rows: Any) -> Tracks:
        """Return the tracks that an index or mask picks."""
        return Tracks(self.place[:, rows], self.velocity[:, rows], self.seen[rows], self.sightings[rows], self.stamp)

    def places_at(self, stamp: float) -> FloatArray:
        """Return the places (2, M) moved on at the tracks' velocities to another moment (s)."""
        return self.place + self.velocity * (stamp - self.seen)


def follow(tracks: Tracks, stamp: float, places: FloatArray, rules: Rules) -> Tracks:
    """Return the tracks after a sighting of obstacles at ``places`` (m; (2, K)) at the moment ``stamp`` (s).

    The result holds the sighted obstacles first, in the order given, then those out of sight for no longer than
    ``rules.patience``, still at the place where they were last seen (``places_at`` moves them on). A new obstacle
    has no velocity until its second sighting. A sighting from before the newest one changes nothing, unless it is
    older by more than the patience: then the clock was set back and everything starts anew.
    """
    if stamp < tracks.stamp - rules.patience:
        tracks = Tracks.none()
    if stamp < tracks.stamp:
        return tracks
    kept = tracks.seen >= stamp - rules.patience
    old = tracks if kept.all() else tracks.take(kept)
    count = places.shape[1]
    new = Tracks(
        np.array(places, dtype=float),
        np.zeros((2, count)),
        np.full(count, stamp),
        np.ones(count, dtype=np.int64),
        stamp,
    )
    if count == 0 or old.seen.size == 0:
        of_track = np.zeros(0, dtype=np.int64)
    else:
        of_track, of_place = _pair(old, stamp, places, rules)
        _filter(old.take(of_track), new, of_place, rules)
    if of_track.size == old.seen.size:
        return new
    lost = np.ones(old.seen.size, dtype=bool)
    lost[of_track] = False
    gone = old.take(lost)
    return Tracks._make([*(np.concatenate(pair, axis=-1) for pair in zip(new[:4], gone[:4])), stamp])


def _pair(old: Tracks, stamp: float, places: FloatArray, rules: Rules) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return index arrays of tracks and sightings that belong together."""
    cost = _squared_distances(old.places_at(stamp), places)
    reach = rules.fastest * (stamp - old.seen) + rules.slack
    possible = _squared_distances(old.place, places) <= (reach * reach)[:, None]
    of_track, of_place = linear_sum_assignment(np.where(possible, cost, _RULED_OUT))
    good = possible[of_track, of_place]
    return of_track[good], of_place[good]


def _squared_distances(first: FloatArray, second: FloatArray) -> FloatArray:
    """Return squared distances (m^2) between places (2, M) and (2, K), shape (M, K)."""
    apart = first[:, :, None] - second[:, None, :]
    squared: FloatArray = np.add.reduce(apart * apart, axis=0)
    return squared


def _filter(old: Tracks, new: Tracks, put: NDArray[np.int64], rules: Rules) -> None:
    """Fill in place, velocity, time and sightings of ``new`` at ``put`` from the tracks ``old`` seen again."""
    stamp = new.stamp
    dt = stamp - old.seen
    timed = dt >= SAME_MOMENT
    # two sightings give the first velocity as it is: the filter's start is exact for uniform motion
    first = old.sightings == 1
    alpha = np.where(timed, np.where(first, 1.0, rules.alpha), 0.0)
    beta = np.where(timed, np.where(first, 1.0, rules.beta) / np.maximum(dt, SAME_MOMENT), 0.0)
    # an untimed sighting leaves a track as it was, its moment too, or velocity would come from no time at all
    ahead = old.place + old.velocity * np.where(timed, dt, 0.0)
    miss = new.place[:, put] - ahead
    velocity = old.velocity + beta * miss
    speed = np.sqrt(np.add.reduce(velocity * velocity, axis=0))
    new.place[:, put] = ahead + alpha * miss
    new.velocity[:, put] = velocity * (rules.fastest / np.maximum(speed, rules.fastest))
    new.seen[put] = np.where(timed, stamp, old.seen)
    new.sightings[put] = old.sightings + timed
