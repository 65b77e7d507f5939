"""What chance does to an episode, drawn in full before it starts from the layout's seed.

A tape belongs to its layout alone, so an episode is the same in a batch of thousands, alone in a node,
under another time limit, and when it is run again.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.yard import Plant


class Tapes(NamedTuple):
    """Noise of each step and row, each (steps, N): pose errors (m, m, rad), grip (share), whether the pose is lost."""

    x: FloatArray
    y: FloatArray
    yaw: FloatArray
    grip: FloatArray
    lost: np.ndarray

    def errors(self, step: int, rows: np.ndarray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return the pose errors (m, m, rad) of a step for the rows that an index picks."""
        return self.x[step][rows], self.y[step][rows], self.yaw[step][rows]


def is_quiet(plant: Plant) -> bool:
    """Tell whether nothing is left to chance, so that no tape is needed."""
    return not (plant.slip or plant.pose_noise or plant.yaw_noise or plant.pose_loss)


def record(layouts: Sequence[Layout], plants: Sequence[Plant], steps: int) -> Tapes:
    """Draw the tapes of ``layouts[i]`` on ``plants[i]`` for ``steps`` steps of the plant."""
    parts = [_one(layout.seed, plant, steps) for layout, plant in zip(layouts, plants)]
    return Tapes(*(np.stack(part, axis=1) for part in zip(*parts)))


def _one(seed: int, plant: Plant, steps: int) -> Tapes:
    # a generator each and one row a step, so that a longer tape starts as a shorter one does
    for_poses, for_shares = (np.random.default_rng(part) for part in np.random.SeedSequence(seed).spawn(2))
    normal = for_poses.standard_normal((steps, 3)).T
    uniform = for_shares.random((steps, 2)).T
    return Tapes(
        plant.pose_noise * normal[0],
        plant.pose_noise * normal[1],
        plant.yaw_noise * normal[2],
        1.0 - plant.slip * uniform[0],
        uniform[1] < plant.pose_loss,
    )
