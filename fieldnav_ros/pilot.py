"""What guidance does with each pose: drive, or stand and say why. A state machine without ROS, clock or topic.

Times are whole nanoseconds: ``stamp`` as the message carries it, ``moment`` and ``now`` on the clock by which age is
judged (the node's clock, or a steady one where the camera's clock is not in step).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from fieldnav_ros.crowd import NANO, Crowd, Reading, View
from fieldnav_ros.drive import apart
from fieldnav_ros.guide import Memory, Senses, guide
from fieldnav_ros.model import Pose, Robot
from fieldnav_ros.parameters import Numbers
from fieldnav_ros.pending import slots
from fieldnav_ros.yard import Arrival, Floor

JUMP_SLACK = 0.10
"""Metres by which two poses may differ more than the robot can have driven."""
JUMP_SLACK_YAW = 0.5
"""The same for yaw, in rad."""
LOCKSTEP_PAUSE = 0.9
"""Seconds between two stamps of a lockstep simulation that mean another episode."""
COASTED = 1.3
"""Multiple of the arrival tolerance within which a robot that must stand at its goal may come to rest."""
OVERDUE = 2.0
"""Seconds past an episode's time limit after which guidance gives it up by itself."""


class Halt(NamedTuple):
    """Stand still: a short kind for counting and one plain sentence; ``fault`` where somebody should look."""

    kind: str
    sentence: str
    fault: bool = True


class Order(NamedTuple):
    """Drive: the pose it was made from, heading (rad), speed (m/s), turn rate (rad/s), obstacles as assumed."""

    reading: Reading
    heading: float
    v: float
    w: float
    view: View


@dataclass(frozen=True)
class PilotRules:
    """What does not change while the node runs; times in s."""

    robot: Robot
    floor: Floor | None
    arrival: Arrival
    pose_timeout: float = 0.15
    pose_period: float = 0.02
    command_delay: float = 0.0
    match_stamps: bool = False


NO_GOAL = Halt("no_goal", "waiting for a goal", fault=False)
NO_EPISODE = Halt("no_goal", "waiting for an episode", fault=False)
"""In lockstep the goal may come before the request; driving for that while would differ from time to time."""


