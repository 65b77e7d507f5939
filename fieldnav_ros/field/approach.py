"""Approach: headings that lead round a turning circle into the goal heading.

Goal frame everywhere here: the goal at the origin, its heading along +x.

Two kinds. The published field (``approach_heading``): two spirals weighted across the strip |y| < d_e. Source:
Kim, Kim and Kwon, IEEE Trans. SMC-B 31(3), 2001; Lim, Choi, Kim and Kim, IFAC World Congress 2008. The default
(``circle_course``): one circle at a time, the one with the shorter way, and tangents to it instead of spirals;
straight line and arc are the shortest way of bounded curvature (Dubins, Amer. J. Math. 79, 1957) from a heading
that may still be turned to. One circle at a time never cancels; the strip of the published weighting does.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike

HALF_TURN = np.pi / 2
FULL_TURN = 2 * np.pi
OVERSHOT = 0.3
"""Arcs within this angle (rad) of a full turn are none: the robot is past the tangent point by a hair."""
TIGHTEST = 0.03
"""Smallest turning radius (m) that a circle is shrunk to, for lack of room or from inside it."""
SHARPEST = 30.0
"""Largest slope (rad/m) of the tangent field towards its circle; at the circle itself it has none."""


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


def open_radius(x: Any, y: Any, side: Any, turn_radius: Any) -> Any:
    """Return the turning radius (m) for a robot at x, y: d_e, or less where it is inside that circle.

    From inside no straight line leads to a circle. The one that takes its place passes through the robot and through
    the goal in the goal's heading: r = (x^2 + y^2) / 2|y|; not below ``TIGHTEST``.
    """
    across = side * y
    through = (x * x + y * y) / np.maximum(2.0 * across, 1e-9)
    return np.where(across > 0.0, np.minimum(turn_radius, np.maximum(through, TIGHTEST)), turn_radius)


def way_left(x: Any, y: Any, side: Any, turn_radius: Any) -> Any:
    """Return the length (m) of the way to the goal: straight to the circle of that side, then along it.

    ``side`` is +1 for the anticlockwise circle centred at (0, d_e), -1 for the clockwise one. Inside the circle
    the straight part is 0. Turning at the start is not counted. Dubins 1957 for the words straight and arc.
    """
    off = y - side * turn_radius
    rho = np.sqrt(x * x + off * off)
    straight = np.sqrt(np.maximum(rho * rho - turn_radius * turn_radius, 0.0))
    leans = np.arcsin(np.minimum(turn_radius / np.maximum(rho, 1e-9), 1.0))
    # the heading of the straight part is theta + side (pi - leans); what is left to turn from there to 0
    turns = (-side * np.arctan2(off, x) - np.pi + leans) / FULL_TURN
    arc = FULL_TURN * (turns - np.floor(turns))
    return straight + turn_radius * np.where(arc > FULL_TURN - OVERSHOT, 0.0, arc)


def circle_course(
    x: Any, y: Any, side: Any, turn_radius: Any, turn_softness: Any, along: Any, across: Any
) -> tuple[Any, Any]:
    """Return heading (rad, any multiple of 2 pi) of the default field about the circle of ``side``, and its bend.

    Outside the circle the heading is theta + side (pi - asin q), q = (d_e + K_r)/(rho + K_r): for K_r = 0 the
    tangent to the circle, and the gentler a bend towards it the larger K_r is. Inside it is the published one.
    The bend (rad/m) is the change of the heading per metre along the direction (``along``, ``across``), a unit
    vector: what the drive law feeds forward. Lengths in m, goal frame.
    """
    off = y - side * turn_radius
    rho = np.maximum(np.sqrt(x * x + off * off), 1e-6)
    outside = rho > turn_radius
    q = np.minimum((turn_radius + turn_softness) / (rho + turn_softness), 0.9999)
    root = np.sqrt(rho / turn_radius)
    angle = np.where(outside, np.pi - np.arcsin(q), HALF_TURN * root)
    steep = np.minimum(q / ((rho + turn_softness) * np.sqrt(1.0 - q * q)), SHARPEST)
    slope = np.where(outside, steep, 0.5 * HALF_TURN / (root * turn_radius))
    radial = (x * along + off * across) / rho
    bend = (x * across - off * along) / (rho * rho) + side * slope * radial
    return np.arctan2(off, x) + side * angle, bend
