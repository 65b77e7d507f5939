"""The robot's tracked pose for nodes that do not guide: the newest, its age, and who waits for poses."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

from fieldnav_ros.crowd import Reading
from fieldnav_ros.nodes.base import SENSOR, FieldnavNode
from fieldnav_ros.nodes.convert import POSE_TYPES, reading_from


class PoseFeed:
    """Subscribes to ``pose`` for a node; ``on_pose`` is called with each usable one."""

    def __init__(self, node: FieldnavNode, pose_type: str, frame: str, on_pose: Callable[[Reading], None]) -> None:
        self._node, self._frame, self._on_pose = node, frame, on_pose
        self._came: float | None = None
        self.newest: Reading | None = None
        node.create_subscription(POSE_TYPES[pose_type], "pose", self._take, SENSOR)

    @property
    def age(self) -> float | None:
        """Seconds since the newest pose came; None before any."""
        return None if self._came is None else time.monotonic() - self._came

    def _take(self, message: Any) -> None:
        reading = self._node.usable("bad_poses", reading_from, message, self._frame)
        if reading is None:
            return
        self.newest, self._came = reading, time.monotonic()
        self._on_pose(reading)
