"""Closed loops: driven paths that come back on themselves and do not arrive."""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple

import numpy as np

from fieldnav_ros.drive import wrap
from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.survey.scene import Scene
from fieldnav_ros.world.paths import Paths
from fieldnav_ros.world.plant import STEP

EVERY = 5
"""Steps of the simulation from one place that is compared to the next."""
CREEP = 0.3
"""Largest difference of two speeds (m/s) that count as the same."""
LATE = 5.0
"""Seconds before its end in which a path must come back on itself."""


class Loop(NamedTuple):
    """One round of a loop: places (m), each (T,); and how many driven paths ended up in it."""

    x: FloatArray
    y: FloatArray
    paths: int = 1


def rounds(scene: Scene, paths: Paths) -> list[Loop]:
    """Return the last round of each path that did not arrive and comes back on itself.

    It does where it is, in its last LATE seconds, in a state that it had before (position and heading as close as
    counts as arrived, speed as CREEP says) after it was at least a robot's length away.
    """
    result = []
    for path in np.flatnonzero(paths.code != OutcomeKind.ARRIVED.code):
        part = _round(scene, paths, int(path))
        if part is not None:
            result.append(Loop(paths.x[part, path].copy(), paths.y[part, path].copy()))
    return result


def loops(scene: Scene, driven: Iterable[Loop]) -> list[Loop]:
    """Return the loops among ``rounds``; those whose middles are within a robot's length are one."""
    found: list[Loop] = []
    for item in driven:
        for index, other in enumerate(found):
            apart = np.hypot(item.x.mean() - other.x.mean(), item.y.mean() - other.y.mean())
            if apart <= 2.0 * scene.yard.robot.radius:
                found[index] = other._replace(paths=other.paths + 1)
                break
        else:
            found.append(item)
    return found


def _round(scene: Scene, paths: Paths, path: int) -> slice | None:
    """Return the steps of the last round of a path, None where it never comes back."""
    end = int(paths.length[path])
    x, y, yaw, speed = (part[:end:EVERY, path] for part in (paths.x, paths.y, paths.yaw, paths.speed))
    late = np.arange(max(len(x) - round(LATE / (EVERY * STEP)), 0), len(x))[:, None]
    before = np.arange(len(x)) < late
    far = np.where(before, np.hypot(x[late] - x, y[late] - y), 0.0)
    arrival = scene.yard.arrival
    same = before & (far <= arrival.position) & (np.abs(wrap(yaw[late] - yaw)) <= arrival.heading)
    same &= np.abs(speed[late] - speed) <= CREEP
    # how far away the path has been from then on until late
    away = np.maximum.accumulate(far[:, ::-1], axis=1)[:, ::-1]
    row, begin = np.nonzero(same & (away >= 2.0 * scene.yard.robot.radius))
    if not len(row):
        return None
    first = begin[row == row[-1]].max()
    return slice(int(first) * EVERY, int(late[row[-1], 0]) * EVERY + 1)
