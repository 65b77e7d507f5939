"""The picture for a 3D viewer says what guidance assumes: places, sizes, leads, and which part of the field speaks."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

pytest.importorskip("rclpy", reason="makes messages")

from episodes import YARD

from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.model import Pose
from fieldnav_ros.nodes import markers
from fieldnav_ros.parameters import DEFAULTS

pytestmark = pytest.mark.ros
GOAL = Pose(x=1.8, y=0.8, yaw=0.5)


def crowd(*rows: tuple[float, float, float, float]) -> Obstacles:
    table = np.array([(*row, 0.06) for row in rows]).reshape(-1, 5).T[:, :, None]
    return Obstacles(*table)


def drawn(obstacles: Obstacles, goal: Pose | None = GOAL, columns: int = 24) -> dict[str, list[Any]]:
    picture = markers.Picture(
        "map", 10**9, YARD.floor, YARD.robot, YARD.arrival, goal, obstacles, DEFAULTS.numbers(), "foresight", columns
    )
    result: dict[str, list[Any]] = {}
    for marker in markers.draw(picture).markers:
        result.setdefault(marker.ns, []).append(marker)
    return result


def colours(marker: Any, near: tuple[float, float], within: float) -> set[tuple[float, ...]]:
    """Return the colours (rounded) of arrows whose tail is near a place (m)."""
    tails = zip(marker.points[::6], marker.colors[::6])
    return {
        (round(colour.r, 3), round(colour.g, 3), round(colour.b, 3))
        for tail, colour in tails
        if np.hypot(tail.x - near[0], tail.y - near[1]) < within
    }


def test_sizes_are_those_that_guidance_reckons_with() -> None:
    found = drawn(crowd((1.0, 0.5, 0.3, -0.1)))
    assert found["obstacle"][0].scale.x == pytest.approx(0.12)
    assert found["guard"][0].scale.x == pytest.approx(2 * DEFAULTS.guard_distance)
    assert found["goal"][0].scale.x == pytest.approx(2 * YARD.arrival.position)
    here, there = found["lead"][0].points
    lead = DEFAULTS.motion_lead
    assert (there.x - here.x, there.y - here.y) == pytest.approx((0.3 * lead, -0.1 * lead))
    corners = {(point.x, point.y) for point in found["floor"][0].points}
    assert corners == {(x, y) for x in YARD.floor.x for y in YARD.floor.y}


def test_arrows_are_amber_where_something_turns_the_approach_aside_and_blue_elsewhere() -> None:
    alone, beside = (drawn(each)["heading"][0] for each in (crowd(), crowd((1.0, 0.8, 0.0, 0.0))))
    (blue,) = colours(alone, (1.0, 0.8), 0.3)
    amber = colours(beside, (0.85, 0.8), 0.12) - {blue}
    assert len(amber) == 1
    assert colours(beside, (0.3, 0.8), 0.15) == {blue}


def test_no_arrow_stands_where_the_robot_would_touch() -> None:
    points = drawn(crowd((1.0, 0.8, 0.0, 0.0)))["heading"][0].points
    middles = [(0.5 * (a.x + b.x), 0.5 * (a.y + b.y)) for a, b in zip(points[::6], points[1::6])]
    assert min(np.hypot(x - 1.0, y - 0.8) for x, y in middles) > 0.06 + YARD.robot.radius - 1e-9


def test_a_crowd_and_a_fine_grid_stay_bounded() -> None:
    found = drawn(crowd(*[(0.01 * number, 0.2, 0.0, 0.0) for number in range(200)]), columns=60)
    assert sum(map(len, found.values())) < 4 * 50
    assert len(found["heading"][0].points) <= 6 * 60 * 60
    assert len(found["heading"][0].colors) == len(found["heading"][0].points)


def test_without_a_goal_there_is_nothing_to_point_at() -> None:
    assert "heading" not in drawn(crowd(), goal=None)
