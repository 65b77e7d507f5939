"""Work for the batched simulator that can be sent elsewhere, whole or in parts, with the same outcomes. Pure."""

from __future__ import annotations

from itertools import pairwise
from typing import NamedTuple

import numpy as np

from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.world.batch import BatchResult, simulate
from fieldnav_ros.world.plants import plant_of
from fieldnav_ros.yard import Yard


class Work(NamedTuple):
    """Sets to run on layouts of one grade, each layout with a plant of its own from the yard's ranges."""

    yard: Yard
    grade: str
    time_limit: float
    layouts: tuple[Layout, ...]
    sets: tuple[ParameterSet, ...]
    model: str

    def parts(self, number: int) -> list[Work]:
        """Return the work in at most ``number`` parts of about the same size: some of the layouts each."""
        edges = np.linspace(0, len(self.layouts), min(number, len(self.layouts)) + 1).round().astype(int)
        return [self._replace(layouts=self.layouts[first:last]) for first, last in pairwise(edges)]

    def run(self) -> BatchResult:
        """Run it in this process."""
        plants = [plant_of(self.yard, layout) for layout in self.layouts]
        return simulate(self.yard, self.grade, self.layouts, self.sets, plants, self.model, self.time_limit)
