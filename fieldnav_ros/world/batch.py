"""Many episodes at once: every set on every layout, one row each. Pure numpy, deterministic."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fieldnav_ros.drive import limit_wheels
from fieldnav_ros.errors import InputError
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.guide import DEFAULT_MODEL, Memory, Senses, guide
from fieldnav_ros.model import KINDS, Layout, Outcome, OutcomeKind
from fieldnav_ros.parameters import FloatArray, Numbers, ParameterSet, stack
from fieldnav_ros.pending import slots
from fieldnav_ros.world import carts as others
from fieldnav_ros.world.judge import Ended, Lookout, Track
from fieldnav_ros.world.noise import Tapes, is_quiet, record
from fieldnav_ros.world.plant import STEP, Delay, Motion, PlantRows, follow
from fieldnav_ros.yard import Plant, Yard

CHUNK = 4096
"""Rows that are stepped together: enough that the calls cost little, few enough for a core's cache and memory."""
TAPE_CELLS = 1 << 21
"""Most layouts times steps that are stepped together: bounds the memory that noise tapes take."""
COMPACT_AT = 0.03
"""Share of finished rows from which on they leave: stepping them on costs more than leaving."""
REACH = 1.5
"""How much farther than at its nominal speed anything comes in a step (wheel mismatch, two axes), generously."""
LONGEST = 600.0
"""Longest time limit in s, as for a grade."""


@dataclass(frozen=True)
class BatchResult:
    """Outcomes of sets (rows) on layouts (columns): codes of OutcomeKind, times (s), least gaps (m)."""

    code: np.ndarray
    time: FloatArray
    clearance: FloatArray
    steps: int

    def outcome(self, row: int, column: int) -> Outcome:
        """Return one episode's outcome."""
        gap = float(self.clearance[row, column])
        return Outcome(
            kind=KINDS[int(self.code[row, column])],
            time=float(self.time[row, column]),
            clearance=gap if np.isfinite(gap) else None,
        )

    def share(self, kind: OutcomeKind) -> FloatArray:
        """Return, for each set, the share of layouts that ended this way."""
        return np.asarray(np.mean(self.code == kind.code, axis=1))


