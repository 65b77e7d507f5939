"""The whole field: approach and avoidance composed into one heading, in the floor's frame."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.drive import wrap
from fieldnav_ros.field.approach import TIGHTEST, approach_vector, circle_course, open_radius, way_left
from fieldnav_ros.field.avoidance import Obstacles, guard_weight, nearest_repulsion
from fieldnav_ros.field.foresight import MARGIN, NOWHERE, Ahead, Course, Robots, Zones, look_ahead
from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import Numbers
from fieldnav_ros.yard import Floor

SIDE_STAYS = 0.005
"""Metres by which the other turning circle must be nearer before the robot changes over to it."""
CROWDED = 1.5
"""What a second inside a guard zone costs, in seconds of way."""
TOUCHED = 10.0
"""What a touch costs, in seconds of way."""
COURSE_STAYS = 0.08
"""What the reverse of the last course costs more than the same, in half seconds of way."""
WAITED = 4.0
"""How much more the course stays for each second waited."""
PATIENCE = 2.0
"""Longest time waited (s) that counts."""
SOON = 0.5
"""Time waited (s) after which ways past are looked for further to the sides: two carts may leave no gap."""
WIDER = 1.0
"""How much further for each second after that, as a share of the step."""
STANDS = 0.15
"""Mean wheel speed (m/s) below which the robot counts as waiting."""

_FEW = 64
"""Up to so many rows all courses are thought through at once: fewer calls of NumPy are worth more than idle numbers."""

# the wanted course first, then steps of ``sidestep`` to both sides, the wanted course slowly; standing; straight back
_STEPS = np.array([0.0, 1.0, -1.0, 2.0, -2.0, 4.0, -4.0, 0.0])[:, None]
_PACES = np.array([*[1.0] * (len(_STEPS) - 1), 0.4, 0.0, -1.0])[:, None]
_SLOW, _STANDING, _BACK = range(len(_STEPS) - 1, len(_PACES))
_SIDES = np.array([[1.0], [-1.0]])


class Goal(NamedTuple):
    """Where to arrive: x, y (m), cosine and sine of the heading, and the heading (rad), each (N,)."""

    x: Any
    y: Any
    cos: Any
    sin: Any

    def frame(self, x: Any, y: Any) -> tuple[Any, Any]:
        """Return floor coordinates (m) in the frame of the goal, whose heading is its x axis."""
        dx, dy = x - self.x, y - self.y
        return self.cos * dx + self.sin * dy, self.cos * dy - self.sin * dx

    def take(self, rows: Any) -> Goal:
        """Return the goals that an index or mask picks."""
        return Goal(*(part[rows] for part in self))


class Habit(NamedTuple):
    """What keeps it from dithering, each (N,): side of the circle, last way driven (unit vector), time waited (s).

    ``side`` is +1, -1, or 0 where none has been taken yet; the course is (0, 0) before the first.
    """

    side: Any
    course_x: Any
    course_y: Any
    waited: Any

    def take(self, rows: Any) -> Habit:
        """Return the habits of the rows that an index or mask picks."""
        return Habit(*(part[rows] for part in self))


def guidance_course(
    robots: Robots, goal: Goal, obstacles: Obstacles, numbers: Numbers, robot: Robot, floor: Floor | None, habit: Habit
) -> tuple[Course, Any]:
    """Return the course of the default field for each row, and the side of the turning circle it leads round, (N,).

    It differs from the published composition in that it never adds two fields up. The approach leads round one
    circle, the one with the shorter way, and changes over only for a gain; avoidance drives the approach ahead in
    thought and, only where that meets guard zones, compares it with courses turned to both sides, slower, standing
    and backing, by the way left at the end and the crowding and touching until then. All obstacles and walls count.
    """
    x, y = goal.frame(robots.x, robots.y)
    radii = open_radius(x, y, _SIDES, _roomy_radius(goal, numbers, robot, floor))
    ways = way_left(x, y, _SIDES, radii)
    left = ways[0] - ways[1] < SIDE_STAYS * habit.side
    side, radius = np.where(left, 1.0, -1.0), np.where(left, radii[0], radii[1])
    cos_yaw, sin_yaw = np.cos(robots.yaw), np.sin(robots.yaw)
    along, across = goal.cos * cos_yaw + goal.sin * sin_yaw, goal.cos * sin_yaw - goal.sin * cos_yaw
    heading, bend = circle_course(x, y, side, radius, numbers.turn_softness, along, across)
    wanted = wrap(heading + np.arctan2(goal.sin, goal.cos))
    course = Course(wanted, bend, np.ones_like(wanted), robots.distance.copy())
    thin = Numbers(*np.array(numbers, np.float32))
    zones = Zones.of(robots, obstacles, thin, robot, floor)
    tried = len(_PACES) if len(wanted) <= _FEW else 1
    ahead = look_ahead(robots, _courses(course, robots, numbers, slice(tried), habit.waited), zones, thin, robot)
    rows = np.flatnonzero(ahead.crowding[0] + ahead.touching[0] > 0.0)
    if rows.size:
        ahead = Ahead(*(part[:, rows] for part in ahead))
        some, numbers = robots.take(rows), _take(numbers, rows)
        courses = _courses(Course(*(part[rows] for part in course)), some, numbers, slice(None), habit.waited[rows])
        if tried == 1:
            rest = Course(*(part[1:] for part in courses))
            more = look_ahead(some, rest, zones.take(rows), _take(thin, rows), robot)
            ahead = Ahead(*(np.concatenate(parts) for parts in zip(ahead, more)))
        best = _best(courses, ahead, robot, goal.take(rows), habit.take(rows), side[rows], radius[rows])
        chosen = best, np.arange(len(rows))
        course.facing[rows], course.bend[rows] = courses.facing[chosen], courses.bend[chosen]
        course.pace[rows], course.distance[rows] = _PACES[best, 0], courses.distance[chosen]
    return course, side


def _take(numbers: Numbers, rows: Any) -> Numbers:
    return Numbers(*(part[rows] if np.ndim(part) else part for part in numbers))


def _courses(wanted: Course, robots: Robots, numbers: Numbers, which: slice, waited: Any) -> Course:
    """Return the courses to compare (C, N), the wanted one first; who has waited long looks further to the sides."""
    if which == slice(1):
        return Course(wanted.facing[None], wanted.bend[None], 1.0, wanted.distance[None])
    facing = np.empty((len(_PACES), len(wanted.facing)))
    wider = numbers.sidestep * (1.0 + WIDER * np.maximum(waited - SOON, 0.0))
    facing[: len(_STEPS)] = wanted.facing + wider * _STEPS
    facing[len(_STEPS) :] = robots.yaw
    bend = np.zeros_like(facing)
    bend[0] = wanted.bend
    distance = np.full_like(facing, NOWHERE)
    distance[[0, _SLOW]] = wanted.distance
    return Course(facing, bend, _PACES, distance)


def _best(courses: Course, ahead: Ahead, robot: Robot, goal: Goal, habit: Habit, side: Any, radius: Any) -> Any:
    """Return the number of the best course for each row: by the way left at its end, crowding and touching."""
    length = way_left(*goal.frame(ahead.x, ahead.y), side, radius)
    same = habit.course_x * np.cos(courses.facing) + habit.course_y * np.sin(courses.facing)
    same[_BACK] *= -1.0  # backing goes the other way
    price = length / robot.wheel_speed + CROWDED * ahead.crowding + TOUCHED * ahead.touching
    price -= COURSE_STAYS * (1.0 + WAITED * habit.waited) * same
    price[_STANDING] += habit.waited
    return np.argmin(price, axis=0)


def _roomy_radius(goal: Goal, numbers: Numbers, robot: Robot, floor: Floor | None) -> Any:
    """Return d_e, or less where a circle beside the goal would not keep the guard distance from a wall.

    Shape (2, N): the anticlockwise circle on the goal's left, the clockwise one on its right.
    """
    radius = numbers.turn_radius + np.zeros((2, 1))
    if floor is None:
        return radius
    gap = np.maximum(numbers.guard_distance - robot.radius, robot.radius + MARGIN)
    # from the goal the circle reaches r (1 + n) towards a wall, n the share of its centre's direction that way
    for place, toward, (low, high) in ((goal.x, -_SIDES * goal.sin, floor.x), (goal.y, _SIDES * goal.cos, floor.y)):
        radius = np.minimum(radius, (high - gap - place) / np.maximum(1.0 + toward, 1e-3))
        radius = np.minimum(radius, (place - gap - low) / np.maximum(1.0 - toward, 1e-3))
    return np.maximum(radius, TIGHTEST)


def waits(waited: Any, left: Any, right: Any, dt: Any) -> Any:
    """Return the time waited (s) after ``dt`` more seconds with these wheel speeds (m/s); it fades half as fast."""
    standing = np.abs(left + right) < 2.0 * STANDS
    return np.minimum(np.maximum(waited + np.where(standing, dt, -0.5 * dt), 0.0), PATIENCE)


def published_vector(
    x: Any, y: Any, velocity_x: Any, velocity_y: Any, goal: Goal, obstacles: Obstacles, numbers: Numbers
) -> tuple[Any, Any]:
    """Return the published composition as a vector in the floor's frame, not normalised, each (N,).

    Avoidance of the nearest obstacle alone counts inside d_min and fades outside it (Kim et al. 2001; Lim et
    al. 2008). ``sidestep`` is no part of it and has no effect here.
    """
    in_goal_x, in_goal_y = approach_vector(*goal.frame(x, y), numbers.turn_radius, numbers.turn_softness)
    field_x = goal.cos * in_goal_x - goal.sin * in_goal_y
    field_y = goal.sin * in_goal_x + goal.cos * in_goal_y
    if obstacles.x.shape[0] == 0:
        return field_x, field_y
    away_x, away_y, distance = nearest_repulsion(x, y, velocity_x, velocity_y, obstacles, numbers.motion_lead)
    weight = guard_weight(distance, numbers.guard_distance, numbers.guard_fade)
    length = np.maximum(np.sqrt(field_x * field_x + field_y * field_y), 1e-12)
    return (
        weight * away_x + (1.0 - weight) * field_x / length,
        weight * away_y + (1.0 - weight) * field_y / length,
    )
