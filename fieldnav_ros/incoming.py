"""What poses and obstacles say, read from messages and checked; live or from a record. Pure.

The messages are those of geometry_msgs and nav_msgs by the names of their fields, whatever library made them. Units
and axes as in REP-103, frames as in REP-105. Times are whole nanoseconds, so that stamps compare exactly.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from fieldnav_ros.crowd import NANO, Mover, Reading, Sighting
from fieldnav_ros.errors import InputError

UNIT_TOLERANCE = 0.01
"""How far from 1 the length of a quaternion may be."""
LARGEST_CROWD = 200
"""Obstacles in one message; more than this is no floor but a fault."""
LARGEST_COORDINATE = 1e4
LARGEST_SPEED = 100.0


def nanoseconds(stamp: Any) -> int:
    """Return a builtin_interfaces/Time as whole nanoseconds."""
    return int(stamp.sec) * NANO + int(stamp.nanosec)


def yaw_of(quaternion: Any, what: str) -> float:
    """Return the yaw (rad) of a unit quaternion; InputError where it is not finite or not of length 1.

    The yaw of the z-y-x (yaw, pitch, roll) sequence, so that a tilted camera's pose still gives its yaw.
    """
    x, y, z, w = quaternion.x, quaternion.y, quaternion.z, quaternion.w
    length = math.sqrt(finite(x * x + y * y + z * z + w * w, f"{what}: length of the orientation quaternion"))
    if abs(length - 1.0) > UNIT_TOLERANCE:
        raise InputError.of(f"{what}: length of the orientation quaternion", round(length, 4), "1")
    return math.atan2(2.0 * (w * z + x * y), 1.0 - 2.0 * (y * y + z * z))


def reading_from(message: Any, frame: str, what: str = "pose") -> Reading:
    """Return the pose in a PoseStamped, PoseWithCovarianceStamped or Odometry; InputError where it is unusable."""
    _check_frame(message.header.frame_id, frame, what)
    pose = message.pose if hasattr(message.pose, "position") else message.pose.pose
    x, y = _place(pose.position, what)
    return Reading(nanoseconds(message.header.stamp), x, y, yaw_of(pose.orientation, what))


def sighting_from(message: Any, frame: str) -> Sighting:
    """Return the obstacles' places in a PoseArray; orientations are not used. InputError where it is unusable."""
    _check_frame(message.header.frame_id, frame, "obstacles")
    if len(message.poses) > LARGEST_CROWD:
        raise InputError.of("obstacles: number of poses", len(message.poses), f"at most {LARGEST_CROWD}")
    places = [_place(pose.position, f"obstacles: pose {index}") for index, pose in enumerate(message.poses)]
    return Sighting(nanoseconds(message.header.stamp), np.array(places, dtype=float).reshape(-1, 2).T)


def mover_from(message: Any, frame: str, what: str) -> Mover:
    """Return place and velocity of an obstacle from its Odometry; InputError where it is unusable.

    The twist is in the child frame (nav_msgs/Odometry's definition); it is turned into the floor's frame.
    """
    reading = reading_from(message, frame, what)
    along, across = message.twist.twist.linear.x, message.twist.twist.linear.y
    for axis, speed in (("x", along), ("y", across)):
        if not abs(speed) <= LARGEST_SPEED:
            raise InputError.of(f"{what}: linear.{axis}", speed, f"a speed of at most {LARGEST_SPEED:g} m/s")
    cos, sin = math.cos(reading.yaw), math.sin(reading.yaw)
    return Mover(
        reading.stamp, reading.x, reading.y, cos * along - sin * across, sin * along + cos * across
    )  # fmt: skip


def finite(value: float, what: str) -> float:
    """Return a value that is neither infinite nor no number; InputError where it is."""
    if not math.isfinite(value):
        raise InputError.of(what, value, "finite")
    return value


def _check_frame(given: str, frame: str, what: str) -> None:
    if given.removeprefix("/") != frame:
        raise InputError.of(f"{what}: frame_id", given, repr(frame))


def _place(position: Any, what: str) -> tuple[float, float]:
    for axis, value in (("x", position.x), ("y", position.y)):
        if not abs(value) <= LARGEST_COORDINATE:
            raise InputError.of(f"{what}: position.{axis}", value, f"at most {LARGEST_COORDINATE:g} m from the origin")
    return float(position.x), float(position.y)
