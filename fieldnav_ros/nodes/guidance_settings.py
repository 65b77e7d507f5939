"""The parameters of the guidance node: one table from which they are declared and config/guidance.yaml is tested."""

from __future__ import annotations

from fieldnav_ros.guide import DEFAULT_MODEL, MODELS
from fieldnav_ros.nodes.base import MATCH_STAMPS, RELIABLE_INPUT, YARD
from fieldnav_ros.nodes.claim import CLAIM
from fieldnav_ros.nodes.convert import POSE_TYPES
from fieldnav_ros.nodes.declare import Setting, tunable_settings

SAME = "0: as in the yard file"
SETTINGS: tuple[Setting, ...] = (
    YARD,
    Setting("pose_type", "PoseStamped", "message type of the topic pose", choices=tuple(POSE_TYPES)),
    Setting("frame", "", "frame of pose, obstacles and goal; empty: as in the yard file"),
    Setting("base_frame", "base_link", "frame of the velocity command"),
    Setting("pose_timeout", 0.15, "age of the newest pose in s beyond which the robot stands", 0.01, 2.0),
    Setting("pose_period", 0.02, "usual time between poses in s; rules the first command after standing", 0.001, 0.5),
    Setting(
        "pose_age_from",
        "stamp",
        "stamp: a pose is as old as its stamp says; arrival: as its arrival, for cameras whose clock is not in step; "
        "poses: time is what the poses' stamps tell, for simulators at another speed than real time",
        choices=("stamp", "arrival", "poses"),
    ),
    Setting("obstacle_odometry", [""], "topics of nav_msgs/Odometry, one for each obstacle that reports itself"),
    Setting("obstacle_radius", 0.0, f"radius of obstacles in m; {SAME}", 0.0, 10.0),
    Setting(
        "obstacle_timeout", 0.5, "s after which an obstacle that nothing tells of any more is left out", 0.05, 10.0
    ),
    Setting("obstacle_speed", 2.0, "largest plausible speed of an obstacle in m/s", 0.1, 20.0),
    Setting(
        "obstacle_trust", 0.6, "trust in new positions, 1: no smoothing, right for exact positions only", 0.05, 1.0
    ),
    Setting("stamped_cmd", True, "cmd_vel as TwistStamped; false: Twist"),
    Setting("publish_cmd", True, "publish cmd_vel; false: heading only, the stack drives"),
    Setting("command_delay", 0.0, "s from a command to the wheels; poses are moved on by it", 0.0, 0.5),
    Setting("robot.radius", 0.0, f"footprint radius in m; {SAME}", 0.0, 10.0),
    Setting("robot.track", 0.0, f"distance between the wheels in m; {SAME}", 0.0, 10.0),
    Setting("robot.wheel_speed", 0.0, f"largest speed of a wheel in m/s; {SAME}", 0.0, 10.0),
    Setting("robot.wheel_accel", 0.0, f"largest acceleration of a wheel in m/s^2; {SAME}", 0.0, 50.0),
    Setting("arrival.position", 0.0, f"distance to the goal in m that counts as arrived; {SAME}", 0.0, 10.0),
    Setting("arrival.heading", 0.0, f"heading error in rad that counts as arrived; {SAME}", 0.0, 3.15),
    MATCH_STAMPS,
    RELIABLE_INPUT,
    Setting("field_rate", 2.0, "pictures of the field per second while somebody looks; 0: none", 0.0, 10.0),
    Setting("field_arrows", 24.0, "arrows along the floor's longer side in such a picture", 4.0, 60.0),
    Setting(CLAIM, "", "which tuner sets the numbers, in its own words; it writes this itself", live=True),
    Setting("field.model", DEFAULT_MODEL, "which field guides", choices=MODELS, live=True),
    *tunable_settings(),
)
