"""Starts: a regular grid of places and headings over the floor, and how the robot fares from each."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from fieldnav_ros.model import Layout, OutcomeKind, Pose
from fieldnav_ros.survey.scene import Scene

ALONG = 13
"""Places along the longer side of the floor."""
HEADINGS = 8
"""Headings at each place, evenly spread, the first along +x."""
CLEAR = 0.5
"""Least gap to walls and obstacles, in radii of the robot."""


class Start(NamedTuple):
    """A start, how the robot ended from it, and when (s)."""

    pose: Pose
    kind: OutcomeKind
    time: float


def starts(scene: Scene) -> list[Layout]:
    """Return a layout for each place of the grid that is clear of walls and obstacles, and each heading.

    The outermost places are as near to the walls as is clear. Of a floor without that much room there are none.
    """
    robot, floor = scene.yard.robot, scene.yard.floor
    gap = (1.0 + CLEAR) * robot.radius
    margin = gap if floor.walled else 0.0
    wide, high = (side[1] - side[0] - 2.0 * margin for side in (floor.x, floor.y))
    if min(wide, high) <= 0.0:
        return []
    step = max(wide, high) / (ALONG - 1)
    columns = np.linspace(floor.x[0] + margin, floor.x[1] - margin, round(wide / step) + 1)
    rows = np.linspace(floor.y[0] + margin, floor.y[1] - margin, round(high / step) + 1)
    free = [
        (float(x), float(y))
        for y in rows
        for x in columns
        if all(math.hypot(x - item.x, y - item.y) >= gap + item.radius for item in scene.obstacles)
    ]
    yaws = [math.remainder(2.0 * math.pi * number / HEADINGS, 2.0 * math.pi) for number in range(HEADINGS)]
    return [
        Layout(start=Pose(x=x, y=y, yaw=yaw), goal=scene.goal, obstacles=scene.obstacles, seed=index)
        for index, (x, y, yaw) in enumerate((x, y, yaw) for x, y in free for yaw in yaws)
    ]
