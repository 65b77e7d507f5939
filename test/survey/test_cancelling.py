"""Cancelling points are found where the published formulas put them, and none in the default field."""

from __future__ import annotations

import math

import numpy as np
import pytest
from episodes import YARD
from field.test_weaknesses import TIGHT, WIDE, cancelling_point
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from fieldnav_ros.model import Obstacle, Pose
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.survey.cancelling import cancelling_points
from fieldnav_ros.survey.scene import Scene, vectors

TOLERANCE = 1e-6
"""How far (m) a point may be from the derived one; both come from root finders that stop at about 1e-12 m."""


def scene(numbers: ParameterSet, goal: tuple[float, float, float], *carts: tuple[float, float], model: str) -> Scene:
    parked = tuple(Obstacle(x=x, y=y, radius=YARD.cart_radius) for x, y in carts)
    return Scene(YARD, numbers, model, Pose(x=goal[0], y=goal[1], yaw=goal[2]), parked)


@settings(max_examples=20)
@given(
    radius=st.floats(0.03, 0.2), softness=st.floats(0.005, 0.2), yaw=st.floats(-math.pi, math.pi),
    x=st.floats(1.1, 1.3), y=st.floats(0.7, 0.9),
)  # fmt: skip
def test_the_published_spirals_cancel_where_the_formulas_say(
    radius: float, softness: float, yaw: float, x: float, y: float
) -> None:
    """Ahead of the goal, on its axis, at the distance derived from the formulas; to within TOLERANCE.

    Derivation (in full at ``cancelling_point``), goal frame: on y = 0 both weights are 1/2 and the spirals mirror each
    other, so the sum has no y part; its x part is cos(theta + a) of the left one, with theta = -atan(d_e/x) and
    a = (pi/2)(2 - (d_e + K_r)/(rho + K_r)), rho^2 = x^2 + d_e^2. It is 0 where theta + a = pi/2.
    """
    ahead = cancelling_point(radius, softness)
    derived = x + ahead * math.cos(yaw), y + ahead * math.sin(yaw)
    where = scene(DEFAULTS.model_copy(update={"turn_radius": radius, "turn_softness": softness}), (x, y, yaw),
                  model="published")  # fmt: skip
    (low_x, high_x), (low_y, high_y) = YARD.floor.x, YARD.floor.y
    inside = low_x <= derived[0] <= high_x and low_y <= derived[1] <= high_y
    found = cancelling_points(where)
    assert len(found) == inside
    assert all(math.dist(point, derived) < TOLERANCE for point in found)


@pytest.mark.parametrize("numbers", [DEFAULTS, WIDE, TIGHT], ids=["defaults", "wide", "tight"])
def test_avoidance_cancels_the_approach_before_an_obstacle_behind_the_goal(numbers: ParameterSet) -> None:
    """A cart d = 0.18 m behind the goal, on its axis: avoidance points back along the axis, the approach forwards.

    Both unit vectors, so they cancel where the weight exp(-(R - d_min)^2 / 2 delta^2) is 1/2, that is at
    R = d_min + delta sqrt(2 ln 2) before the cart. A point counts where the robot can be there.
    """
    found = cancelling_points(scene(numbers, (1.6, 0.8, 0.0), (1.78, 0.8), model="published"))
    apart = numbers.guard_distance + numbers.guard_fade * math.sqrt(2.0 * math.log(2.0))
    assert min(math.dist(point, (1.78 - apart, 0.8)) for point in found) < TOLERANCE


def test_beside_an_obstacle_the_approach_still_cancels() -> None:
    """Blended fields are normalised, which hides that the approach cancels: it is found all the same."""
    ahead = cancelling_point(DEFAULTS.turn_radius, DEFAULTS.turn_softness)
    found = cancelling_points(scene(DEFAULTS, (1.2, 0.8, 0.0), (0.5, 0.4), model="published"))
    assert min(math.dist(point, (1.2 + ahead, 0.8)) for point in found) < TOLERANCE
    drowned = cancelling_points(scene(DEFAULTS, (1.2, 0.8, 0.0), (1.3 + ahead, 0.8), model="published"))
    assert all(math.dist(point, (1.2 + ahead, 0.8)) > TOLERANCE for point in drowned)


@pytest.mark.parametrize("carts", [(), ((1.2, 0.9), (1.0, 0.5), (1.4, 1.2))], ids=["empty", "parked"])
@pytest.mark.parametrize("numbers", [DEFAULTS, TIGHT], ids=["defaults", "tight"])
def test_the_default_field_cancels_nowhere(numbers: ParameterSet, carts: tuple[tuple[float, float], ...]) -> None:
    """None is found; where the published field has one, the default leads on, the same 1 mm before and behind."""
    where = scene(numbers, (1.825, 0.8, 0.0), *carts, model="foresight")
    assert cancelling_points(where) == []
    ahead = 1.825 + cancelling_point(numbers.turn_radius, numbers.turn_softness)
    along, across = vectors(where, np.array([ahead - 1e-3, ahead + 1e-3]), np.full(2, 0.8))
    assert along[0] * along[1] + across[0] * across[1] > 0.99


def test_the_derived_points_are_zeros_by_another_root_finder() -> None:
    """The two derivations above against the field's own length: SciPy's brentq along the axis."""
    where = scene(DEFAULTS, (1.6, 0.8, 0.0), (1.78, 0.8), model="published")
    before = 1.78 - DEFAULTS.guard_distance - DEFAULTS.guard_fade * math.sqrt(2.0 * math.log(2.0))

    def along(x: float) -> float:
        return float(vectors(where, np.array([x]), np.array([0.8]))[0][0])

    assert brentq(along, before - 0.02, before + 0.02, xtol=1e-12) == pytest.approx(before, abs=TOLERANCE)
