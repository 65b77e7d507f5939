"""Where robots go: episodes of the batched simulation with every step kept. For pictures; ``batch`` is for numbers."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np

from fieldnav_ros.errors import InputError
from fieldnav_ros.guide import DEFAULT_MODEL
from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import FloatArray, ParameterSet, stack
from fieldnav_ros.world.batch import _Run  # the same loop, so that a trail goes where the outcome says
from fieldnav_ros.world.plant import STEP
from fieldnav_ros.yard import Yard


class Trail(NamedTuple):
    """One episode: times (s) and true places (m), each (T,), one each STEP, and the code of its outcome."""

    t: FloatArray
    x: FloatArray
    y: FloatArray
    code: int


def trails(
    yard: Yard,
    layouts: Sequence[Layout],
    sets: Sequence[ParameterSet],
    time_limit: float,
    model: str = DEFAULT_MODEL,
    command_delay: float = 0.0,
) -> list[Trail]:
    """Run ``sets[i]`` on ``layouts[i]`` on the yard's own plant, as ``batch.simulate`` would.

    Times in s. InputError where sets and layouts differ in number.
    """
    if len(sets) != len(layouts):
        raise InputError.of("number of parameter sets", len(sets), f"that of the layouts, {len(layouts)}")
    result: dict[int, Trail] = {}
    # as in the batch, rows without carts keep to themselves
    for crowded in (False, True):
        rows = [index for index, layout in enumerate(layouts) if bool(layout.obstacles) is crowded]
        if rows:
            chosen = stack([sets[index] for index in rows])
            plants = [yard.plant] * len(rows)
            here = [layouts[index] for index in rows]
            run = _Walk(yard, here, plants, np.arange(len(rows)), chosen, model, time_limit, command_delay)
            result.update(zip(rows, run.trails()))
    return [result[index] for index in range(len(layouts))]


class _Walk(_Run):
    """A chunk of rows that keeps where each has been; no row leaves it early."""

    def __init__(self, *arguments: Any) -> None:
        super().__init__(*arguments)
        self._x, self._y = [self.motion.x], [self.motion.y]

    def _step(self, number: int) -> None:
        super()._step(number)
        self._x.append(self.motion.x)
        self._y.append(self.motion.y)

    def _compact(self) -> None:
        """Let every row stay: what is kept of each step must have the same rows."""

    def trails(self) -> list[Trail]:
        code, time, _, _ = self.finish()
        x, y = np.stack(self._x), np.stack(self._y)
        ends = np.round(np.asarray(time) / STEP).astype(int) + 1
        return [
            Trail(STEP * np.arange(end, dtype=float), x[:end, row].copy(), y[:end, row].copy(), int(code[row]))
            for row, end in enumerate(ends)
        ]
