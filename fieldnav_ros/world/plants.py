"""Robots like this one: a plant for each layout, drawn within the yard's ranges. Pure."""

from __future__ import annotations

import math

import numpy as np

from fieldnav_ros.model import Layout
from fieldnav_ros.yard import Plant, PlantRanges, Yard

STREAM = 0x_91A7
"""Mixed into the layout's seed, so that the plant has nothing to do with the noise drawn from the same seed."""


def _bounds(name: str) -> tuple[float, float]:
    limits = Plant.model_fields[name].metadata
    low = max(getattr(item, "ge", getattr(item, "gt", -math.inf)) for item in limits)
    return low, min(getattr(item, "le", math.inf) for item in limits)


BOUNDS = {name: _bounds(name) for name in PlantRanges.model_fields}
LEAST_ACCEL = 0.05
"""Least share of the nominal acceleration drawn: with less a robot goes nowhere and an episode tells nothing."""


def plant_of(yard: Yard, layout: Layout) -> Plant:
    """Return the plant of a layout: a function of the yard and the layout's seed alone."""
    shares = np.random.default_rng((layout.seed, STREAM)).random(len(BOUNDS))
    values = {}
    for share, (name, (low, high)) in zip(shares, BOUNDS.items()):
        first, last = getattr(yard.plant_ranges, name)
        value = float(getattr(yard.plant, name) + first + share * (last - first))
        values[name] = min(max(value, LEAST_ACCEL if name == "accel_scale" else low), high)
    return yard.plant.model_copy(update=values)
