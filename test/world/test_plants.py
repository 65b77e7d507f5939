"""Robots like this one: drawn within the yard's ranges, each from its layout's seed alone."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.resources import config_path
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.world.plants import BOUNDS, LEAST_ACCEL, plant_of
from fieldnav_ros.yard import Plant, PlantRanges, load_yard

YARD = load_yard(config_path("yards/parcel_yard.yaml"))
LAYOUTS = draw_many(YARD, "empty", 400, 1)
PAIR = st.tuples(st.floats(-3.0, 3.0), st.floats(-3.0, 3.0)).map(lambda pair: (min(pair), max(pair)))


@given(st.fixed_dictionaries(dict.fromkeys(BOUNDS, PAIR)))
def test_whatever_the_ranges_a_plant_is_one_that_a_yard_file_may_state(ranges: dict[str, tuple[float, float]]) -> None:
    yard = YARD.model_copy(update={"plant_ranges": PlantRanges(**ranges)})
    plant = plant_of(yard, LAYOUTS[0])
    assert Plant.model_validate(plant.model_dump()) == plant
    assert plant.accel_scale >= LEAST_ACCEL


def test_departures_fill_their_ranges_evenly_and_are_added_to_the_yards_plant() -> None:
    """Mean and variance of a uniform distribution: the middle, and width^2/12 (closed form)."""
    yard = YARD.model_copy(update={"plant": Plant(accel_scale=0.8, command_delay=0.1, pose_rate=30.0)})
    plants = [plant_of(yard, layout) for layout in LAYOUTS]
    assert {plant.pose_rate for plant in plants} == {30.0}
    for name, (low, high) in yard.plant_ranges.model_dump().items():
        values = np.array([getattr(plant, name) for plant in plants]) - getattr(yard.plant, name)
        assert values.min() >= low - 1e-12
        assert values.max() <= high + 1e-12
        assert values.mean() == pytest.approx((low + high) / 2, abs=0.05 * (high - low))
        assert values.var() == pytest.approx((high - low) ** 2 / 12, rel=0.15)


def test_a_plant_is_a_function_of_the_layouts_seed_alone() -> None:
    one, other = LAYOUTS[:2]
    assert plant_of(YARD, one) == plant_of(YARD, other.model_copy(update={"seed": one.seed}))
    assert plant_of(YARD, one) != plant_of(YARD, other)


def test_without_ranges_every_plant_is_the_yards() -> None:
    none = PlantRanges(**dict.fromkeys(BOUNDS, (0.0, 0.0)))
    yard = YARD.model_copy(update={"plant_ranges": none})
    assert {plant_of(yard, layout) for layout in LAYOUTS} == {YARD.plant}
