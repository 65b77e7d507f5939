"""The drive law keeps its bounds and turns the right way."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.drive import DriveLaw, limit_change, limit_wheels, wrap
from fieldnav_ros.model import Robot
from fieldnav_ros.parameters import DEFAULTS, TABLE, Numbers

CART = Robot(radius=0.06, track=0.10, wheel_speed=1.2, wheel_accel=4.0)
angles = st.floats(-np.pi, np.pi, exclude_max=True)
bends = st.floats(-60.0, 60.0)
distances = st.floats(0.0, 5.0)
numbers = st.tuples(*(st.floats(row.low, row.high) for row in TABLE)).map(lambda values: Numbers(*values))


@given(angles, bends, distances, numbers)
def test_command_keeps_wheels_and_lateral_acceleration_within_their_bounds(
    error: float, bend: float, distance: float, chosen: Numbers
) -> None:
    """Bounds of Kim, Kim and Kwon (IEEE Trans. SMC-B 31(3), 2001): |v| + |w| L/2 <= v_max and |v w| <= R_m."""
    v, w = (float(part) for part in DriveLaw(np.float64(bend), distance, chosen, CART)(np.float64(error)))
    assert 0.0 <= v <= chosen.arrival_gain * distance + 1e-12
    assert abs(v) + 0.5 * CART.track * abs(w) <= CART.wheel_speed * (1.0 + 1e-9)
    assert abs(v * w) <= chosen.lateral_accel * (1.0 + 1e-9)
    assert abs(w) <= 2.0 * CART.wheel_speed / CART.track * (1.0 + 1e-9)


@given(angles, numbers)
def test_without_bend_it_turns_towards_the_heading(error: float, chosen: Numbers) -> None:
    """REP-103: anticlockwise is positive. The rate is K_w times the root of the error, until the wheels end it."""
    _, w = DriveLaw(0.0, 1.0, chosen, CART)(np.float64(error))
    most = 2.0 * CART.wheel_speed / CART.track
    wanted = min(chosen.steer_gain * np.sqrt(abs(error)), most)
    assert float(w) == pytest.approx(np.copysign(wanted, error), abs=1e-12)


@pytest.mark.parametrize(("distance", "speed"), [(10.0, 1.2), (0.1, 0.2), (0.0, 0.0)])
def test_straight_ahead_it_drives_at_full_speed_until_the_distance_left_slows_it(distance: float, speed: float) -> None:
    """Closed form: v = min(v_max, K_p d), with K_p = 2 / s."""
    chosen = DEFAULTS.model_copy(update={"arrival_gain": 2.0}).numbers()
    v, w = DriveLaw(np.float64(0.0), distance, chosen, CART)(np.float64(0.0))
    assert float(v) == pytest.approx(speed)
    assert float(w) == 0.0


@given(st.floats(-1e4, 1e4))
def test_wrap_is_the_angle_of_the_same_direction(angle: float) -> None:
    """Against numpy's arc tangent of sine and cosine."""
    wrapped = float(wrap(angle))
    assert -np.pi <= wrapped < np.pi + 1e-12
    assert np.exp(1j * wrapped) == pytest.approx(np.exp(1j * angle), abs=1e-8)


@given(st.floats(-20, 20), st.floats(-200, 200))
def test_limited_wheels_keep_the_curvature(v: float, w: float) -> None:
    left, right = (float(part) for part in limit_wheels(np.float64(v), np.float64(w), CART))
    assert max(abs(left), abs(right)) <= CART.wheel_speed * (1.0 + 1e-12)
    speed, turn = 0.5 * (left + right), (right - left) / CART.track
    assert speed * w == pytest.approx(turn * v, abs=1e-9)
    assert speed * v >= 0.0


@given(st.floats(-2, 2), st.floats(-2, 2), st.floats(0, 1))
def test_limited_change_goes_as_far_as_it_may_and_no_further(wanted: float, before: float, most: float) -> None:
    got = float(limit_change(np.float64(wanted), np.float64(before), most))
    assert abs(got - before) <= most + 1e-12
    assert got == pytest.approx(wanted) or abs(got - before) == pytest.approx(most)