class Pilot:
    """Keeps goal, episode, hold, memory and obstacles; turns poses into orders or halts."""

    _memory: Memory
    _memory_before: Memory
    _dt: float
    _driving: bool

    def __init__(self, rules: PilotRules, crowd: Crowd, numbers: Numbers, model: str) -> None:
        self.rules, self.crowd, self.numbers, self.model = rules, crowd, numbers, model
        self.goal: Pose | None = None
        self.episode: str | None = None
        self._time_limit = 0.0
        self._stay = False
        self.held = False
        self.standing: Halt = NO_GOAL
        self._blind: dict[str, str] = {}
        self._arrived = False
        # twice the poses that are usual may come while a command is on its way
        self._slots = slots(rules.command_delay, 0.5 * rules.pose_period)
        self._rest()
        self._last: Reading | None = None
        self._last_moment: int | None = None
        self._episode_start: int | None = None

    # what is wanted

    def take_goal(self, goal: Pose | None) -> None:
        """Set the goal outside episodes; None: it is lost."""
        self.goal, self._arrived = goal, False

    def start_episode(self, episode: str, goal: Pose, time_limit: float, stay: bool = False) -> None:
        """Take the episode's goal and forget everything from before; ``time_limit`` in s.

        ``stay``: stand at the goal, and try again after rolling past it; else who judges says when it is over.
        """
        self.episode, self.goal, self._time_limit, self._stay = episode, goal, time_limit, stay
        self._arrived, self._episode_start = False, None
        self._start_anew()

    def end_episode(self) -> None:
        """Drop the episode and its goal."""
        self.episode = self.goal = None
        self._rest()

    # what happens

    def on_pose(self, reading: Reading, moment: int, now: int) -> Order | Halt | None:
        """Return what to do about a pose; None where it changes nothing (yet)."""
        before = self._last
        repeated = before is not None and reading.stamp == before.stamp
        if repeated and self._last_moment is not None and not self.rules.match_stamps:
            moment = self._last_moment  # a camera that stands still and repeats itself does not stay fresh
        trouble = self._trouble_with_time(reading, moment, now)
        if trouble is not None:
            return self._stand(trouble)
        if before is not None and reading.stamp < before.stamp:
            return None
        self._last, self._last_moment = reading, moment
        if before is not None and self._jumped(before, reading):
            self._start_anew(keep_pose=True)
            far, _ = apart(before, reading)
            return self._stand(Halt("pose_jump", f"the pose jumped by {far:.2f} m, further than the robot can drive"))
        if not repeated:
            gap = self._advance(before, reading)
            if gap is not None:
                return self._stand(gap)
        return self._decide()

    def on_bad_obstacles(self, source: str, sentence: str) -> Halt:
        """Stand until the source can be used again: where obstacles are is unknown."""
        self._blind[source] = sentence
        return self._stand(Halt("bad_obstacles", sentence))

    def on_obstacles(self, source: str) -> Order | Halt | None:
        """Return what to do after obstacles came: in lockstep they may complete the moment of the last pose."""
        self._blind.pop(source, None)
        if self.rules.match_stamps and self._last is not None and self.crowd.stamp == self._last.stamp:
            return self._decide()
        return None

    def watch(self, now: int) -> Halt | None:
        """Return why the robot must stand although no message says so; None where all is well."""
        if self.held:
            return self._stand(self._hold())
        if self.goal is None:
            return self._stand(NO_GOAL)
        if self.rules.match_stamps:
            return None  # the simulator may take its time; it obeys only commands with its pose's stamp
        if self._last_moment is None:
            return self._stand(Halt("no_pose", "no pose has come yet"))
        age = (now - self._last_moment) / NANO
        if age > self.rules.pose_timeout:
            halt = Halt(
                "stale_pose", f"the newest pose is {age:.2f} s old, may be at most {self.rules.pose_timeout:g} s"
            )
            return self._stand(halt)
        return None

    def refuse(self, halt: Halt) -> Halt:
        """Stand because a message could not be used."""
        return self._stand(halt)

    def seen(self, now: int) -> View:
        """Return the obstacles as they are known at the newest pose, for a picture; without any pose, now."""
        if self.rules.match_stamps:
            return self.crowd.at(self.crowd.stamp or now)
        return self.crowd.at(self._last_moment if self._last_moment is not None else now)

    # how it is decided

    def _decide(self) -> Order | Halt | None:
        reading, goal = self._last, self.goal
        if self.held:
            return self._stand(self._hold())
        if reading is None or self._last_moment is None or goal is None:
            return self._stand(NO_GOAL)
        if self._blind:
            return self._stand(Halt("bad_obstacles", next(iter(self._blind.values()))))
        if self.episode is None and self.rules.match_stamps:
            return self._stand(NO_EPISODE)
        halt = self._overdue(reading)
        if halt is None and (self.episode is None or self._stay):
            halt = self._arrival(reading, goal)
        if halt is not None:
            return self._stand(halt)
        if self.rules.match_stamps and self.crowd.stamp != reading.stamp:
            return None
        moment = reading.stamp if self.rules.match_stamps else self._last_moment
        view = self.crowd.at(moment)
        row = [np.array([value]) for value in (reading.x, reading.y, reading.yaw, goal.x, goal.y, goal.yaw)]
        advice = guide(
            Senses._make([*row, view.obstacles]), self.numbers, self.rules.robot, self.rules.floor,
            self._memory_before, self._dt, self.model, self.rules.command_delay,
        )  # fmt: skip
        heading, v, w = float(advice.heading[0]), float(advice.v[0]), float(advice.w[0])
        if not (math.isfinite(heading) and math.isfinite(v) and math.isfinite(w)):
            return self._stand(Halt("not_finite", "the field gave no finite command at this place"))
        self._memory, self._driving = advice.memory, True
        return Order(reading, heading, v, w, view)

    def _trouble_with_time(self, reading: Reading, moment: int, now: int) -> Halt | None:
        timeout = self.rules.pose_timeout
        if not self.rules.match_stamps:
            age = (now - moment) / NANO
            if age > timeout:
                return Halt("stale_pose", f"the pose is {age:.2f} s old, may be at most {timeout:g} s")
            if age < -timeout:
                return Halt("clock_jump", f"the pose is stamped {-age:.2f} s in the future: clocks differ or jumped")
        if self._last is not None:
            back = (self._last.stamp - reading.stamp) / NANO
            if back > timeout:
                self._start_anew()
                self._last, self._last_moment = reading, moment
                return Halt("clock_jump", f"the pose's stamp went back by {back:.2f} s: a clock jumped")
        return None

    def _jumped(self, before: Reading, reading: Reading) -> bool:
        dt = (reading.stamp - before.stamp) / NANO
        reach = 1.5 * self.rules.robot.wheel_speed * dt
        far, turn = apart(before, reading)
        return far > reach + JUMP_SLACK or abs(turn) > 2.0 * reach / self.rules.robot.track + JUMP_SLACK_YAW

    def _advance(self, before: Reading | None, reading: Reading) -> Halt | None:
        """Let time pass from the last pose to this one; a halt if that was too long and the robot was not told."""
        dt = self.rules.pose_period if before is None else (reading.stamp - before.stamp) / NANO
        if dt > (LOCKSTEP_PAUSE if self.rules.match_stamps else self.rules.pose_timeout):
            untold = self._driving and not self.rules.match_stamps
            self._rest()
            return Halt("pose_gap", f"poses were missing for {dt:.2f} s") if untold else None
        self._memory_before, self._dt = self._memory, dt
        return None

    def _arrival(self, reading: Reading, goal: Pose) -> Halt | None:
        allowed = self.rules.arrival
        far, turn = apart(goal, reading)
        off = max(far / allowed.position, abs(turn) / allowed.heading)
        if off <= 1.0:
            self._arrived = True
        elif self._stay and off > COASTED:
            self._arrived = False  # it rolled on after the stop: once more
        return Halt("arrived", "arrived, waiting for the next goal", fault=False) if self._arrived else None

    def _overdue(self, reading: Reading) -> Halt | None:
        if self.episode is None:
            return None
        if self._episode_start is None:
            self._episode_start = reading.stamp
        passed = (reading.stamp - self._episode_start) / NANO
        if passed <= self._time_limit + OVERDUE:
            return None
        name = self.episode
        self.end_episode()
        return Halt("episode_overdue", f"episode {name} has run for {passed:.1f} s and nobody has ended it")

    def _stand(self, halt: Halt) -> Halt:
        self.standing = halt
        self._rest()
        return halt

    def _rest(self) -> None:
        self._memory = self._memory_before = Memory.start(1, self._slots)
        self._dt = self.rules.pose_period
        self._driving = False

    def _start_anew(self, keep_pose: bool = False) -> None:
        self._rest()
        self.crowd.forget()
        if not keep_pose:
            self._last = self._last_moment = None

    def _hold(self) -> Halt:
        return Halt("hold", "held by the operator", fault=False)
