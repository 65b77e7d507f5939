"""Whether the floor changed while the session ran, seen by the control: the champion run in every block."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fieldnav_ros.report.facts import Facts

LEAST = 6  # control episodes; under that a slope says nothing


@dataclass(frozen=True)
class Drift:
    """Slope of the control's cost with its standard error, in s per 100 episodes, by ordinary least squares."""

    episodes: int
    slope: float
    error: float

    @property
    def seen(self) -> bool:
        """Whether the slope is beyond twice its standard error."""
        return abs(self.slope) > 2.0 * self.error


def drift(facts: Facts) -> Drift | None:
    """Return the control's drift up to the first change of champion; None where there are too few episodes."""
    first = facts.before.id if facts.before else None
    points = [(item.order, item.cost) for item in facts.episodes if item.role == "control" and item.set.id == first]
    if len(points) < LEAST:
        return None
    x, y = np.array(points, dtype=float).T
    x = x / 100.0
    off = x - x.mean()
    spread = float(off @ off)
    slope = float(off @ y) / spread
    rest = y - y.mean() - slope * off
    return Drift(len(points), slope, math.sqrt(float(rest @ rest) / (len(points) - 2) / spread))
