"""The whole survey: one batch of driven paths, and what it and the field's own formulas show."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import KINDS, OutcomeKind
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.survey.cancelling import Place, cancelling_points
from fieldnav_ros.survey.flips import Flip, crossings, flips
from fieldnav_ros.survey.loops import Loop, loops, rounds
from fieldnav_ros.survey.scene import Scene
from fieldnav_ros.survey.starts import Start, starts
from fieldnav_ros.world.paths import paths
from fieldnav_ros.world.plant import STEP

KEPT = 2_000_000
"""Most places, of all paths together, that are kept at once: bounds the memory, at about 100 bytes each."""


@dataclass(frozen=True)
class Survey:
    """What a survey found; places in m in the floor's frame, ``time_limit`` in s."""

    scene: Scene
    time_limit: float
    cancelling: tuple[Place, ...]
    loops: tuple[Loop, ...]
    flips: tuple[Flip, ...]
    starts: tuple[Start, ...]

    @property
    def failed(self) -> tuple[Start, ...]:
        """The starts from which the goal is not reached."""
        return tuple(start for start in self.starts if start.kind is not OutcomeKind.ARRIVED)

    @property
    def share_failed(self) -> float:
        """Failed starts over all starts."""
        return len(self.failed) / len(self.starts)


def survey(scene: Scene) -> Survey:
    """Look the scene over: each start is driven once, within the longest time limit of the yard's grades.

    Deterministic. InputError where the scene is no usable one or no start is clear of walls and obstacles.
    """
    layouts = starts(scene.check())
    if not layouts:
        raise InputError.of("number of places clear of walls and obstacles", 0, "at least 1, to start from")
    limit = max(grade.time_limit for grade in scene.yard.grades.values())
    met, back, ended = list[FloatArray](), list[Loop](), list[Start]()
    most = max(int(KEPT * STEP / limit), 1)
    for first in range(0, len(layouts), most):
        part = layouts[first : first + most]
        driven = paths(scene.yard, part, scene.parameters, limit, scene.model)
        met.append(crossings(scene, driven, first))
        back += rounds(scene, driven)
        ended += [
            Start(layout.start, KINDS[int(code)], STEP * (int(length) - 1))
            for layout, code, length in zip(part, driven.code, driven.length)
        ]
    points, found = cancelling_points(scene), flips(scene, np.concatenate(met))
    return Survey(scene, limit, tuple(points), tuple(loops(scene, back)), tuple(found), tuple(ended))
