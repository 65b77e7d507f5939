"""Tracks over the floor: those of a record, or episodes run once more in the built-in world. Pure numpy."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fieldnav_ros.guide import Memory, Senses, guide
from fieldnav_ros.model import KINDS, Layout, OutcomeKind
from fieldnav_ros.parameters import FloatArray, Numbers, ParameterSet, stack
from fieldnav_ros.world import carts as others
from fieldnav_ros.world.judge import RUNNING, Track, look
from fieldnav_ros.world.noise import is_quiet, record
from fieldnav_ros.world.plant import STEP, Delay, Motion, PlantRows, step
from fieldnav_ros.yard import Yard


@dataclass(frozen=True)
class FloorTrack:
    """Where a robot went in one episode: times (s) and places (m), each (T,), and how it ended."""

    t: FloatArray
    x: FloatArray
    y: FloatArray
    kind: OutcomeKind

    @property
    def time(self) -> float:
        """When the episode ended (s)."""
        return float(self.t[-1])


def replay(
    yard: Yard, layouts: Sequence[Layout], sets: Sequence[ParameterSet], model: str, time_limit: float
) -> list[FloorTrack]:
    """Run ``sets[i]`` on ``layouts[i]`` as ``world.batch.simulate`` does, and return where each robot went.

    Rows without carts are run apart from the others, as there.
    """
    result: list[FloorTrack | None] = [None] * len(layouts)
    for crowded in (False, True):
        rows = [index for index, layout in enumerate(layouts) if bool(layout.obstacles) is crowded]
        if rows:
            tracks = _run(yard, [layouts[i] for i in rows], stack([sets[i] for i in rows]), model, time_limit)
            for index, track in zip(rows, tracks):
                result[index] = track
    return [track for track in result if track is not None]


def _run(yard: Yard, layouts: list[Layout], numbers: Numbers, model: str, time_limit: float) -> list[FloorTrack]:
    count, steps = len(layouts), max(1, round(time_limit / STEP))
    plants = [yard.plant] * count
    motion = Motion.at_rest(*_poses([layout.start for layout in layouts]))
    goal = Track(*_poses([layout.goal for layout in layouts]))
    carts, rows, memory = others.gather(layouts), PlantRows.of(plants), Memory.start(count)
    delay = Delay(rows.delay)
    tapes = None if is_quiet(yard.plant) else record(layouts, plants, steps)
    v, w = np.zeros(count), np.zeros(count)
    x, y = np.empty((steps + 1, count)), np.empty((steps + 1, count))
    x[0], y[0] = motion.x, motion.y
    code, last = np.full(count, RUNNING), np.full(count, steps)
    due, poses_per_step = 0, yard.plant.pose_rate * STEP
    for number in range(steps):
        if number * poses_per_step >= due:
            due += 1
            seen = Track(*motion[:3])
            if tapes is not None:
                seen = Track(seen.x + tapes.x[number], seen.y + tapes.y[number], seen.yaw + tapes.yaw[number])
            senses = Senses(seen.x, seen.y, seen.yaw, goal.x, goal.y, goal.yaw, carts)
            advice = guide(senses, numbers, yard.robot, yard.floor, memory, STEP / poses_per_step, model)
            lost = np.zeros(count, dtype=bool) if tapes is None else tapes.lost[number]
            v, w = np.where(lost, v, advice.v), np.where(lost, w, advice.w)
            memory = type(memory)(*(np.where(lost, old, new) for old, new in zip(memory, advice.memory)))
        before, carts_before = motion, carts
        grip: Any = 1.0 if tapes is None else tapes.grip[number]
        motion = step(before, *delay.pass_through(v, w), yard.robot, rows, grip)
        carts = others.move(carts_before, yard.floor, STEP)
        x[number + 1], y[number + 1] = motion.x, motion.y
        found = look(
            Track(*before[:3]),
            Track(*motion[:3]),
            carts_before,
            carts,
            goal,
            yard.robot.radius,
            yard.floor,
            yard.arrival,
        )
        ended = (code == RUNNING) & (found.code != RUNNING)
        code[ended], last[ended] = found.code[ended], number + 1
        if (code != RUNNING).all():
            break
    return [_track(x[: end + 1, row], y[: end + 1, row], int(code[row])) for row, end in enumerate(last)]


def _track(x: FloatArray, y: FloatArray, code: int) -> FloorTrack:
    kind = OutcomeKind.TIMEOUT if code == RUNNING else KINDS[code]
    return FloorTrack(STEP * np.arange(len(x), dtype=float), x.copy(), y.copy(), kind)


def _poses(poses: Sequence[Any]) -> tuple[FloatArray, FloatArray, FloatArray]:
    table = np.array([(pose.x, pose.y, pose.yaw) for pose in poses]).T
    return table[0], table[1], table[2]
