"""The avoidance field: away from where an obstacle is about to be.

Source: Kim, Kim and Kwon, IEEE Trans. SMC-B 31(3), 2001; Lim, Choi, Kim and Kim, IFAC World Congress 2008.
Arrays of obstacles have shape (M, N): M obstacles for each of N rows, so that a row's data lie side by side.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.parameters import FloatArray


class Obstacles(NamedTuple):
    """Discs around the robot: positions (m), velocities (m/s), radii (m), each of shape (M, N).

    Rows with fewer obstacles than others hold discs far outside the floor.
    """

    x: FloatArray
    y: FloatArray
    vx: FloatArray
    vy: FloatArray
    radius: FloatArray

    @classmethod
    def none(cls, rows: int) -> Obstacles:
        """Return no obstacle at all for ``rows`` rows."""
        return cls(*(np.empty((0, rows)) for _ in range(5)))

    def take(self, rows: Any) -> Obstacles:
        """Return the obstacles of the rows that an index or mask picks."""
        return Obstacles(*(part[:, rows] for part in self))


def shifted_offset(
    x: Any, y: Any, velocity_x: Any, velocity_y: Any, obstacles: Obstacles, motion_lead: Any
) -> tuple[Any, Any, Any]:
    """Return, for each obstacle, the vector from its shifted place to the robot and its length, each (M, N).

    The shift is s = K_o (v_obstacle - v_robot), shortened to s d / |s| where the distance d is smaller than |s|.
    """
    shift_x = motion_lead * (obstacles.vx - velocity_x)
    shift_y = motion_lead * (obstacles.vy - velocity_y)
    away_x, away_y = x - obstacles.x, y - obstacles.y
    length = np.sqrt(shift_x * shift_x + shift_y * shift_y)
    distance = np.sqrt(away_x * away_x + away_y * away_y)
    shorten = np.where(distance < length, distance / np.where(length > 0.0, length, 1.0), 1.0)
    away_x = away_x - shorten * shift_x
    away_y = away_y - shorten * shift_y
    return away_x, away_y, np.sqrt(away_x * away_x + away_y * away_y)


def nearest_repulsion(
    x: Any, y: Any, velocity_x: Any, velocity_y: Any, obstacles: Obstacles, motion_lead: Any
) -> tuple[Any, Any, Any]:
    """Return the unit vector away from the nearest shifted obstacle and its distance (m), each (N,).

    With no obstacle the distance is infinite and the vector zero.
    """
    if obstacles.x.shape[0] == 0:
        zero = np.zeros(np.shape(x))
        return zero, zero, zero + np.inf
    away_x, away_y, distance = shifted_offset(x, y, velocity_x, velocity_y, obstacles, motion_lead)
    nearest = np.argmin(distance, axis=0)[None]
    away_x, away_y, distance = (np.take_along_axis(part, nearest, 0)[0] for part in (away_x, away_y, distance))
    safe = np.where(distance > 0.0, distance, 1.0)
    return away_x / safe, away_y / safe, distance


def guard_weight(distance: Any, guard_distance: Any, guard_fade: Any) -> Any:
    """Return how much avoidance counts: 1 inside d_min, exp(-(R - d_min)^2 / 2 delta^2) outside."""
    beyond = np.maximum(distance - guard_distance, 0.0) / guard_fade
    return np.exp(-0.5 * beyond * beyond)
