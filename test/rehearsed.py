"""What rehearsals in tests are made of: a small floor, a witness of all that is asked and reported, the ledger."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import yaml
from geometry_msgs.msg import PoseStamped
from ros_probe import Probe
from std_msgs.msg import String

from fieldnav_ros.nodes.base import RELIABLE, SENSOR
from fieldnav_ros.nodes.convert import nanoseconds
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.session import Session


def small(shipped: str, folder: Path) -> Path:
    """Write a small floor under a slow camera, on which episodes and resets are short."""
    yard: dict[str, Any] = yaml.safe_load(config_path(f"yards/{shipped}.yaml").read_text())
    yard |= {
        "floor": {"x": [0.0, 1.4], "y": [0.0, 1.0]}, "marks": [],
        "start": {"x": [0.2, 0.4], "y": [0.3, 0.7], "yaw": [-0.5, 0.5]},
        "goal": {"x": [1.0, 1.2], "y": [0.3, 0.7], "yaw": [-0.5, 0.5]},
    }  # fmt: skip
    yard["plant"]["pose_rate"] = 30.0
    path = folder / f"{shipped}.yaml"
    path.write_text(yaml.safe_dump(yard))
    return path


class Witness(Probe):
    """Notes every request and outcome and how the poses' clock goes, independently of the tuner."""

    def __init__(self) -> None:
        super().__init__()
        self.requests = self.hear(String, "episode/request", RELIABLE)
        self.outcomes = self.hear(String, "episode/outcome", RELIABLE)
        self.stamp = 0
        self.node.create_subscription(PoseStamped, "pose", self._on_pose, SENSOR)

    def _on_pose(self, message: PoseStamped) -> None:
        self.stamp = nanoseconds(message.header.stamp)

    def catch_up(self) -> None:
        """Take in what waits."""
        for _ in range(100):
            self.spin(0.0)


def session_of(ledger: Path) -> tuple[Session, list[Any]]:
    """Return the session in a ledger, and its events."""
    with Ledger.read(ledger) as reader:
        events = list(reader.events())
    session = Session()
    session.apply(*events)
    return session, events
