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


class Track(NamedTuple):
    """Robot pose at a moment, each (N,): m, m, rad."""

    x: FloatArray
    y: FloatArray
    yaw: FloatArray


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
    return np.min(np.where(carts.radius > 0.0, gap, np.inf), axis=0)


def _nearest_share(from_x: Any, from_y: Any, dx: Any, dy: Any) -> Any:
    """Return where on the segment from (from_x, from_y) by (dx, dy) the origin is nearest, in 0..1."""
    length = dx * dx + dy * dy
    share = -(from_x * dx + from_y * dy) / np.where(length > 0.0, length, 1.0)
    return np.clip(share, 0.0, 1.0)
