"""The published approach field against closed forms.

Source of all formulas: Kim, Kim and Kwon, IEEE Trans. SMC-B 31(3), 2001; Lim, Choi, Kim and Kim, IFAC World
Congress 2008. Axes and signs: REP-103 (x forward, y left, yaw anticlockwise).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from fieldnav_ros.field import approach_heading
from fieldnav_ros.field.approach import approach_vector, spiral_vector

RADIUS = st.floats(0.03, 0.40)
SOFTNESS = st.floats(0.005, 0.50)
PLACE = st.floats(-3.0, 3.0)
TURN = st.floats(-math.pi, math.pi)
SIDE = st.sampled_from([1, -1])
FEW = settings(deadline=None, max_examples=60)


def direction(angle: float) -> tuple[float, float]:
    return math.cos(angle), math.sin(angle)


def about(side: int, rho: float, theta: float, radius: float) -> tuple[float, float]:
    """Return the point at polar coordinates rho, theta about the centre of one side's circle."""
    return rho * math.cos(theta), side * radius + rho * math.sin(theta)


@FEW
@given(side=SIDE, theta=TURN, radius=RADIUS, softness=SOFTNESS)
def test_on_the_circle_the_spiral_is_its_tangent(side: int, theta: float, radius: float, softness: float) -> None:
    """At rho = d_e it is theta + pi/2 (anticlockwise) and theta - pi/2 (clockwise)."""
    got = spiral_vector(*about(side, radius, theta, radius), side, radius, softness)
    assert got == pytest.approx(direction(theta + side * math.pi / 2), abs=1e-6)


@FEW
@given(side=SIDE, theta=TURN, radius=RADIUS, softness=SOFTNESS)
def test_far_away_the_spiral_points_at_the_centre(side: int, theta: float, radius: float, softness: float) -> None:
    """For rho -> infinity it is theta +- pi, from the side of +-pi/2, with the gap (pi/2)(d_e + K_r)/(rho + K_r)."""
    rho = 1e5
    gap = math.pi / 2 * (radius + softness) / (rho + softness)
    got = spiral_vector(*about(side, rho, theta, radius), side, radius, softness)
    assert got == pytest.approx(direction(theta + side * (math.pi - gap)), abs=1e-9)
    assert got == pytest.approx(direction(theta + math.pi), abs=1e-4)


@FEW
@given(side=SIDE, theta=TURN, radius=RADIUS, softness=SOFTNESS)
def test_at_the_centre_the_spiral_points_outwards(side: int, theta: float, radius: float, softness: float) -> None:
    """At rho = 0 it is theta; met in the limit, since theta has no value at the centre itself."""
    got = spiral_vector(*about(side, 1e-10, theta, radius), side, radius, softness)
    assert got == pytest.approx(direction(theta), abs=1e-3)
    assert spiral_vector(0.0, side * radius, side, radius, softness) == pytest.approx((1.0, 0.0))


@FEW
@given(side=SIDE, theta=TURN, radius=RADIUS, softness=SOFTNESS)
def test_half_way_in_and_twice_as_far_out(side: int, theta: float, radius: float, softness: float) -> None:
    """At rho = d_e/4 theta +- pi/4; with K_r = d_e at rho = 3 d_e theta +- 3 pi/4 (by hand from the formulas)."""
    inside = spiral_vector(*about(side, radius / 4, theta, radius), side, radius, softness)
    assert inside == pytest.approx(direction(theta + side * math.pi / 4), abs=1e-9)
    outside = spiral_vector(*about(side, 3 * radius, theta, radius), side, radius, radius)
    assert outside == pytest.approx(direction(theta + side * 3 * math.pi / 4), abs=1e-9)


@FEW
@given(side=SIDE, x=PLACE, beyond=st.floats(0.0, 2.0), radius=RADIUS, softness=SOFTNESS)
def test_beyond_a_turning_circles_line_its_spiral_alone_counts(
    side: int, x: float, beyond: float, radius: float, softness: float
) -> None:
    """Above y = d_e the anticlockwise spiral alone, below y = -d_e the clockwise one."""
    y = side * (radius + beyond)
    alone = spiral_vector(x, y, side, radius, softness)
    assert approach_vector(x, y, radius, softness) == pytest.approx(alone, abs=1e-12)
    heading = float(approach_heading(x, y, radius, softness))
    assert direction(heading) == pytest.approx(alone, abs=1e-12)


