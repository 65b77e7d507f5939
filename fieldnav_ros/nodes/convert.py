"""Between ROS messages and the package's own values; what comes in is checked by ``fieldnav_ros.incoming``.

Units and axes as in REP-103, frames as in REP-105. Times are whole nanoseconds, so that stamps compare exactly.
"""

from __future__ import annotations

import math
from typing import Any

from builtin_interfaces.msg import Time
from geometry_msgs.msg import Pose as PoseMsg
from geometry_msgs.msg import PoseArray, PoseStamped, PoseWithCovarianceStamped, Quaternion, Twist, TwistStamped
from nav_msgs.msg import Odometry

from fieldnav_ros.crowd import NANO
from fieldnav_ros.incoming import LARGEST_CROWD as LARGEST_CROWD
from fieldnav_ros.incoming import finite
from fieldnav_ros.incoming import mover_from as mover_from
from fieldnav_ros.incoming import nanoseconds as nanoseconds
from fieldnav_ros.incoming import reading_from as reading_from
from fieldnav_ros.incoming import sighting_from as sighting_from
from fieldnav_ros.incoming import yaw_of as yaw_of
from fieldnav_ros.model import Pose
from fieldnav_ros.parameters import FloatArray

POSE_TYPES: dict[str, Any] = {
    "PoseStamped": PoseStamped,
    "PoseWithCovarianceStamped": PoseWithCovarianceStamped,
    "Odometry": Odometry,
}


def stamp_of(moment: int) -> Time:
    """Return whole nanoseconds as a stamp."""
    return Time(sec=moment // NANO, nanosec=moment % NANO)


def quaternion_of(yaw: float) -> Quaternion:
    """Return the unit quaternion of a turn about z (rad)."""
    return Quaternion(x=0.0, y=0.0, z=math.sin(0.5 * yaw), w=math.cos(0.5 * yaw))


def goal_from(message: PoseStamped, frame: str) -> Pose:
    """Return the goal in a message; InputError where it is unusable."""
    reading = reading_from(message, frame, "goal")
    return Pose(x=reading.x, y=reading.y, yaw=reading.yaw)


def speeds_from(message: TwistStamped | Twist) -> tuple[float, float]:
    """Return speed (m/s) and turn rate (rad/s) of a velocity command; InputError where one is not finite."""
    twist = message.twist if isinstance(message, TwistStamped) else message
    return (
        finite(float(twist.linear.x), "cmd_vel: linear.x"),
        finite(float(twist.angular.z), "cmd_vel: angular.z"),
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

