"""The approach field: two spirals about turning circles that meet in the goal heading.

Source: Kim, Kim and Kwon, IEEE Trans. SMC-B 31(3), 2001 (univector field);
Lim, Choi, Kim and Kim, IFAC World Congress 2008. Goal frame: the goal at the origin, its heading along +x.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike

HALF_TURN = np.pi / 2


def spiral_vector(x: Any, y: Any, side: int, turn_radius: Any, turn_softness: Any) -> tuple[Any, Any]:
    """Return the unit vector of one spiral about the circle centred at ``(0, side * turn_radius)``.

    ``side`` is +1 for the anticlockwise circle, -1 for the clockwise one. With rho, theta the polar
    coordinates about the centre the heading is theta + side * a, where a = (pi/2)(2 - (d_e + K_r)/(rho + K_r))
    outside the circle and (pi/2) sqrt(rho / d_e) inside. Turning the radial unit vector by a needs no
    arc tangent. At the centre, where theta has no value, theta = 0 is taken.
    """
    off = y - side * turn_radius
    rho = np.sqrt(x * x + off * off)
    outside = HALF_TURN * (2.0 - (turn_radius + turn_softness) / (rho + turn_softness))
    angle = np.where(rho > turn_radius, outside, HALF_TURN * np.sqrt(rho / turn_radius))
    safe = np.where(rho > 0.0, rho, 1.0)
    radial_x = np.where(rho > 0.0, x / safe, 1.0)
    radial_y = off / safe
    cosine, sine = np.cos(angle), side * np.sin(angle)
    return cosine * radial_x - sine * radial_y, sine * radial_x + cosine * radial_y


def approach_vector(x: Any, y: Any, turn_radius: Any, turn_softness: Any) -> tuple[Any, Any]:
    """Return the published composition of both spirals, not normalised (length 0 where they cancel).

    Above y = d_e the anticlockwise spiral alone counts, below y = -d_e the clockwise one; between
    them they are weighted (y + d_e)/2d_e and (d_e - y)/2d_e. Inputs broadcast; metres in, no unit out.
    """
    weight = np.clip((y + turn_radius) / (2.0 * turn_radius), 0.0, 1.0)
    left_x, left_y = spiral_vector(x, y, +1, turn_radius, turn_softness)
    right_x, right_y = spiral_vector(x, y, -1, turn_radius, turn_softness)
    return weight * left_x + (1.0 - weight) * right_x, weight * left_y + (1.0 - weight) * right_y


def approach_heading(x: ArrayLike, y: ArrayLike, turn_radius: ArrayLike, turn_softness: ArrayLike) -> Any:
    """Return the heading (rad, in (-pi, pi]) of the published approach field in the goal frame.

    ``x``, ``y``, ``turn_radius`` and ``turn_softness`` are in metres and broadcast against each other;
    the result has their broadcast shape. Where the spirals cancel the heading is 0.
    """
    along, across = approach_vector(np.asarray(x, float), np.asarray(y, float),
                                    np.asarray(turn_radius, float), np.asarray(turn_softness, float))  # fmt: skip
    return np.arctan2(across, along)
