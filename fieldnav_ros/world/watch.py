"""Judging one episode from poses and obstacles as they are reported, live or from a record. Pure.

The rules are those of ``judge.look``; this adds what a report needs that a simulation does not: when the episode
begins, positions that cannot be, time limits, and obstacles that come at other moments than poses.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fieldnav_ros.crowd import NANO, Crowd, Reading
from fieldnav_ros.drive import apart
from fieldnav_ros.model import KINDS, Layout, Outcome, OutcomeKind, Robot
from fieldnav_ros.world.judge import RUNNING, Track, look
from fieldnav_ros.yard import Arrival, Floor

START_SLACK = 0.10
"""Metres, beyond the arrival tolerance, by which the first pose may be off the layout's start."""
JUMP_SLACK = 0.10
"""Metres by which two poses may differ more than the robot can have driven; JUMP_SLACK_YAW the same in rad."""
JUMP_SLACK_YAW = 0.5
JUMP_MARGIN = 1.2
LONGEST_ODD = 0.25
"""Seconds for which poses may be further off than the robot can drive before the episode is void."""
ROUNDING = 1e-6


@dataclass(frozen=True)
class Rules:
    """What an episode is judged by; ``start_slack`` in m."""

    robot: Robot
    floor: Floor
    arrival: Arrival
    time_limit: float
    start_slack: float = START_SLACK


@dataclass(frozen=True)
class Ruling:
    """The outcome, the stamp (ns) of its end, and a sentence where there is more to say."""

    outcome: Outcome
    stamp: int
    detail: str = ""


class EpisodeWatch:
    """Follows one episode; ``look_at`` takes poses in the order of their stamps."""

    def __init__(self, layout: Layout, rules: Rules, crowd: Crowd) -> None:
        self._layout, self._rules, self._crowd = layout, rules, crowd
        self._start: int | None = None
        self._last: Reading | None = None
        self._odd_since: int | None = None
        self._clearance = math.inf
        goal = layout.goal
        self._goal = _track(goal.x, goal.y, goal.yaw)

    @property
    def begun(self) -> bool:
        """Whether a pose near the start has been seen."""
        return self._start is not None

    @property
    def start(self) -> int | None:
        """Stamp (ns) of that pose."""
        return self._start

    def look_at(self, reading: Reading, moment: int) -> Ruling | None:
        """Return the ruling if the episode has ended with this pose; ``moment`` (ns) as for the crowd."""
        if self._start is None or self._last is None:
            self._begin(reading)
            return None
        if reading.stamp <= self._last.stamp:
            return None
        far = self._far_off(self._last, reading)
        if far > 0.0:
            self._odd_since = self._odd_since or reading.stamp
            if (reading.stamp - self._odd_since) / NANO <= LONGEST_ODD:
                return None  # one wrong pose of the tracking system ends no episode
            return self.give_up(f"the pose jumped by {far:.2f} m: robot lifted, or another one taken for it")
        self._odd_since = None
        return self._judge(self._last, self._start, reading, moment)

    def give_up(self, why: str) -> Ruling:
        """Return a void ruling at the last moment seen."""
        last = self._last.stamp if self._last is not None else 0
        start = self._start if self._start is not None else last
        return Ruling(self._outcome(OutcomeKind.VOID, (last - start) / NANO), last, why)

    def _begin(self, reading: Reading) -> None:
        start = self._layout.start
        if (
            math.hypot(reading.x - start.x, reading.y - start.y)
            <= self._rules.start_slack + self._rules.arrival.position
        ):
            self._start, self._last = reading.stamp, reading

    def _far_off(self, last: Reading, reading: Reading) -> float:
        """Return by how much (m) the pose is off what the robot can have driven to; 0: it can have."""
        robot = self._rules.robot
        reach = JUMP_MARGIN * robot.wheel_speed * (reading.stamp - last.stamp) / NANO
        far, turn = apart(last, reading)
        return far if far > reach + JUMP_SLACK or abs(turn) > 2.0 * reach / robot.track + JUMP_SLACK_YAW else 0.0

    def _judge(self, last: Reading, start: int, reading: Reading, moment: int) -> Ruling | None:
        rules = self._rules
        carts = self._crowd.at(moment).obstacles
        dt = (reading.stamp - last.stamp) / NANO
        carts_before = carts._replace(x=carts.x - carts.vx * dt, y=carts.y - carts.vy * dt)
        found = look(
            _track(last.x, last.y, last.yaw), _track(reading.x, reading.y, reading.yaw), carts_before, carts,
            self._goal, rules.robot.radius, rules.floor, rules.arrival,
        )  # fmt: skip
        self._last = reading
        self._clearance = min(self._clearance, float(found.clearance[0]))
        passed, code = (reading.stamp - start) / NANO, int(found.code[0])
        if code != RUNNING and passed <= rules.time_limit + ROUNDING:
            return Ruling(self._outcome(KINDS[code], passed), reading.stamp)
        if passed >= rules.time_limit - ROUNDING:
            return Ruling(self._outcome(OutcomeKind.TIMEOUT, rules.time_limit), reading.stamp)
        return None

    def _outcome(self, kind: OutcomeKind, time: float) -> Outcome:
        gap = self._clearance if math.isfinite(self._clearance) else None
        return Outcome(kind=kind, time=time, clearance=gap)


def _track(x: float, y: float, yaw: float) -> Track:
    return Track(np.array([x]), np.array([y]), np.array([yaw]))
