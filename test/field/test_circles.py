"""The default approach, one turning circle at a time, against closed forms.

Straight line and arc: Dubins, Amer. J. Math. 79, 1957. Goal frame; axes and signs of REP-103.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from fieldnav_ros.field.approach import TIGHTEST, circle_course, open_radius, way_left

RADIUS = st.floats(0.03, 0.40)
SOFTNESS = st.floats(0.005, 0.50)
PLACE = st.floats(-2.0, 2.0)
TURN = st.floats(-math.pi, math.pi)
SIDE = st.sampled_from([1.0, -1.0])
FEW = settings(deadline=None, max_examples=80)
HARD = 1e-9
"""A softness that leaves the tangents."""


def to_centre(x: float, y: float, side: float, radius: float) -> float:
    return math.hypot(x, y - side * radius)


def heading(x: float, y: float, side: float, radius: float, softness: float) -> float:
    return float(circle_course(x, y, side, radius, softness, 1.0, 0.0)[0])


@pytest.mark.parametrize(
    ("x", "y", "expected"),
    [
        (-1.0, 0.0, 1.0),  # straight in
        (1.0, 0.4, 1.0 + 0.2 * math.pi),  # along the top of the circle against +x, then half of it
        (0.2, -1.0, 1.2 + 0.2 * 1.5 * math.pi),  # up along its right, then over the top and down: three quarters
        (-0.2, 1.0, 0.8 + 0.2 * 0.5 * math.pi),  # down along its left, then a quarter
    ],
)
def test_way_left_where_it_can_be_read_off(x: float, y: float, expected: float) -> None:
    """Anticlockwise circle of radius 0.2 about (0, 0.2); mirrored places have the same way on the other side."""
    assert way_left(x, y, 1.0, 0.2) == pytest.approx(expected)
    assert way_left(x, -y, -1.0, 0.2) == pytest.approx(expected)


@FEW
@given(x=PLACE, y=PLACE, side=SIDE, radius=RADIUS)
def test_the_heading_is_the_steepest_way_down(x: float, y: float, side: float, radius: float) -> None:
    """Without softness a metre driven is a metre less to go: grad(way left) = -(cos, sin)(heading), of length 1."""
    assume(to_centre(x, y, side, radius) > radius + 0.05)
    step = 1e-6
    way = way_left(np.array([x, x + step, x]), np.array([y, y, y + step]), side, radius)
    straight = math.sqrt(to_centre(x, y, side, radius) ** 2 - radius**2)
    assume(0.01 < (way[0] - straight) / radius < 2 * math.pi - 0.31)  # elsewhere an arc of nearly a full turn is none
    slope = (way[1:] - way[0]) / step
    direction = heading(x, y, side, radius, HARD)
    assert slope == pytest.approx([-math.cos(direction), -math.sin(direction)], abs=2e-3)


@FEW
@given(theta=TURN, side=SIDE, radius=RADIUS, softness=SOFTNESS, further=st.floats(0.0, 2.0))
def test_softness_turns_the_tangent_outwards(
    theta: float, side: float, radius: float, softness: float, further: float
) -> None:
    """Heading theta + side (pi - asin q): q = 1 on the circle (its tangent), and larger with the softness outside."""
    rho = radius + further
    x, y = rho * math.cos(theta), side * radius + rho * math.sin(theta)
    q = min((radius + softness) / (rho + softness), 0.9999)
    expected = theta + side * (math.pi - math.asin(q))
    assert math.cos(heading(x, y, side, radius, softness) - expected) == pytest.approx(1.0, abs=1e-3)
    assert q >= radius / rho - 1e-4


@FEW
@given(x=PLACE, y=PLACE, side=SIDE, radius=RADIUS, softness=SOFTNESS, along=TURN)
def test_the_bend_is_the_change_of_heading_per_metre(
    x: float, y: float, side: float, radius: float, softness: float, along: float
) -> None:
    """Against a difference quotient, away from the circle, where the heading has a kink, and from its centre."""
    gap = abs(to_centre(x, y, side, radius) - radius)
    assume(gap > 0.02)
    assume(to_centre(x, y, side, radius) > 0.01)
    cos, sin, step = math.cos(along), math.sin(along), 1e-6
    _, bend = circle_course(x, y, side, radius, softness, cos, sin)
    turned = heading(x + step * cos, y + step * sin, side, radius, softness) - heading(x, y, side, radius, softness)
    assert bend == pytest.approx(math.remainder(turned, 2 * math.pi) / step, abs=0.02 + 0.01 * abs(bend))


@FEW
@given(x=PLACE, y=PLACE, side=SIDE, radius=RADIUS)
def test_from_inside_a_smaller_circle_passes_through_robot_and_goal(
    x: float, y: float, side: float, radius: float
) -> None:
    """Its centre is as far from the robot as from the goal; from outside the circle stays as it is."""
    assume(abs(to_centre(x, y, side, radius) - radius) > 1e-6)
    got = float(open_radius(x, y, side, radius))
    if to_centre(x, y, side, radius) > radius:
        assert got == radius
    else:
        assert TIGHTEST <= got <= radius
        assert got == TIGHTEST or math.hypot(x, y - side * got) == pytest.approx(got)
