"""The published avoidance field, against its closed forms.

Source of the formulas: Kim, Kim and Kwon, IEEE Trans. SMC-B 31(3), 2001; Lim, Choi, Kim and Kim, IFAC World
Congress 2008.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.field.avoidance import Obstacles, guard_weight, nearest_repulsion

places = st.floats(-3.0, 3.0)


def discs(*states: tuple[float, float, float, float]) -> Obstacles:
    """Return obstacles (x, y, vx, vy) for one row."""
    table = np.array(states, dtype=float).reshape(-1, 4).T[:, :, None]
    return Obstacles._make([*table, np.full(table.shape[1:], 0.06)])


def repulsion(x: float, y: float, obstacles: Obstacles, lead: float = 0.0) -> tuple[float, float, float]:
    got = nearest_repulsion(np.array([x]), np.array([y]), np.zeros(1), np.zeros(1), obstacles, lead)
    return float(got[0][0]), float(got[1][0]), float(got[2][0])


@given(places, places, places, places)
def test_standing_obstacle_pushes_straight_away(x: float, y: float, there_x: float, there_y: float) -> None:
    distance = math.hypot(x - there_x, y - there_y)
    away_x, away_y, got = repulsion(x, y, discs((there_x, there_y, 0, 0)))
    assert got == pytest.approx(distance, abs=1e-12)
    if distance > 1e-6:
        assert (away_x, away_y) == pytest.approx(((x - there_x) / distance, (y - there_y) / distance), abs=1e-9)


def test_nearest_of_several_counts_alone() -> None:
    near, both = repulsion(0, 0, discs((0, 1, 0, 0))), repulsion(0, 0, discs((2, 0, 0, 0), (0, 1, 0, 0)))
    assert both == near == (0.0, -1.0, 1.0)


def test_obstacle_is_shifted_by_lead_times_relative_velocity() -> None:
    """s = K_o (v_obstacle - v_robot): 0.5 s of 0.4 m/s across moves it 0.2 m across."""
    away_x, away_y, distance = repulsion(0, 0, discs((1.0, 0, 0, 0.4)), lead=0.5)
    assert distance == pytest.approx(math.hypot(1.0, 0.2))
    assert (away_x, away_y) == pytest.approx((-1.0 / distance, -0.2 / distance))


def test_shift_is_no_longer_than_the_distance() -> None:
    """s d / |s| where d < |s|: an obstacle coming straight at the robot is shifted onto it, not past it."""
    assert repulsion(0, 0, discs((0.1, 0, -1.0, 0)), lead=0.5)[2] == pytest.approx(0.0, abs=1e-12)


def test_no_obstacle_pushes_nothing() -> None:
    assert repulsion(0, 0, Obstacles.none(1)) == (0.0, 0.0, math.inf)


@pytest.mark.parametrize(
    ("distance", "weight"),
    [(0.0, 1.0), (0.16, 1.0), (0.21, math.exp(-0.5)), (0.26, math.exp(-2.0)), (math.inf, 0.0)],
)
def test_guard_weight_is_one_inside_and_a_gaussian_outside(distance: float, weight: float) -> None:
    """exp(-(R - d_min)^2 / 2 delta^2) at whole multiples of delta = 0.05 m beyond d_min = 0.16 m."""
    assert float(guard_weight(distance, 0.16, 0.05)) == pytest.approx(weight)
