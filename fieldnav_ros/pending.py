"""Commands that are still on their way to the wheels, and where they will have carried the robot. Pure, N rows.

A stated dead time is taken out by acting on the predicted state, as in Smith's predictor (O. J. M. Smith,
Chemical Engineering Progress 53(5), 1957).
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np


def slots(command_delay: float, dt: float) -> int:
    """Return how many commands must be remembered for a delay (s) when one is sent each ``dt`` (s)."""
    return math.ceil(command_delay / dt - 1e-9) + 1 if command_delay > 0.0 else 0


class Pending(NamedTuple):
    """The last K commands, oldest first, each (K, N): wheel speeds (m/s) and the time each was the newest (s)."""

    left: Any
    right: Any
    lasted: Any

    def passed(self, dt: Any) -> Pending:
        """Return them with the newest one ``dt`` seconds old."""
        if not len(self.lasted):
            return self
        lasted = self.lasted.copy()
        lasted[-1] = dt
        return self._replace(lasted=lasted)

    def add(self, left: Any, right: Any) -> Pending:
        """Return them with one more, and the oldest forgotten."""
        if not len(self.lasted):
            return self
        return Pending(
            np.concatenate([self.left[1:], left[None]]),
            np.concatenate([self.right[1:], right[None]]),
            np.concatenate([self.lasted[1:], np.zeros_like(left)[None]]),
        )

    def carry_on(self, x: Any, y: Any, yaw: Any, delay: float, track: float) -> tuple[Any, Any, Any]:
        """Return the pose (m, m, rad) after ``delay`` seconds, in which those of the last ``delay`` seconds act.

        The wheels need time to take a new speed, so each command counts as the mean of it and the one before.
        """
        age = np.cumsum(self.lasted[::-1], axis=0)[::-1]
        lasts = np.maximum(np.minimum(age, delay) - np.minimum(age - self.lasted, delay), 0.0)
        for number in range(len(lasts)):
            before = max(number - 1, 0)
            left = 0.5 * (self.left[before] + self.left[number])
            right = 0.5 * (self.right[before] + self.right[number])
            travel = 0.5 * (left + right) * lasts[number]
            turned = (right - left) / track * lasts[number]
            middle = yaw + 0.5 * turned
            x, y, yaw = x + travel * np.cos(middle), y + travel * np.sin(middle), yaw + turned
        return x, y, yaw
