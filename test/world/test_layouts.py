"""Layouts: drawn where the yard says, spaced, the same again from the same seed."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from fieldnav_ros.errors import InputError
from fieldnav_ros.resources import config_path
from fieldnav_ros.world.layouts import draw, draw_many
from fieldnav_ros.yard import load_yard

YARD = load_yard(config_path("yards/parcel_yard.yaml"))


@settings(deadline=None, max_examples=40)
@given(seed=st.integers(0, 2**32), grade=st.sampled_from(list(YARD.grades)))
def test_everything_lies_where_the_yard_says(seed: int, grade: str) -> None:
    layout = draw(YARD, grade, np.random.default_rng(seed))
    for pose, region in ((layout.start, YARD.start), (layout.goal, YARD.goal)):
        for value, (low, high) in ((pose.x, region.x), (pose.y, region.y), (pose.yaw, region.yaw)):
            assert low <= value <= high
    rules = YARD.grades[grade]
    assert len(layout.obstacles) == rules.carts
    taken = [(layout.start.x, layout.start.y, YARD.robot.radius), (layout.goal.x, layout.goal.y, YARD.robot.radius)]
    for cart in layout.obstacles:
        assert cart.radius == YARD.cart_radius
        assert rules.speed[0] - 1e-12 <= math.hypot(cart.vx, cart.vy) <= rules.speed[1] + 1e-12
        for value, (low, high) in ((cart.x, YARD.floor.x), (cart.y, YARD.floor.y)):
            assert low + cart.radius <= value <= high - cart.radius
        for x, y, radius in taken:
            assert math.hypot(cart.x - x, cart.y - y) - radius - cart.radius >= YARD.spacing - 1e-12
        taken.append((cart.x, cart.y, cart.radius))


def test_same_seed_same_layouts_and_more_of_them_start_alike() -> None:
    few, many = draw_many(YARD, "moving", 5, seed=3), draw_many(YARD, "moving", 9, seed=3)
    assert few == many[:5]
    assert few != draw_many(YARD, "moving", 5, seed=4)
    assert len({layout.seed for layout in many}) == 9


def test_start_poses_and_courses_are_spread_evenly() -> None:
    """Kolmogorov-Smirnov against SciPy's uniform, at a fixed seed."""
    layouts = draw_many(YARD, "moving", 400, seed=11)

    def spread(values: list[float], low: float, high: float) -> float:
        return float(stats.kstest(values, "uniform", args=(low, high - low)).pvalue)

    for key in ("x", "y", "yaw"):
        for part in ("start", "goal"):
            values = [getattr(getattr(layout, part), key) for layout in layouts]
            assert spread(values, *getattr(getattr(YARD, part), key)) > 0.001, (part, key)
    carts = [cart for layout in layouts for cart in layout.obstacles]
    assert spread([math.atan2(cart.vy, cart.vx) for cart in carts], -math.pi, math.pi) > 0.001
    assert spread([math.hypot(cart.vx, cart.vy) for cart in carts], *YARD.grades["moving"].speed) > 0.001


@settings(deadline=None, max_examples=40)
@given(seed=st.integers(0, 2**32))
def test_layouts_at_marks_start_on_one_of_them_and_end_where_others_end(seed: int) -> None:
    layout = draw(YARD, "moving", np.random.default_rng(seed), at_marks=True)
    assert YARD.mark_at(layout.start) in {mark.name for mark in YARD.marks}
    assert YARD.goal.x[0] <= layout.goal.x <= YARD.goal.x[1]
    assert YARD.mark_at(layout.goal) is None


def test_every_mark_is_used() -> None:
    found = {YARD.mark_at(draw(YARD, "empty", np.random.default_rng(seed), at_marks=True).start) for seed in range(60)}
    assert found == {mark.name for mark in YARD.marks}


def test_no_marks_no_layouts_at_marks() -> None:
    bare = YARD.model_copy(update={"marks": ()})
    with pytest.raises(InputError, match="marks in yard 'parcel yard' is 0, must be at least 1"):
        draw(bare, "moving", np.random.default_rng(0), at_marks=True)


def test_yard_too_full_is_said_so() -> None:
    full = YARD.model_copy(update={"spacing": 5.0})
    with pytest.raises(InputError, match="no room for its carts: no place kept 5 m"):
        draw(full, "moving", np.random.default_rng(0))


def test_unknown_grade_is_refused() -> None:
    with pytest.raises(InputError, match="must be one of empty, parked, moving"):
        draw(YARD, "storm", np.random.default_rng(0))
