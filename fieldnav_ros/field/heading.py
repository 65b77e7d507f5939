"""The whole field: approach and avoidance composed into one heading, in the floor's frame."""

from __future__ import annotations

from typing import Any

import numpy as np

from fieldnav_ros.field.approach import approach_vector
from fieldnav_ros.field.avoidance import Obstacles, guard_weight, nearest_repulsion
from fieldnav_ros.parameters import Numbers


def to_goal_frame(x: Any, y: Any, goal_x: Any, goal_y: Any, cos_goal: Any, sin_goal: Any) -> tuple[Any, Any]:
    """Return floor coordinates (m) in the frame of the goal, whose heading is its x axis."""
    dx, dy = x - goal_x, y - goal_y
    return cos_goal * dx + sin_goal * dy, cos_goal * dy - sin_goal * dx


def published_vector(
    x: Any,
    y: Any,
    velocity_x: Any,
    velocity_y: Any,
    goal: tuple[Any, Any, Any, Any],
    obstacles: Obstacles,
    numbers: Numbers,
) -> tuple[Any, Any]:
    """Return the published composition as a vector in the floor's frame, not normalised, each (N,).

    ``goal`` is x, y (m), cosine and sine of the goal heading. Avoidance of the nearest obstacle alone
    counts inside d_min and fades outside it (Kim et al. 2001; Lim et al. 2008). ``sidestep`` is no part
    of it and has no effect here.
    """
    goal_x, goal_y, cos_goal, sin_goal = goal
    along, across = to_goal_frame(x, y, goal_x, goal_y, cos_goal, sin_goal)
    in_goal_x, in_goal_y = approach_vector(along, across, numbers.turn_radius, numbers.turn_softness)
    field_x = cos_goal * in_goal_x - sin_goal * in_goal_y
    field_y = sin_goal * in_goal_x + cos_goal * in_goal_y
    if obstacles.x.shape[0] == 0:
        return field_x, field_y
    away_x, away_y, distance = nearest_repulsion(x, y, velocity_x, velocity_y, obstacles, numbers.motion_lead)
    weight = guard_weight(distance, numbers.guard_distance, numbers.guard_fade)
    length = np.maximum(np.sqrt(field_x * field_x + field_y * field_y), 1e-12)
    return (
        weight * away_x + (1.0 - weight) * field_x / length,
        weight * away_y + (1.0 - weight) * field_y / length,
    )
