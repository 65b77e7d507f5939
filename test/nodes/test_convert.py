"""Messages to values and back: angles, frames, units, and refusal of what cannot be used."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

pytest.importorskip("rclpy", reason="needs ROS messages")

from builtin_interfaces.msg import Time
from geometry_msgs.msg import PoseArray, PoseStamped, PoseWithCovarianceStamped, Quaternion, TwistStamped
from nav_msgs.msg import Odometry

from fieldnav_ros.crowd import NANO
from fieldnav_ros.errors import InputError
from fieldnav_ros.nodes import convert

pytestmark = pytest.mark.ros
angles = st.floats(-3.1, 3.1)
metres = st.floats(-1e4, 1e4)
odd_numbers = st.sampled_from([math.nan, math.inf, -math.inf, 1e5, -1e300])


@given(yaw=angles, pitch=st.floats(-1.4, 1.4), roll=angles)
def test_yaw_is_that_of_scipys_rotations(yaw: float, pitch: float, roll: float) -> None:
    """The yaw of intrinsic z-y-x angles, compared with ``scipy.spatial.transform.Rotation``."""
    x, y, z, w = (float(part) for part in Rotation.from_euler("ZYX", [yaw, pitch, roll]).as_quat())
    assert convert.yaw_of(Quaternion(x=x, y=y, z=z, w=w), "pose") == pytest.approx(yaw, abs=1e-6)


@given(x=metres, y=metres, yaw=angles, stamp=st.integers(0, 2**31 * NANO - 1))
def test_poses_come_back_as_they_went_out(x: float, y: float, yaw: float, stamp: int) -> None:
    message = convert.pose_message(x, y, yaw, "map", stamp)
    for shape in (message, _with_covariance(message), _odometry(message)):
        reading = convert.reading_from(shape, "map")
        assert (reading.stamp, reading.x, reading.y) == (stamp, x, y)
        assert reading.yaw == pytest.approx(yaw, abs=1e-9)


@given(places=st.lists(st.tuples(metres, metres), max_size=10))
def test_obstacles_come_back_as_they_went_out(places: list[tuple[float, float]]) -> None:
    table = np.array(places).reshape(-1, 2).T
    message = convert.obstacles_message(table[0], table[1], np.zeros(len(places)), "map", 7)
    sighting = convert.sighting_from(message, "map")
    assert sighting.stamp == 7
    assert np.array_equal(sighting.places, table)


def test_numpy_numbers_go_out_as_numbers() -> None:
    """A numpy float in a field would be sent as garbage: what is put in is a float, whatever it came from."""
    message = convert.command_message(np.float32(0.5), np.float64(1.0), "base_link", 0, True)  # type: ignore[arg-type]  # on purpose
    assert isinstance(message, TwistStamped)
    assert type(message.twist.linear.x) is float
    assert type(message.twist.angular.z) is float
    pose = convert.pose_message(np.float32(1), np.int64(2), np.float64(0.1), "map", 0).pose  # type: ignore[arg-type]  # on purpose
    assert {type(value) for value in (pose.position.x, pose.position.y, pose.orientation.z)} == {float}


@given(yaw=angles, along=st.floats(-1, 1), across=st.floats(-1, 1))
def test_odometry_gives_velocity_in_the_floors_frame(yaw: float, along: float, across: float) -> None:
    """nav_msgs/Odometry: the twist is in the child frame; compared with SciPy's rotation of the vector."""
    message = _odometry(convert.pose_message(1.0, 2.0, yaw, "map", 5))
    message.twist.twist.linear.x, message.twist.twist.linear.y = along, across
    mover = convert.mover_from(message, "map", "other")
    expected = Rotation.from_euler("Z", yaw).apply([along, across, 0.0])
    assert (mover.vx, mover.vy) == pytest.approx(tuple(expected[:2]), abs=1e-9)


@pytest.mark.parametrize("frame", ["odom", "", "Map", "map/", "//map"])
def test_another_frame_is_refused(frame: str) -> None:
    with pytest.raises(InputError, match="frame_id"):
        convert.reading_from(convert.pose_message(0.0, 0.0, 0.0, frame, 0), "map")


@given(axis=st.sampled_from(["x", "y"]), value=odd_numbers)
def test_places_that_are_none_are_refused(axis: str, value: float) -> None:
    message = convert.pose_message(0.0, 0.0, 0.0, "map", 0)
    setattr(message.pose.position, axis, value)
    with pytest.raises(InputError, match=f"position.{axis}"):
        convert.reading_from(message, "map")
    crowd = PoseArray(poses=[message.pose])
    crowd.header.frame_id = "map"
    with pytest.raises(InputError, match=f"pose 0: position.{axis}"):
        convert.sighting_from(crowd, "map")


@pytest.mark.parametrize(
    "parts", [(0, 0, 0, 0), (0, 0, 0, 0.9), (1, 1, 1, 1), (math.nan, 0, 0, 1), (0, 0, math.inf, 0), (0, 0, 1e200, 0)]
)
def test_quaternions_that_are_no_rotation_are_refused(parts: tuple[float, ...]) -> None:
    x, y, z, w = (float(part) for part in parts)
    with pytest.raises(InputError, match="quaternion"):
        convert.yaw_of(Quaternion(x=x, y=y, z=z, w=w), "pose")


def test_a_crowd_beyond_reason_is_refused() -> None:
    many = np.zeros(convert.LARGEST_CROWD + 1)
    message = convert.obstacles_message(many, many, many, "map", 0)
    with pytest.raises(InputError, match="number of poses"):
        convert.sighting_from(message, "map")


@given(st.integers(-(2**31), 2**31 - 1), st.integers(0, NANO - 1))
def test_stamps_are_exact(seconds: int, nanoseconds: int) -> None:
    stamp = Time(sec=seconds, nanosec=nanoseconds)
    assert convert.stamp_of(convert.nanoseconds(stamp)) == stamp


def _with_covariance(message: PoseStamped) -> PoseWithCovarianceStamped:
    other = PoseWithCovarianceStamped(header=message.header)
    other.pose.pose = message.pose
    return other


def _odometry(message: PoseStamped) -> Odometry:
    other = Odometry(header=message.header)
    other.pose.pose = message.pose
    return other
