"""The batch's equations once more as a loop over rows, compiled with numba: the yardstick of its speed.

Published model, a plant that leaves nothing to chance. The equations are those of ``field/``, ``drive.py``,
``guide.py`` and ``world/``, where their sources stand; here they are only written out for one row.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
from numba import njit

from fieldnav_ros.guide import PROBE
from fieldnav_ros.model import Layout, OutcomeKind
from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.world.plant import STEP
from fieldnav_ros.yard import Yard

TWO_PI = 2.0 * math.pi
HALF_TURN = 0.5 * math.pi
ARRIVED, TIMEOUT, CONTACT, OFF_FLOOR = (
    kind.code for kind in (OutcomeKind.ARRIVED, OutcomeKind.TIMEOUT, OutcomeKind.CONTACT, OutcomeKind.OFF_FLOOR)
)


class Outcomes(NamedTuple):
    """Codes, times (s) and least gaps (m), each (sets, layouts), and the robot-steps taken."""

    code: Any
    time: Any
    clearance: Any
    steps: int


def run(yard: Yard, grade: str, layouts: Sequence[Layout], sets: Sequence[ParameterSet]) -> Outcomes:
    """Run every set on every layout, which all have the same number of carts."""
    starts = np.array([(item.start.x, item.start.y, item.start.yaw) for item in layouts])
    goals = np.array([(item.goal.x, item.goal.y, item.goal.yaw) for item in layouts])
    carts = np.array([[(c.x, c.y, c.vx, c.vy, c.radius) for c in item.obstacles] for item in layouts])
    robot, floor, plant = yard.robot, yard.floor, yard.plant
    room = np.array([*floor.x, *floor.y])
    limits = np.array([robot.radius, robot.track, robot.wheel_speed, robot.wheel_accel])
    pace = np.array([plant.accel_scale, plant.wheel_mismatch, plant.pose_rate * STEP])
    arrival = np.array([yard.arrival.position, yard.arrival.heading])
    steps = max(1, round(yard.grade(grade).time_limit / STEP))
    delay = round(plant.command_delay / STEP)
    numbers = np.array([item.to_array() for item in sets])
    code, time, gap, taken = _all(
        numbers, starts, goals, carts, room, limits, pace, arrival, steps, delay, floor.walled
    )
    return Outcomes(code, time, gap, int(taken))


@njit
def _all(numbers, starts, goals, carts, room, limits, pace, arrival, steps, delay, walled):  # type: ignore[no-untyped-def]  # numba infers
    rows, columns = len(numbers), len(starts)
    code = np.empty((rows, columns), np.int64)
    time, gap = np.empty((rows, columns)), np.empty((rows, columns))
    taken = 0
    for row in range(rows):
        for column in range(columns):
            code[row, column], number, gap[row, column] = _episode(
                numbers[row], starts[column], goals[column], carts[column].copy(), room, limits, pace, arrival, steps,
                delay, walled,
            )  # fmt: skip
            time[row, column] = number * STEP
            taken += number
    return code, time, gap, taken


@njit
def _wrap(angle):  # type: ignore[no-untyped-def]  # numba infers
    return angle - TWO_PI * math.floor(angle / TWO_PI + 0.5)


@njit
def _spiral(x, y, side, turn_radius, softness):  # type: ignore[no-untyped-def]  # numba infers
    off = y - side * turn_radius
    rho = math.sqrt(x * x + off * off)
    if rho > turn_radius:
        angle = HALF_TURN * (2.0 - (turn_radius + softness) / (rho + softness))
    else:
        angle = HALF_TURN * math.sqrt(rho / turn_radius)
    radial_x, radial_y = (x / rho, off / rho) if rho > 0.0 else (1.0, 0.0)
    cosine, sine = math.cos(angle), side * math.sin(angle)
    return cosine * radial_x - sine * radial_y, sine * radial_x + cosine * radial_y


@njit
def _field(x, y, vx, vy, gx, gy, cos_goal, sin_goal, carts, p):  # type: ignore[no-untyped-def]  # numba infers
    dx, dy = x - gx, y - gy
    along, across = cos_goal * dx + sin_goal * dy, cos_goal * dy - sin_goal * dx
    weight = min(max((across + p[0]) / (2.0 * p[0]), 0.0), 1.0)
    left_x, left_y = _spiral(along, across, 1.0, p[0], p[1])
    right_x, right_y = _spiral(along, across, -1.0, p[0], p[1])
    in_x, in_y = weight * left_x + (1.0 - weight) * right_x, weight * left_y + (1.0 - weight) * right_y
    field_x, field_y = cos_goal * in_x - sin_goal * in_y, sin_goal * in_x + cos_goal * in_y
    if len(carts) == 0:
        return field_x, field_y
    near, near_x, near_y = math.inf, 0.0, 0.0
    for cart in range(len(carts)):
        shift_x, shift_y = p[2] * (carts[cart, 2] - vx), p[2] * (carts[cart, 3] - vy)
        away_x, away_y = x - carts[cart, 0], y - carts[cart, 1]
        length = math.sqrt(shift_x * shift_x + shift_y * shift_y)
        distance = math.sqrt(away_x * away_x + away_y * away_y)
        if distance < length:
            shift_x, shift_y = distance / length * shift_x, distance / length * shift_y
        away_x, away_y = away_x - shift_x, away_y - shift_y
        distance = math.sqrt(away_x * away_x + away_y * away_y)
        if distance < near:
            near, near_x, near_y = distance, away_x, away_y
    beyond = max(near - p[3], 0.0) / p[4]
    weight = math.exp(-0.5 * beyond * beyond)
    safe = near if near > 0.0 else 1.0
    length = max(math.sqrt(field_x * field_x + field_y * field_y), 1e-12)
    return (
        weight * (near_x / safe) + (1.0 - weight) * field_x / length,
        weight * (near_y / safe) + (1.0 - weight) * field_y / length,
    )


@njit
def _wheels(v, w, limits):  # type: ignore[no-untyped-def]  # numba infers
    half = 0.5 * limits[1] * w
    left, right = v - half, v + half
    scale = limits[2] / max(max(abs(left), abs(right)), limits[2])
    return left * scale, right * scale


@njit
def _toward(wheel, before, most):  # type: ignore[no-untyped-def]  # numba infers
    return before + min(max(wheel - before, -most), most)


@njit
def _command(x, y, yaw, goal, cos_goal, sin_goal, carts, p, limits, left, right, dt):  # type: ignore[no-untyped-def]  # numba infers
    speed = 0.5 * (left + right)
    yaw = _wrap(yaw)
    cos_yaw, sin_yaw = math.cos(yaw), math.sin(yaw)
    vx, vy = speed * cos_yaw, speed * sin_yaw
    here_x, here_y = _field(x, y, vx, vy, goal[0], goal[1], cos_goal, sin_goal, carts, p)
    next_x, next_y = _field(
        x + PROBE * cos_yaw, y + PROBE * sin_yaw, vx, vy, goal[0], goal[1], cos_goal, sin_goal, carts, p
    )
    turned = math.atan2(here_x * next_y - here_y * next_x, here_x * next_x + here_y * next_y)
    error = _wrap(math.atan2(here_y, here_x) - yaw)
    off_x, off_y = x - goal[0], y - goal[1]
    bend, distance = turned / PROBE, math.sqrt(off_x * off_x + off_y * off_y)
    steer = p[6] * math.sqrt(abs(error))
    by_wheels = (2.0 * limits[2] - limits[1] * steer) / (2.0 + limits[1] * abs(bend))
    by_side = 2.0 * p[8] / max(steer + math.sqrt(steer * steer + 4.0 * p[8] * abs(bend)), 1e-9)
    v = max(min(min(by_wheels, by_side), p[7] * distance), 0.0)
    most = 2.0 * limits[2] / limits[1]
    w = min(max(bend * v + math.copysign(steer, error), -most), most)
    wanted_left, wanted_right = _wheels(v, w, limits)
    most = limits[3] * dt
    return _toward(wanted_left, left, most), _toward(wanted_right, right, most)


@njit
def _bounce(place, speed, radius, low, high):  # type: ignore[no-untyped-def]  # numba infers
    low, high = low + radius, high - radius
    moved, back = place + speed * STEP, place - speed * STEP
    if moved < low and speed < 0.0:
        return min(2.0 * low - moved, back), -speed
    if moved > high and speed > 0.0:
        return max(2.0 * high - moved, back), -speed
    return moved, speed


@njit
def _nearest_share(from_x, from_y, dx, dy):  # type: ignore[no-untyped-def]  # numba infers
    length = dx * dx + dy * dy
    return min(max(-(from_x * dx + from_y * dy) / (length if length > 0.0 else 1.0), 0.0), 1.0)


@njit
def _within(x, y, yaw, goal, arrival):  # type: ignore[no-untyped-def]  # numba infers
    off_x, off_y = x - goal[0], y - goal[1]
    near = off_x * off_x + off_y * off_y <= arrival[0] * arrival[0]
    return near and abs(_wrap(yaw - goal[2])) <= arrival[1]


@njit
def _episode(p, start, goal, carts, room, limits, pace, arrival, steps, delay, walled):  # type: ignore[no-untyped-def]  # numba infers
    x, y, yaw = start[0], start[1], start[2]
    cos_goal, sin_goal = math.cos(goal[2]), math.sin(goal[2])
    left = right = told_left = told_right = v = w = 0.0
    ring_v, ring_w = np.zeros(delay + 1), np.zeros(delay + 1)
    least, due = math.inf, 0
    for number in range(steps):
        if number * pace[2] >= due:
            due += 1
            told_left, told_right = _command(
                x, y, yaw, goal, cos_goal, sin_goal, carts, p, limits, told_left, told_right, STEP / pace[2]
            )
            v, w = 0.5 * (told_left + told_right), (told_right - told_left) / limits[1]
        at = number % (delay + 1)
        ring_v[at], ring_w[at] = v, w
        old = (number + 1) % (delay + 1)
        before_x, before_y, before_yaw = x, y, yaw
        wanted_left, wanted_right = _wheels(ring_v[old], ring_w[old], limits)
        most = limits[3] * pace[0] * STEP
        new_left, new_right = _toward(wanted_left, left, most), _toward(wanted_right, right, most)
        half = 0.5 * STEP / (1.0 + 0.5 * pace[1])
        left_way, right_way = half * (left + new_left), half * (1.0 + pace[1]) * (right + new_right)
        left, right = new_left, new_right
        travel, turned = 0.5 * (left_way + right_way), (right_way - left_way) / limits[1]
        half_turn = 0.5 * turned
        s = half_turn * half_turn
        chord = travel * (1.0 - s / 6.0 * (1.0 - s / 20.0 * (1.0 - s / 42.0 * (1.0 - s / 72.0))))
        middle = yaw + half_turn
        x, y, yaw = x + chord * math.cos(middle), y + chord * math.sin(middle), yaw + turned
        gap = math.inf
        for cart in range(len(carts)):
            from_x, from_y = before_x - carts[cart, 0], before_y - carts[cart, 1]
            carts[cart, 0], carts[cart, 2] = _bounce(carts[cart, 0], carts[cart, 2], carts[cart, 4], room[0], room[1])
            carts[cart, 1], carts[cart, 3] = _bounce(carts[cart, 1], carts[cart, 3], carts[cart, 4], room[2], room[3])
            dx, dy = x - carts[cart, 0] - from_x, y - carts[cart, 1] - from_y
            share = _nearest_share(from_x, from_y, dx, dy)
            off_x, off_y = from_x + share * dx, from_y + share * dy
            gap = min(gap, math.sqrt(off_x * off_x + off_y * off_y) - carts[cart, 4])
        gap -= limits[0]
        to_edge = min(min(x - room[0], room[1] - x), min(y - room[2], room[3] - y))
        if walled:
            gap = min(gap, to_edge - limits[0])
        least = min(least, gap)
        if to_edge < 0.0:
            return OFF_FLOOR, number + 1, least
        if gap < 0.0:
            return CONTACT, number + 1, least
        dx, dy = x - before_x, y - before_y
        share = _nearest_share(before_x - goal[0], before_y - goal[1], dx, dy)
        on_way = _within(
            before_x + share * dx, before_y + share * dy, before_yaw + share * _wrap(yaw - before_yaw), goal, arrival
        )
        if on_way or _within(x, y, yaw, goal, arrival):
            return ARRIVED, number + 1, least
    return TIMEOUT, steps, least
