"""Layouts: where episodes begin, drawn from a yard by a stated generator."""

from __future__ import annotations

import math

import numpy as np

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Layout, Obstacle, Pose
from fieldnav_ros.yard import Region, Yard

TRIES = 1000


def draw(yard: Yard, grade_name: str, rng: np.random.Generator, at_marks: bool = False) -> Layout:
    """Draw one layout of the given grade; carts keep ``yard.spacing`` from robot, goal and each other.

    ``at_marks`` takes the start from the yard's marks. Raises InputError where there are none, and where the yard is
    too full for its carts.
    """
    grade = yard.grade(grade_name)
    start = _mark(yard, rng) if at_marks else _pose(yard.start, rng)
    goal = _pose(yard.goal, rng)
    carts: list[Obstacle] = []
    taken = [(start.x, start.y, yard.robot.radius), (goal.x, goal.y, yard.robot.radius)]
    for _ in range(grade.carts):
        x, y = _free_place(yard, taken, rng)
        taken.append((x, y, yard.cart_radius))
        speed, way = rng.uniform(*grade.speed), rng.uniform(-math.pi, math.pi)
        carts.append(
            Obstacle(x=x, y=y, vx=speed * math.cos(way), vy=speed * math.sin(way), radius=yard.cart_radius)
        )
    return Layout(start=start, goal=goal, obstacles=tuple(carts), seed=int(rng.integers(1 << 32)))


def draw_many(yard: Yard, grade_name: str, count: int, seed: int) -> list[Layout]:
    """Draw ``count`` layouts; the same seed gives the same layouts."""
    rng = np.random.default_rng(seed)
    return [draw(yard, grade_name, rng) for _ in range(count)]


def _mark(yard: Yard, rng: np.random.Generator) -> Pose:
    if not yard.marks:
        raise InputError.of(f"marks in yard {yard.name!r}", 0, "at least 1 for layouts that start at marks")
    mark = yard.marks[int(rng.integers(len(yard.marks)))]
    return Pose(x=mark.x, y=mark.y, yaw=mark.yaw)


def _pose(region: Region, rng: np.random.Generator) -> Pose:
    return Pose(x=rng.uniform(*region.x), y=rng.uniform(*region.y), yaw=rng.uniform(*region.yaw))


def _free_place(yard: Yard, taken: list[tuple[float, float, float]], rng: np.random.Generator) -> tuple[float, float]:
    margin = yard.cart_radius
    low_x, high_x = yard.floor.x[0] + margin, yard.floor.x[1] - margin
    low_y, high_y = yard.floor.y[0] + margin, yard.floor.y[1] - margin
    for _ in range(TRIES):
        x, y = rng.uniform(low_x, high_x), rng.uniform(low_y, high_y)
        if all(math.hypot(x - px, y - py) >= margin + radius + yard.spacing for px, py, radius in taken):
            return x, y
    raise InputError(f"yard {yard.name!r} has no room for its carts: no place kept {yard.spacing:g} m of spacing")
