"""Points where the field cancels: its vector has no length there, so it leads nowhere."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from scipy.optimize import root

from fieldnav_ros.drive import wrap
from fieldnav_ros.field.avoidance import guard_weight
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.survey.scene import Scene, vectors

CELL = 0.02
"""Side (m) of the cells in which a point is looked for; of two in one cell, none may be found."""
MOST_CELLS = 300
"""Most cells along a side: on floors beyond CELL times that they are larger."""
OFFSET = 0.381966
"""Share of the first cell that is on the floor: a point on a grid line, as symmetry has it, would be hard to tell."""
NO_LENGTH = 1e-6
"""Length (of a sum of unit vectors) below which a vector counts as cancelled."""
SAME = 1e-3
"""Points nearer to each other than this (m) are one."""
DROWNED = 0.99
"""Share of avoidance from which on it does not matter that the approach cancels."""

Place = tuple[float, float]


def cancelling_points(scene: Scene) -> list[Place]:
    """Return the places (m, m) on the floor, clear of obstacles, where the field's vector has no length.

    Two kinds: the whole field cancels, as where avoidance stands against approach; or the approach alone does, which
    the whole then follows although it is normalised. Around a simple zero of a continuous field the vector turns once
    (its Poincare index is +1 or -1), so cells with a whole turn along their edge are those to look into; a root finder
    (MINPACK's hybrd by SciPy) does the rest. Where a field jumps an edge may turn too, but no root is found.
    """
    found: list[Place] = []
    cell = max(CELL, *((high - low) / MOST_CELLS for low, high in (scene.yard.floor.x, scene.yard.floor.y)))
    for alone in (True, False) if scene.obstacles else (False,):
        for place in _turning_cells(scene, alone, cell):
            point = _refined(scene, place, alone, cell)
            if point is not None and all(math.dist(point, other) > SAME for other in found) and _matters(scene, point):
                found.append(point)
    return found


def _turning_cells(scene: Scene, alone: bool, cell: float) -> FloatArray:
    """Return the centres (m), (N, 2), of the cells along whose edge the vector makes a whole turn."""
    sides = (scene.yard.floor.x, scene.yard.floor.y)
    x, y = np.meshgrid(*(np.arange(low - (1.0 - OFFSET) * cell, high + cell, cell) for low, high in sides))
    along, across = vectors(scene, x.ravel(), y.ravel(), alone)
    angle = np.arctan2(across, along).reshape(x.shape)
    corners = angle[:-1, :-1], angle[:-1, 1:], angle[1:, 1:], angle[1:, :-1]
    turned = sum(wrap(after - before) for before, after in zip(corners, (*corners[1:], corners[0])))
    row, column = np.nonzero(np.abs(turned) > np.pi)
    return np.stack([x[row, column], y[row, column]], axis=1) + 0.5 * cell


def _refined(scene: Scene, start: FloatArray, alone: bool, cell: float) -> Place | None:
    def vector(place: Any) -> FloatArray:
        return np.concatenate(vectors(scene, place[:1], place[1:], alone))

    found = root(vector, start, method="hybr", options={"xtol": 1e-12})
    close = np.abs(found.x - start).max() <= cell
    return (float(found.x[0]), float(found.x[1])) if close and np.hypot(*vector(found.x)) < NO_LENGTH else None


def _matters(scene: Scene, point: Place) -> bool:
    """Tell whether a robot can be there, and the approach counts."""
    numbers, robot = scene.parameters, scene.yard.robot
    for value, (low, high) in zip(point, (scene.yard.floor.x, scene.yard.floor.y)):
        if not low <= value <= high:
            return False
    for item in scene.obstacles:
        apart = math.dist(point, (item.x, item.y))
        if apart < item.radius + robot.radius:
            return False
        if guard_weight(apart, numbers.guard_distance, numbers.guard_fade) > DROWNED:
            return False
    return True
