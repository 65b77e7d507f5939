"""Tracks over the floor: those of a record, or episodes run once more in the built-in world."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from fieldnav_ros.model import KINDS, Layout, OutcomeKind
from fieldnav_ros.parameters import FloatArray, ParameterSet
from fieldnav_ros.world.trails import trails
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
    yard: Yard, layouts: Sequence[Layout], sets: Sequence[ParameterSet], model: str, time_limits: Sequence[float]
) -> list[FloorTrack]:
    """Run ``sets[i]`` on ``layouts[i]`` within ``time_limits[i]`` (s) and return where each robot went."""
    result: dict[int, FloorTrack] = {}
    for limit in sorted(set(time_limits)):
        rows = [index for index, own in enumerate(time_limits) if own == limit]
        found = trails(yard, [layouts[i] for i in rows], [sets[i] for i in rows], limit, model)
        result.update((row, FloorTrack(item.t, item.x, item.y, KINDS[item.code])) for row, item in zip(rows, found))
    return [result[index] for index in range(len(layouts))]
