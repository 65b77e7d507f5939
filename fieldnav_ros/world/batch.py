"""Many episodes at once: every set on every layout, one row each. Pure numpy, deterministic."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fieldnav_ros.errors import InputError
from fieldnav_ros.guide import DEFAULT_MODEL, Memory, Senses, guide
from fieldnav_ros.model import KINDS, Layout, Outcome, OutcomeKind
from fieldnav_ros.parameters import FloatArray, Numbers, ParameterSet, stack
from fieldnav_ros.pending import slots
from fieldnav_ros.world import carts as others
from fieldnav_ros.world.judge import RUNNING, Track, look
from fieldnav_ros.world.noise import Tapes, is_quiet, record
from fieldnav_ros.world.plant import STEP, Delay, Motion, PlantRows, step
from fieldnav_ros.yard import Plant, Yard

CHUNK = 2048
"""Rows that are stepped together: their working set stays in a core's own cache."""
TAPE_CELLS = 1 << 22
"""Most rows times steps that are stepped together: bounds the memory that noise tapes take."""
COMPACT_EVERY = 25
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
    most = max(1, min(CHUNK, TAPE_CELLS // max(1, round(limit / STEP))))
    alike = [(plant.pose_rate, bool(layout.obstacles)) for plant, layout in zip(per_layout, layouts)]
    for rows in _chunks(np.array(alike)[column], most):
        run = _Run(
            yard, [layouts[i] for i in column[rows]], [per_layout[i] for i in column[rows]],
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
    """One chunk of rows from start to end; finished rows leave it now and then."""

    def __init__(
        self, yard: Yard, layouts: list[Layout], plants: list[Plant], numbers: Numbers, model: str, limit: float,
        command_delay: float,
    ) -> None:  # fmt: skip
        self.yard, self.model, self.numbers, self.command_delay = yard, model, numbers, command_delay
        self.limit_steps = max(1, round(limit / STEP))
        rows = len(layouts)
        self.motion = Motion.at_rest(*_poses([layout.start for layout in layouts]))
        self.goal = Track(*_poses([layout.goal for layout in layouts]))
        self.carts = others.gather(layouts)
        self.plant = PlantRows.of(plants)
        self.delay = Delay(self.plant.delay)
        quiet = all(is_quiet(plant) for plant in plants)
        self.tapes: Tapes | None = None if quiet else record(layouts, plants, self.limit_steps)
        self.poses_per_step = plants[0].pose_rate * STEP
        self.memory = Memory.start(rows, slots(command_delay, STEP * int(1.0 / self.poses_per_step + 1e-9)))
        self.advised = np.full(rows, -1.0 / self.poses_per_step)  # the step of the last pose that came
        self.v, self.w = np.zeros(rows), np.zeros(rows)
        self.index = np.arange(rows)
        self.code = np.full(rows, OutcomeKind.TIMEOUT.code)
        self.time = np.full(rows, self.limit_steps * STEP)
        self.clearance = np.full(rows, np.inf)
        self.done = np.zeros(rows, dtype=bool)
        self.steps = 0

    def finish(self) -> tuple[Any, Any, Any, int]:
        """Step until every row has ended; return codes, times, clearances and the robot-steps taken."""
        due = 0
        for number in range(self.limit_steps):
            if number * self.poses_per_step >= due:
                due += 1
                self._advise(number)
            self._step(number)
            if (number + 1) % COMPACT_EVERY == 0:
                self._compact()
                if self.index.size == 0:
                    break
        return self.code, self.time, self.clearance, self.steps

    def _advise(self, number: int) -> None:
        motion, tapes = self.motion, self.tapes
        x, y, yaw = motion.x, motion.y, motion.yaw
        if tapes is not None:
            x, y, yaw = x + tapes.x[number], y + tapes.y[number], yaw + tapes.yaw[number]
        advice = guide(
            Senses(x, y, yaw, *self.goal, self.carts), self.numbers, self.yard.robot, self.yard.floor,
            self.memory, STEP * (number - self.advised), self.model, self.command_delay,
        )  # fmt: skip
        if tapes is None or not tapes.lost[number].any():
            self.v, self.w, self.memory = advice.v, advice.w, advice.memory
            self.advised = np.full(self.advised.shape, float(number))
            return
        lost = tapes.lost[number]
        self.v, self.w = np.where(lost, self.v, advice.v), np.where(lost, self.w, advice.w)
        self.advised = np.where(lost, self.advised, number)
        self.memory = Memory(*(np.where(lost, old, new) for old, new in zip(self.memory, advice.memory)))

    def _step(self, number: int) -> None:
        before, carts_before = self.motion, self.carts
        v, w = self.delay.pass_through(self.v, self.w)
        grip = 1.0 if self.tapes is None else self.tapes.grip[number]
        self.motion = step(before, v, w, self.yard.robot, self.plant, grip)
        self.carts = others.move(carts_before, self.yard.floor, STEP)
        found = look(
            Track(*before[:3]), Track(*self.motion[:3]), carts_before, self.carts, self.goal,
            self.yard.robot.radius, self.yard.floor, self.yard.arrival,
        )  # fmt: skip
        running = ~self.done
        self.steps += int(np.count_nonzero(running))
        here = self.index
        self.clearance[here] = np.where(
            running, np.minimum(self.clearance[here], found.clearance), self.clearance[here]
        )
        ended = running & (found.code != RUNNING)
        if ended.any():
            self.code[here[ended]] = found.code[ended]
            self.time[here[ended]] = (number + 1) * STEP
            self.done |= ended

    def _compact(self) -> None:
        if np.count_nonzero(self.done) * 8 < self.done.size:
            return
        keep = ~self.done
        self.motion = Motion(*(part[keep] for part in self.motion))
        self.goal = Track(*(part[keep] for part in self.goal))
        self.carts = self.carts.take(keep)
        self.plant = PlantRows(*(part[keep] for part in self.plant))
        self.delay.keep(keep)
        self.numbers = Numbers(*(part[keep] for part in self.numbers))
        self.memory = self.memory.take(keep)
        self.v, self.w, self.advised = self.v[keep], self.w[keep], self.advised[keep]
        self.tapes = None if self.tapes is None else self.tapes.keep(keep)
        self.index, self.done = self.index[keep], self.done[keep]


def _poses(poses: Sequence[Any]) -> tuple[FloatArray, FloatArray, FloatArray]:
    table = np.array([(pose.x, pose.y, pose.yaw) for pose in poses]).T
    return np.ascontiguousarray(table[0]), np.ascontiguousarray(table[1]), np.ascontiguousarray(table[2])