@FEW
@given(x=PLACE, share=st.floats(-1.0, 1.0), radius=RADIUS, softness=SOFTNESS)
def test_between_the_lines_both_spirals_are_weighted(x: float, share: float, radius: float, softness: float) -> None:
    """Weights (y + d_e)/2d_e for the anticlockwise one and (d_e - y)/2d_e for the clockwise one."""
    y = share * radius
    left, right = (np.array(spiral_vector(x, y, side, radius, softness)) for side in (1, -1))
    expected = (1 + share) / 2 * left + (1 - share) / 2 * right
    assert np.array(approach_vector(x, y, radius, softness)) == pytest.approx(expected, abs=1e-9)


@FEW
@given(side=SIDE, x=PLACE, radius=RADIUS, softness=SOFTNESS)
def test_field_is_continuous_at_the_circles_lines(side: int, x: float, radius: float, softness: float) -> None:
    """At |y| = d_e; x keeps off the circle's centre, where no heading has a limit."""
    x = x if abs(x) > 1e-3 else 1e-3
    near = [approach_vector(x, side * radius + step, radius, softness) for step in (-1e-9, 0.0, 1e-9)]
    assert near[0] == pytest.approx(near[1], abs=1e-5)
    assert near[2] == pytest.approx(near[1], abs=1e-5)


@FEW
@given(x=PLACE, y=PLACE, radius=RADIUS, softness=SOFTNESS)
def test_mirrored_place_gives_mirrored_vector(x: float, y: float, radius: float, softness: float) -> None:
    along, across = approach_vector(x, y, radius, softness)
    assert approach_vector(x, -y, radius, softness) == pytest.approx((along, -across), abs=1e-9)


@FEW
@given(x=PLACE, y=PLACE, radius=RADIUS, softness=SOFTNESS, scale=st.floats(0.1, 10.0))
def test_only_ratios_of_lengths_count(x: float, y: float, radius: float, softness: float, scale: float) -> None:
    scaled = approach_vector(scale * x, scale * y, scale * radius, scale * softness)
    assert scaled == pytest.approx(approach_vector(x, y, radius, softness), abs=1e-6)


@pytest.mark.parametrize(
    ("x", "y", "heading"),
    [
        (0.0, 0.0, 0.0),  # at the goal, along it
        (0.0, 0.4, math.pi),  # on top of the left circle: anticlockwise, back over it
        (0.2, 0.2, math.pi / 2),  # right-hand side of the left circle
        (-0.2, 0.2, -math.pi / 2),  # its left-hand side: down towards the goal
        (0.0, -0.4, math.pi),
        (0.2, -0.2, -math.pi / 2),
        (-0.2, -0.2, math.pi / 2),
    ],
)
def test_axes_and_signs_at_points_seen_by_hand(x: float, y: float, heading: float) -> None:
    """d_e = 0.2, tangents of the two circles; REP-103: angles grow anticlockwise from x."""
    got = float(approach_heading(x, y, 0.2, 0.1))
    assert direction(got) == pytest.approx(direction(heading), abs=1e-6)
    assert -math.pi <= got <= math.pi


@pytest.mark.parametrize("start", [(-0.8, 0.0), (-0.8, 0.5), (-0.6, -0.6), (0.1, 0.9), (0.5, -0.7)])
def test_paths_along_the_field_reach_the_goal_in_its_heading(start: tuple[float, float]) -> None:
    """A point that follows the field at 1 m/s (SciPy's solve_ivp) crosses x = 0 close to the goal, heading along x."""

    def velocity(_: float, place: np.ndarray) -> tuple[float, float]:
        return direction(float(approach_heading(place[0], place[1], 0.15, 0.1)))

    def crossing(_: float, place: np.ndarray) -> float:
        return float(place[0]) if abs(place[1]) < 0.1 else -1.0

    crossing.terminal = True  # type: ignore[attr-defined]  # how solve_ivp is told to stop
    crossing.direction = 1  # type: ignore[attr-defined]  # as above
    path = solve_ivp(velocity, (0.0, 6.0), start, events=crossing, max_step=0.01, rtol=1e-6)
    assert path.status == 1
    assert path.y[:, -1] == pytest.approx((0.0, 0.0), abs=0.03)
    assert float(approach_heading(path.y[0, -1], path.y[1, -1], 0.15, 0.1)) == pytest.approx(0.0, abs=0.2)


def test_arrays_broadcast_and_agree_with_single_points() -> None:
    x, y = np.linspace(-1, 1, 5)[:, None], np.linspace(-1, 1, 4)
    radius = np.array([0.05, 0.1, 0.2, 0.3])
    got = approach_heading(x, y, radius, 0.1)
    assert got.shape == (5, 4)
    for row in range(5):
        for column in range(4):
            single = approach_heading(x[row, 0], y[column], radius[column], 0.1)
            assert got[row, column] == pytest.approx(float(single), abs=1e-12)
