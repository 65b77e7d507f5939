"""The other carts against the closed form of a bouncing disc."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fieldnav_ros.model import Layout, Obstacle, Pose
from fieldnav_ros.world.carts import FAR, gather, move
from fieldnav_ros.yard import Floor

FLOOR = Floor(x=(0.0, 2.4), y=(-0.5, 1.1))
HERE = Pose(x=0.0, y=0.0, yaw=0.0)


def layout(*carts: Obstacle) -> Layout:
    return Layout(start=HERE, goal=HERE, obstacles=carts)


def bounced(start: float, speed: float, t: float, low: float, high: float) -> tuple[float, float]:
    """Return place and speed of a point mirrored between two walls: the triangle wave, by unfolding."""
    width = high - low
    way = (start - low + speed * t) % (2 * width)
    return (low + way, speed) if way <= width else (low + 2 * width - way, -speed)


@settings(deadline=None, max_examples=60)
@given(
    x=st.floats(0.1, 2.3), y=st.floats(-0.4, 1.0), vx=st.floats(-2.0, 2.0), vy=st.floats(-2.0, 2.0),
    radius=st.floats(0.01, 0.1), steps=st.integers(1, 400),
)  # fmt: skip
def test_cart_is_mirrored_between_walls(x: float, y: float, vx: float, vy: float, radius: float, steps: int) -> None:
    """Elastic reflection (textbook mechanics): both axes are triangle waves; speed and radius never change."""
    carts = gather([layout(Obstacle(x=x, y=y, vx=vx, vy=vy, radius=radius))])
    for _ in range(steps):
        carts = move(carts, FLOOR, 0.01)
    for place, speed, start, first, side in ((carts.x, carts.vx, x, vx, FLOOR.x), (carts.y, carts.vy, y, vy, FLOOR.y)):
        expected, way = bounced(start, first, 0.01 * steps, side[0] + radius, side[1] - radius)
        assert place.item() == pytest.approx(expected, abs=1e-9)
        at_wall = min(abs(expected - side[0] - radius), abs(expected - side[1] + radius)) < 1e-9
        assert at_wall or speed.item() == way
        assert abs(speed.item()) == abs(first)
    assert carts.radius.item() == radius


@pytest.mark.parametrize(("x", "vx"), [(-0.3, -0.5), (2.9, 0.5)])
def test_cart_beyond_a_wall_turns_round_and_comes_back_at_its_speed(x: float, vx: float) -> None:
    """No jump: it never covers more than its speed allows."""
    carts = gather([layout(Obstacle(x=x, y=0.3, vx=vx, radius=0.06))])
    for number in range(1, 200):
        after = move(carts, FLOOR, 0.01)
        assert abs(after.x.item() - carts.x.item()) <= abs(vx) * 0.01 + 1e-12
        carts = after
        if number == 1:
            assert carts.vx.item() == -vx
    assert 0.06 <= carts.x.item() <= 2.34


def test_standing_carts_stay_wherever_they_are() -> None:
    carts = gather([layout(Obstacle(x=-1.0, y=0.3, radius=0.06), Obstacle(x=1.0, y=9.0, radius=0.06))])
    after = move(carts, FLOOR, 0.01)
    assert (after.x.tolist(), after.y.tolist()) == ([[-1.0], [1.0]], [[0.3], [9.0]])


def test_gather_keeps_each_rows_carts_and_fills_up_with_none() -> None:
    one, two = Obstacle(x=1.0, y=2.0, vx=3.0, vy=4.0, radius=5.0), Obstacle(x=6.0, y=7.0, vx=8.0, vy=9.0, radius=10.0)
    carts = gather([layout(), layout(one, two), layout(two)])
    assert carts.x.shape == (2, 3)
    assert [part[:, 1].tolist() for part in carts] == [[1.0, 6.0], [2.0, 7.0], [3.0, 8.0], [4.0, 9.0], [5.0, 10.0]]
    assert [part[0, 2] for part in carts] == [6.0, 7.0, 8.0, 9.0, 10.0]
    for row, column in ((0, 0), (1, 0), (1, 2)):
        assert [part[row, column] for part in carts] == [FAR, FAR, 0.0, 0.0, 0.0]
    assert gather([layout()]).x.shape == (0, 1)
    assert math.isfinite(FAR)
    assert np.array_equal(move(carts, FLOOR, 0.01).x[:, 0], carts.x[:, 0])
