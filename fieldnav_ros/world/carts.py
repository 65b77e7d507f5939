"""The other carts: discs that keep their speed and bounce off the walls. They give way to nobody."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.model import Layout
from fieldnav_ros.yard import Floor

FAR = 1000.0
"""Where rows with fewer carts than others keep the rest, in m: outside every floor, standing, of radius 0."""


def gather(layouts: Sequence[Layout]) -> Obstacles:
    """Return the carts of all layouts as arrays of shape (most carts of any layout, layouts)."""
    most = max((len(layout.obstacles) for layout in layouts), default=0)
    table = np.zeros((5, most, len(layouts)))
    table[:2] = FAR
    for row, layout in enumerate(layouts):
        for number, cart in enumerate(layout.obstacles):
            table[:, number, row] = cart.x, cart.y, cart.vx, cart.vy, cart.radius
    return Obstacles(*table)


def move(carts: Obstacles, floor: Floor, dt: float) -> Obstacles:
    """Return the carts ``dt`` seconds later; a cart that reached a wall is mirrored back, its speed kept."""
    x, vx = _bounce(carts.x, carts.vx, carts.radius, floor.x, dt)
    y, vy = _bounce(carts.y, carts.vy, carts.radius, floor.y, dt)
    return Obstacles(x, y, vx, vy, carts.radius)


def _bounce(place: Any, speed: Any, radius: Any, side: tuple[float, float], dt: float) -> tuple[Any, Any]:
    low, high = side[0] + radius, side[1] - radius
    moved = place + speed * dt
    back = place - speed * dt
    # only a cart on its way out turns round; one put beyond the wall comes back at its speed instead of jumping
    beyond_low, beyond_high = (moved < low) & (speed < 0.0), (moved > high) & (speed > 0.0)
    moved = np.where(beyond_low, np.minimum(2.0 * low - moved, back), moved)
    moved = np.where(beyond_high, np.maximum(2.0 * high - moved, back), moved)
    return moved, np.where(beyond_low | beyond_high, -speed, speed)
