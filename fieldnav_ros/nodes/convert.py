"""Between ROS messages and the package's own values: everything that comes in is checked here, and only here.

Units and axes as in REP-103, frames as in REP-105. Times are whole nanoseconds, so that stamps compare exactly.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from builtin_interfaces.msg import Time
from geometry_msgs.msg import Pose as PoseMsg
from geometry_msgs.msg import PoseArray, PoseStamped, PoseWithCovarianceStamped, Quaternion, Twist, TwistStamped
from nav_msgs.msg import Odometry

from fieldnav_ros.crowd import NANO, Mover, Reading, Sighting
from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Pose
from fieldnav_ros.nodes.payloads import LARGEST_COORDINATE, LARGEST_SPEED
from fieldnav_ros.parameters import FloatArray

UNIT_TOLERANCE = 0.01
"""How far from 1 the length of a quaternion may be."""
LARGEST_CROWD = 200
"""Obstacles in one message; more than this is no floor but a fault."""
POSE_TYPES: dict[str, Any] = {
    "PoseStamped": PoseStamped,
    "PoseWithCovarianceStamped": PoseWithCovarianceStamped,
    "Odometry": Odometry,
}


def nanoseconds(stamp: Time) -> int:
    """Return a stamp as whole nanoseconds."""
    return int(stamp.sec) * NANO + int(stamp.nanosec)


def stamp_of(moment: int) -> Time:
    """Return whole nanoseconds as a stamp."""
    return Time(sec=moment // NANO, nanosec=moment % NANO)


def yaw_of(quaternion: Quaternion, what: str) -> float:
    """Return the yaw (rad) of a unit quaternion; InputError where it is not finite or not of length 1.

    The yaw of the z-y-x (yaw, pitch, roll) sequence, so that a tilted camera's pose still gives its yaw.
    """
    x, y, z, w = quaternion.x, quaternion.y, quaternion.z, quaternion.w
    length = math.sqrt(_finite(x * x + y * y + z * z + w * w, f"{what}: length of the orientation quaternion"))
    if abs(length - 1.0) > UNIT_TOLERANCE:
        raise InputError.of(f"{what}: length of the orientation quaternion", round(length, 4), "1")
    return math.atan2(2.0 * (w * z + x * y), 1.0 - 2.0 * (y * y + z * z))


def quaternion_of(yaw: float) -> Quaternion:
    """Return the unit quaternion of a turn about z (rad)."""
    return Quaternion(x=0.0, y=0.0, z=math.sin(0.5 * yaw), w=math.cos(0.5 * yaw))


def reading_from(message: Any, frame: str, what: str = "pose") -> Reading:
    """Return the pose in a PoseStamped, PoseWithCovarianceStamped or Odometry; InputError where it is unusable."""
    _check_frame(message.header.frame_id, frame, what)
    pose = message.pose if isinstance(message.pose, PoseMsg) else message.pose.pose
    x, y = _place(pose.position, what)
    return Reading(nanoseconds(message.header.stamp), x, y, yaw_of(pose.orientation, what))


def goal_from(message: PoseStamped, frame: str) -> Pose:
    """Return the goal in a message; InputError where it is unusable."""
    reading = reading_from(message, frame, "goal")
    return Pose(x=reading.x, y=reading.y, yaw=reading.yaw)


def sighting_from(message: PoseArray, frame: str) -> Sighting:
    """Return the obstacles' places in a PoseArray; orientations are not used. InputError where it is unusable."""
    _check_frame(message.header.frame_id, frame, "obstacles")
    if len(message.poses) > LARGEST_CROWD:
        raise InputError.of("obstacles: number of poses", len(message.poses), f"at most {LARGEST_CROWD}")
    places = [_place(pose.position, f"obstacles: pose {index}") for index, pose in enumerate(message.poses)]
    return Sighting(nanoseconds(message.header.stamp), np.array(places, dtype=float).reshape(-1, 2).T)


def mover_from(message: Odometry, frame: str, what: str) -> Mover:
    """Return place and velocity of an obstacle from its odometry; InputError where it is unusable.

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


def speeds_from(message: TwistStamped | Twist) -> tuple[float, float]:
    """Return speed (m/s) and turn rate (rad/s) of a velocity command; InputError where one is not finite."""
    twist = message.twist if isinstance(message, TwistStamped) else message
    return (
        _finite(float(twist.linear.x), "cmd_vel: linear.x"),
        _finite(float(twist.angular.z), "cmd_vel: angular.z"),
    )


def pose_message(x: float, y: float, yaw: float, frame: str, stamp: int) -> PoseStamped:
    """Return a stamped pose; also used for ``heading``, whose yaw is the direction to take."""
    message = PoseStamped()
    message.header.frame_id = frame
    message.header.stamp = stamp_of(stamp)
    _fill(message.pose, x, y, yaw)
    return message


def obstacles_message(x: FloatArray, y: FloatArray, yaw: FloatArray, frame: str, stamp: int) -> PoseArray:
    """Return obstacles as an array of poses, turned to where they drive; arrays (K,) in m, m, rad."""
    message = PoseArray()
    message.header.frame_id = frame
    message.header.stamp = stamp_of(stamp)
    for place in zip(x, y, yaw):
        pose = PoseMsg()
        _fill(pose, *place)
        message.poses.append(pose)
    return message


def command_message(v: float, w: float, base_frame: str, stamp: int, stamped: bool) -> TwistStamped | Twist:
    """Return a velocity command (m/s, rad/s) in the robot's own frame, with or without stamp."""
    message = TwistStamped()
    message.header.frame_id = base_frame
    message.header.stamp = stamp_of(stamp)
    message.twist.linear.x, message.twist.angular.z = float(v), float(w)
    return message if stamped else message.twist


def _fill(pose: PoseMsg, x: float, y: float, yaw: float) -> None:
    # float() throughout: a numpy number in a message field would be sent as garbage without a word
    pose.position.x, pose.position.y = float(x), float(y)
    pose.orientation = quaternion_of(float(yaw))


def _check_frame(given: str, frame: str, what: str) -> None:
    if given.removeprefix("/") != frame:
        raise InputError.of(f"{what}: frame_id", given, repr(frame))


def _place(position: Any, what: str) -> tuple[float, float]:
    for axis, value in (("x", position.x), ("y", position.y)):
        if not abs(value) <= LARGEST_COORDINATE:
            raise InputError.of(f"{what}: position.{axis}", value, f"at most {LARGEST_COORDINATE:g} m from the origin")
    return float(position.x), float(position.y)


def _finite(value: float, what: str) -> float:
    if not math.isfinite(value):
        raise InputError.of(what, value, "finite")
    return value
