"""The judge: has the episode ended between two moments, and how? Pure numpy, N rows.

It looks along the straight segment between two samples, so that a contact or an arrival between two poses
of a slow tracker is not missed.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.drive import wrap
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.yard import Arrival, Floor

RUNNING = -1
TINY = 1e-300
"""Below the square of any way that is driven: a segment without length is divided by it."""
FEW = 256
"""Fewer rows are looked at faster all together than after picking some out."""


class Track(NamedTuple):
    """Robot pose at a moment, each (N,): m, m, rad."""

    x: FloatArray
    y: FloatArray
    yaw: FloatArray

    def take(self, rows: Any) -> Track:
        """Return the poses of the rows that an index or mask picks."""
        return Track(self.x[rows], self.y[rows], self.yaw[rows])


class Finding(NamedTuple):
    """Result of one look: code of the outcome or RUNNING, and least gap (m) on the way, each (N,)."""

    code: Any
    clearance: FloatArray


def look(
    before: Track,
    now: Track,
    carts_before: Obstacles,
    carts: Obstacles,
    goal: Track,
    radius: float,
    floor: Floor,
    arrival: Arrival,
) -> Finding:
    """Judge the segment from ``before`` to ``now``; ``radius`` is the robot's footprint in m.

    A contact outranks an arrival in the same segment. With walls, a footprint over the floor's edge is a
    contact; a centre beyond the edge is off_floor, with or without walls. Time limits are the caller's.
    """
    clearance = _gap_to_carts(before, now, carts_before, carts) - radius
    to_edge = np.minimum(
        np.minimum(now.x - floor.x[0], floor.x[1] - now.x), np.minimum(now.y - floor.y[0], floor.y[1] - now.y)
    )
    if floor.walled:
        clearance = np.minimum(clearance, to_edge - radius)
    code = np.where(arrived(before, now, goal, arrival), OutcomeKind.ARRIVED.code, RUNNING)
    code = np.where(clearance < 0.0, OutcomeKind.CONTACT.code, code)
    code = np.where(to_edge < 0.0, OutcomeKind.OFF_FLOOR.code, code)
    return Finding(code, clearance)


class Ended(NamedTuple):
    """Rows that a look has ended, as indices, and the codes of their outcomes."""

    rows: Any
    code: Any


NOBODY = Ended(np.empty(0, dtype=int), np.empty(0, dtype=int))


class Lookout:
    """Judges as ``look`` does, one short segment after the other, for thousands of rows.

    What is farther away than anything comes in a segment neither ends a row nor lessens its gap, and is not looked
    at closely; the findings are the same, bit for bit.
    """

    def __init__(
        self, radius: float, floor: Floor, arrival: Arrival, reach: float, turn: float, carts_reach: float, cart: float
    ) -> None:
        """Say what holds for every segment.

        ``reach`` (m) and ``turn`` (rad) bound how far a robot comes and turns in one, ``carts_reach`` how far a cart
        comes; ``radius`` is the robot's, ``cart`` the largest of the carts'. Lengths in m.
        """
        self._radius, self._floor, self._arrival = radius, floor, arrival
        self._margin = radius + cart + reach + carts_reach
        self._near_goal = (arrival.position + reach) ** 2
        self._near_heading = arrival.heading + turn

    def look(
        self, before: Track, now: Track, carts_before: Obstacles, carts: Obstacles, goal: Track, least: FloatArray
    ) -> Ended:
        """Return the rows that the segment ends; bring ``least`` (m), (N,), up to the least gap so far, in place."""
        floor = self._floor
        to_edge = np.minimum(
            np.minimum(now.x - floor.x[0], floor.x[1] - now.x), np.minimum(now.y - floor.y[0], floor.y[1] - now.y)
        )
        if floor.walled:
            np.minimum(least, to_edge - self._radius, out=least)
        if len(carts.x):
            self._look_at_carts(before, now, carts_before, carts, least)
        there = self._arrived(before, now, goal)
        if not there.size and least.min(initial=0.0) >= 0.0 and to_edge.min(initial=0.0) >= 0.0:
            return NOBODY
        code = np.full(least.shape, RUNNING)
        code[there] = OutcomeKind.ARRIVED.code
        code[least < 0.0] = OutcomeKind.CONTACT.code
        code[to_edge < 0.0] = OutcomeKind.OFF_FLOOR.code
        rows = np.flatnonzero(code != RUNNING)
        return Ended(rows, code[rows])

    def _look_at_carts(
        self, before: Track, now: Track, carts_before: Obstacles, carts: Obstacles, least: FloatArray
    ) -> None:
        within = least + self._margin
        within *= within
        (close,) = (_nearest_square(now, carts) < within).nonzero()
        if not close.size:
            return
        if least.size < FEW or 2 * close.size > least.size:
            gap = _gap_to_carts(before, now, carts_before, carts)
            np.minimum(least, gap - self._radius, out=least)
            return
        gap = _gap_to_carts(before.take(close), now.take(close), carts_before.take(close), carts.take(close))
        least[close] = np.minimum(least[close], gap - self._radius)

    def _arrived(self, before: Track, now: Track, goal: Track) -> Any:
        off_x, off_y = now.x - goal.x, now.y - goal.y
        off_x *= off_x
        off_y *= off_y
        off_x += off_y
        (rows,) = (off_x <= self._near_goal).nonzero()
        if rows.size:
            rows = rows[np.abs(wrap(now.yaw[rows] - goal.yaw[rows])) <= self._near_heading]
        if rows.size:
            rows = rows[arrived(before.take(rows), now.take(rows), goal.take(rows), self._arrival)]
        return rows


def _nearest_square(now: Track, carts: Obstacles) -> Any:
    """Return the squared distance (m^2) from the robot's centre to the nearest cart's centre, (N,)."""
    dx, dy = now.x - carts.x, now.y - carts.y
    dx *= dx
    dy *= dy
    dx += dy
    return dx.min(axis=0)


def arrived(before: Track, now: Track, goal: Track, arrival: Arrival) -> Any:
    """Tell where the segment is within both tolerances at its point nearest to the goal or at its end. Shape (N,)."""
    dx, dy = now.x - before.x, now.y - before.y
    share = _nearest_share(before.x - goal.x, before.y - goal.y, dx, dy)
    nearest = Track(before.x + share * dx, before.y + share * dy, before.yaw + share * wrap(now.yaw - before.yaw))
    return _within(nearest, goal, arrival) | _within(now, goal, arrival)


def _within(pose: Track, goal: Track, arrival: Arrival) -> Any:
    off_x, off_y = pose.x - goal.x, pose.y - goal.y
    near = off_x * off_x + off_y * off_y <= arrival.position * arrival.position
    return near & (np.abs(wrap(pose.yaw - goal.yaw)) <= arrival.heading)


def _gap_to_carts(before: Track, now: Track, carts_before: Obstacles, carts: Obstacles) -> Any:
    """Return the least distance from the robot's centre to a cart's edge along the segment (m), (N,).

    Discs of radius 0 are no carts (see ``carts.gather``); with no cart the distance is infinite.
    """
    if carts.x.shape[0] == 0:
        return np.full(np.shape(now.x), np.inf)
    from_x, from_y = before.x - carts_before.x, before.y - carts_before.y
    dx, dy = now.x - carts.x - from_x, now.y - carts.y - from_y
    share = _nearest_share(from_x, from_y, dx, dy)
    off_x, off_y = from_x + share * dx, from_y + share * dy
    gap = np.sqrt(off_x * off_x + off_y * off_y) - carts.radius
    return np.where(carts.radius > 0.0, gap, np.inf).min(axis=0)


def _nearest_share(from_x: Any, from_y: Any, dx: Any, dy: Any) -> Any:
    """Return where on the segment from (from_x, from_y) by (dx, dy) the origin is nearest, in 0..1."""
    length = np.maximum(dx * dx + dy * dy, TINY)
    share = -(from_x * dx + from_y * dy) / length
    return np.minimum(np.maximum(share, 0.0), 1.0)
