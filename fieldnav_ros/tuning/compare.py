"""What sets cost on layouts that no search has seen, in simulation."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from fieldnav_ros.parameters import FloatArray, ParameterSet
from fieldnav_ros.tuning.cost import costs
from fieldnav_ros.world.batch import simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.yard import Yard

UNSEEN = 0x5EED_0FF1
"""Mixed into the seed, so that these layouts are not those of a session with the same seed."""


def unseen_costs(yard: Yard, grade: str, sets: Sequence[ParameterSet], layouts: int, seed: int) -> FloatArray:
    """Return the costs (s) of each set on the same ``layouts`` fresh layouts, shape (sets, layouts)."""
    drawn = draw_many(yard, grade, layouts, int(np.random.SeedSequence([UNSEEN, seed]).generate_state(1)[0]))
    result = simulate(yard, grade, drawn, sets)
    return costs(result.code, result.time, yard.grade(grade).time_limit)