def simulate(
    yard: Yard,
    grade: str,
    layouts: Sequence[Layout],
    sets: Sequence[ParameterSet],
    plants: Sequence[Plant] | None = None,
    model: str = DEFAULT_MODEL,
    time_limit: float | None = None,
    command_delay: float = 0.0,
) -> BatchResult:
    """Run every set on every layout.

    ``plants`` gives each layout a plant of its own (default: the yard's for all); ``time_limit`` (s, up to
    600) overrides the grade's; ``command_delay`` (s) is what guidance is told of the plants' delays. ``steps`` of
    the result counts robot-steps of STEP seconds. A row's result does not depend on the others. Rows of one pose
    rate are stepped together, so few different rates run faster.
    Raises InputError where there is no layout or set, or where plants and layouts differ in number.
    """
    count = len(layouts)
    per_layout = [yard.plant] * count if plants is None else list(plants)
    limit = yard.grade(grade).time_limit if time_limit is None else time_limit
    _check(count, len(sets), len(per_layout), limit)
    numbers = stack(sets, count)
    column = np.tile(np.arange(count), len(sets))
    code, time, clearance = np.empty(len(column), dtype=int), np.empty(len(column)), np.empty(len(column))
    steps = 0
    on_tape = max(1, TAPE_CELLS // max(1, round(limit / STEP)))  # layouts
    most = max(1, CHUNK if count <= on_tape else min(CHUNK, on_tape))
    alike = [(plant.pose_rate, bool(layout.obstacles)) for plant, layout in zip(per_layout, layouts)]
    for rows in _chunks(np.array(alike)[column], most):
        used, place = np.unique(column[rows], return_inverse=True)
        run = _Run(
            yard, [layouts[i] for i in used], [per_layout[i] for i in used], place,
            Numbers(*(part[rows] for part in numbers)), model, limit, command_delay,
        )  # fmt: skip
        code[rows], time[rows], clearance[rows], taken = run.finish()
        steps += taken
    shape = (len(sets), count)
    return BatchResult(code.reshape(shape), time.reshape(shape), clearance.reshape(shape), steps)


def _check(layouts: int, sets: int, plants: int, limit: float) -> None:
    for name, number in (("layouts", layouts), ("parameter sets", sets)):
        if number < 1:
            raise InputError.of(f"number of {name}", number, "at least 1")
    if plants != layouts:
        raise InputError.of("number of plants", plants, f"that of the layouts, {layouts}")
    if not 0.0 < limit <= LONGEST:
        raise InputError.of("time limit", limit, f"> 0 and at most {LONGEST:g} s")


def _chunks(alike: np.ndarray, most: int) -> Iterator[np.ndarray]:
    """Yield the indices of rows that are stepped together: ``most`` at a time, ``alike`` (rows, keys) the same.

    Rows without carts keep to themselves: they are spared the arithmetic for carts, and bits of their results
    do not hang on whether a neighbour needs it.
    """
    for kind in np.unique(alike, axis=0):
        rows = np.flatnonzero((alike == kind).all(axis=1))
        for first in range(0, len(rows), most):
            yield rows[first : first + most]


class _Run:
    """One chunk of rows from start to end; finished rows leave it now and then.

    What belongs to a layout (its carts, its noise) is kept once for all the rows that run on it: ``place`` says
    which layout a row runs on.
    """

    def __init__(
        self, yard: Yard, layouts: list[Layout], plants: list[Plant], place: np.ndarray, numbers: Numbers, model: str,
        limit: float, command_delay: float,
    ) -> None:  # fmt: skip
        self.yard, self.model, self.numbers, self.command_delay = yard, model, numbers, command_delay
        self.limit_steps = max(1, round(limit / STEP))
        rows = len(place)
        self.place = place
        self.motion = Motion.at_rest(*_poses([layouts[i].start for i in place]))
        self.goal = Track(*_poses([layouts[i].goal for i in place]))
        self.carts = others.gather(layouts)
        self.plant = PlantRows.of([plants[i] for i in place])
        self.delay = Delay(self.plant.delay)
        quiet = all(is_quiet(plant) for plant in plants)
        self.tapes: Tapes | None = None if quiet else record(layouts, plants, self.limit_steps)
        self.poses_per_step = plants[0].pose_rate * STEP
        self.memory = Memory.start(rows, slots(command_delay, STEP * int(1.0 / self.poses_per_step + 1e-9)))
        self.advised = np.full(rows, -1.0 / self.poses_per_step)  # the step of the last pose that came
        self.wheels = np.zeros(rows), np.zeros(rows)  # what they have been told
        self.asked = self.motion.yaw  # the heading of the field at the last pose, for those who watch
        self.near = self.carts.take(place)
        fastest = float(np.hypot(self.carts.vx, self.carts.vy).max(initial=0.0))
        self.moving = fastest > 0.0
        reach = REACH * yard.robot.wheel_speed * STEP
        self.lookout = Lookout(
            yard.robot.radius, yard.floor, yard.arrival, reach, 2.0 * reach / yard.robot.track,
            REACH * fastest * STEP, float(self.carts.radius.max(initial=0.0)),
        )  # fmt: skip
        self.index = np.arange(rows)
        self.code = np.full(rows, OutcomeKind.TIMEOUT.code)
        self.time = np.full(rows, self.limit_steps * STEP)
        self.clearance = np.full(rows, np.inf)
        self.least = np.full(rows, np.inf)  # of the rows that are left
        self.done = np.zeros(rows, dtype=bool)
        self.running = rows
        self.steps = 0

    def finish(self) -> tuple[Any, Any, Any, int]:
        """Step until every row has ended; return codes, times, clearances and the robot-steps taken."""
        due = 0
        for number in range(self.limit_steps):
            if number * self.poses_per_step >= due:
                due += 1
                self._advise(number)
            self._step(number)
            if self.done.size - self.running > COMPACT_AT * self.done.size:
                self._compact()
            if not self.running:
                break
        left = ~self.done  # rows that ended have theirs: what came after their end does not count
        self.clearance[self.index[left]] = self.least[left]
        return self.code, self.time, self.clearance, self.steps

    def _advise(self, number: int) -> None:
        motion, tapes = self.motion, self.tapes
        x, y, yaw = motion.x, motion.y, motion.yaw
        if tapes is not None:
            error = tapes.errors(number, self.place)
            x, y, yaw = x + error[0], y + error[1], yaw + error[2]
        advice = guide(
            Senses(x, y, yaw, *self.goal, self.near), self.numbers, self.yard.robot, self.yard.floor,
            self.memory, STEP * (number - self.advised), self.model, self.command_delay,
        )  # fmt: skip
        self.asked = advice.heading
        wheels = limit_wheels(advice.v, advice.w, self.yard.robot)
        lost = None if tapes is None else tapes.lost[number][self.place]
        if lost is None or not lost.any():
            self.wheels, self.memory = wheels, advice.memory
            self.advised = np.full(self.advised.shape, float(number))
            return
        self.wheels = np.where(lost, self.wheels[0], wheels[0]), np.where(lost, self.wheels[1], wheels[1])
        self.advised = np.where(lost, self.advised, number)
        self.memory = Memory(*(np.where(lost, old, new) for old, new in zip(self.memory, advice.memory)))

    def _step(self, number: int) -> None:
        yard, before, near_before = self.yard, self.motion, self.near
        left, right = self.delay.pass_through(*self.wheels)
        grip = 1.0 if self.tapes is None else self.tapes.grip[number][self.place]
        self.motion = follow(before, left, right, yard.robot, self.plant, grip)
        if self.moving:
            self.carts = others.move(self.carts, yard.floor, STEP)
            x, y, vx, vy = (np.take(part, self.place, axis=1) for part in self.carts[:4])
            self.near = Obstacles(x, y, vx, vy, near_before.radius)
        ended = self.lookout.look(
            Track(*before[:3]), Track(*self.motion[:3]), near_before, self.near, self.goal, self.least
        )
        self.steps += self.running
        if ended.rows.size:
            self._end(ended, number)

    def _end(self, ended: Ended, number: int) -> None:
        new = ~self.done[ended.rows]
        rows = ended.rows[new]
        here = self.index[rows]
        self.code[here] = ended.code[new]
        self.time[here] = (number + 1) * STEP
        self.clearance[here] = self.least[rows]
        self.done[rows] = True
        self.running -= rows.size

    def _compact(self) -> None:
        keep = np.flatnonzero(~self.done)
        self.motion = Motion(*(part[keep] for part in self.motion))
        self.goal = self.goal.take(keep)
        self.near = self.near.take(keep)
        self.plant = PlantRows(*(part[keep] for part in self.plant))
        self.delay.keep(keep)
        self.numbers = Numbers(*(part[keep] for part in self.numbers))
        self.memory = self.memory.take(keep)
        self.wheels = self.wheels[0][keep], self.wheels[1][keep]
        self.advised, self.least, self.place = self.advised[keep], self.least[keep], self.place[keep]
        self.index, self.done = self.index[keep], self.done[keep]


def _poses(poses: Sequence[Any]) -> tuple[FloatArray, FloatArray, FloatArray]:
    table = np.array([(pose.x, pose.y, pose.yaw) for pose in poses]).T
    return np.ascontiguousarray(table[0]), np.ascontiguousarray(table[1]), np.ascontiguousarray(table[2])
