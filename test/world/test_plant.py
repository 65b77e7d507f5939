"""The plant against closed forms and SciPy's solve_ivp. Axes and signs: REP-103."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from fieldnav_ros.model import Robot
from fieldnav_ros.world.plant import STEP, Delay, Motion, PlantRows, arc, step
from fieldnav_ros.yard import Plant

ROBOT = Robot(radius=0.06, track=0.10, wheel_speed=1.2, wheel_accel=4.0)
IDEAL = PlantRows.of([Plant()])
SPEED = st.floats(-2.0, 2.0)
RATE = st.floats(-30.0, 30.0)
FEW = settings(deadline=None, max_examples=50)


def standing(yaw: float = 0.0, x: float = 0.0, y: float = 0.0) -> Motion:
    return Motion.at_rest(np.array([x]), np.array([y]), np.array([yaw]))


def moving(v: float, w: float, yaw: float = 0.0) -> Motion:
    """Return a robot at the origin whose wheels turn as v and w ask."""
    half = 0.5 * ROBOT.track * w
    return standing(yaw)._replace(left=np.array([v - half]), right=np.array([v + half]))


def run(motion: Motion, v: float, w: float, steps: int, rows: PlantRows = IDEAL, grip: float = 1.0) -> list[Motion]:
    states = [motion]
    for _ in range(steps):
        states.append(step(states[-1], np.array([v]), np.array([w]), ROBOT, rows, grip))
    return states


def pose(motion: Motion) -> tuple[float, float, float]:
    return float(motion.x[0]), float(motion.y[0]), float(motion.yaw[0])


# arcs


@FEW
@given(yaw=st.floats(-7.0, 7.0), radius=st.floats(-5.0, 5.0), turned=st.floats(-1.0, 1.0))
def test_arc_is_the_circles(yaw: float, radius: float, turned: float) -> None:
    """Closed form: about a centre ``radius`` to the left, x = r(sin b - sin a), y = r(cos a - cos b)."""
    x, y, end = arc(0.5, -0.5, yaw, radius * turned, turned)
    tolerance = 1e-10 if abs(turned) <= 1.0 else 3e-8
    assert end == yaw + turned
    assert x == pytest.approx(0.5 + radius * (math.sin(end) - math.sin(yaw)), abs=5 * tolerance + 1e-14)
    assert y == pytest.approx(-0.5 + radius * (math.cos(yaw) - math.cos(end)), abs=5 * tolerance + 1e-14)


@pytest.mark.parametrize(("turned", "error"), [(1.0, 1e-10), (2.0, 3e-8)])
def test_arc_keeps_the_stated_error(turned: float, error: float) -> None:
    """Chord of a unit circle: 2 sin(turned/2) over an arc of ``turned``."""
    x, y, _ = arc(0.0, 0.0, 0.0, turned, turned)
    assert abs(math.hypot(x, y) - 2 * math.sin(turned / 2)) <= error * turned


@pytest.mark.parametrize(("v", "w"), [(0.5, 2.0), (0.5, -2.0), (-0.4, 3.0), (0.0, 5.0), (1.2, 0.0), (0.3, 15.0)])
def test_steady_command_drives_an_exact_circle(v: float, w: float) -> None:
    """Closed form after 100 steps at constant wheel speeds, yaw unwrapped."""
    x, y, yaw = pose(run(moving(v, w, 0.4), v, w, 100)[-1])
    end = 0.4 + w * 100 * STEP
    if w:
        expected = (v / w * (math.sin(end) - math.sin(0.4)), v / w * (math.cos(0.4) - math.cos(end)))
    else:
        expected = (v * math.cos(0.4), v * math.sin(0.4))
    assert (x, y) == pytest.approx(expected, abs=1e-9)
    assert yaw == pytest.approx(end, abs=1e-12)


@pytest.mark.parametrize(
    ("yaw", "v", "w", "moved"),
    [
        (0.0, 0.5, 0.0, (1, 0, 0)),
        (math.pi / 2, 0.5, 0.0, (0, 1, 0)),
        (0.0, 0.0, 1.0, (0, 0, 1)),
        (0.0, 0.5, 1.0, (1, 1, 1)),
    ],
)
def test_axes_and_signs(yaw: float, v: float, w: float, moved: tuple[int, int, int]) -> None:
    """REP-103: x forward, y left, positive yaw anticlockwise; a left turn needs the right wheel faster."""
    end = run(standing(yaw), v, w, 20)[-1]
    x, y, turned = pose(end)
    assert tuple(int(np.sign(round(value, 9))) for value in (x, y, turned - yaw)) == moved
    assert np.sign(end.right - end.left)[0] == np.sign(w)


# acceleration


@pytest.mark.parametrize(("v", "w"), [(1.0, 0.0), (0.6, 4.0), (-0.5, 6.0), (0.0, -10.0)])
def test_start_from_rest_follows_the_differential_equation(v: float, w: float) -> None:
    """SciPy's solve_ivp on x' = v cos yaw, y' = v sin yaw, yaw' = w, wheels ramping at their acceleration."""
    half = 0.5 * ROBOT.track * w
    wanted = np.array([v - half, v + half])

    def slope(t: float, state: np.ndarray) -> tuple[float, float, float]:
        left, right = np.sign(wanted) * np.minimum(ROBOT.wheel_accel * t, np.abs(wanted))
        speed = (left + right) / 2
        return speed * math.cos(state[2]), speed * math.sin(state[2]), (right - left) / ROBOT.track

    exact = solve_ivp(slope, (0.0, 1.0), (0.0, 0.0, 0.0), max_step=0.002, rtol=1e-9, atol=1e-12)
    got = pose(run(standing(), v, w, round(1.0 / STEP))[-1])
    assert got[:2] == pytest.approx(exact.y[:2, -1], abs=3e-4)
    assert got[2] == pytest.approx(exact.y[2, -1], abs=1.1e-3)


@pytest.mark.parametrize("scale", [0.5, 1.0, 2.0])
def test_nothing_moves_faster_than_acceleration_and_top_speed_allow(scale: float) -> None:
    """Closed form from rest at full command: a t^2/2, then v_max (t - v_max/2a); never ahead of it at any step.

    Turned round it is the bound on any time of arrival: distance/v_max + v_max/2a.
    """
    accel, top = scale * ROBOT.wheel_accel, ROBOT.wheel_speed
    for number, state in enumerate(run(standing(), 5.0, 0.0, 100, PlantRows.of([Plant(accel_scale=scale)]))):
        t = number * STEP
        bound = accel * t * t / 2 if t < top / accel else top * (t - top / (2 * accel))
        assert float(state.x[0]) <= bound + 1e-12
        assert float(state.x[0]) == pytest.approx(bound, abs=accel * STEP**2 / 2)


@FEW
@given(
    commands=st.lists(st.tuples(SPEED, RATE), min_size=1, max_size=30),
    scale=st.floats(0.1, 2.0),
    mismatch=st.floats(-0.3, 0.3),
)
def test_wheel_limits_hold_at_every_step(commands: list[tuple[float, float]], scale: float, mismatch: float) -> None:
    rows = PlantRows.of([Plant(accel_scale=scale, wheel_mismatch=mismatch)])
    state = standing()
    for v, w in commands:
        after = step(state, np.array([v]), np.array([w]), ROBOT, rows)
        for wheel in ("left", "right"):
            old, new = float(getattr(state, wheel)[0]), float(getattr(after, wheel)[0])
            assert abs(new) <= ROBOT.wheel_speed + 1e-12
            assert abs(new - old) <= scale * ROBOT.wheel_accel * STEP + 1e-12
        gone = math.hypot(float(after.x[0] - state.x[0]), float(after.y[0] - state.y[0]))
        assert gone <= ROBOT.wheel_speed * (1 + abs(mismatch) / 2) * STEP + 1e-12
        state = after


# departures from the ideal


@pytest.mark.parametrize("mismatch", [-0.3, -0.08, 0.08, 0.3])
def test_mismatch_is_right_over_left_less_one(mismatch: float) -> None:
    """Closed form: wheels told the same speed v differ by m about a mean of v, so yaw' = v m/(1 + m/2)/track.

    A faster right wheel turns the robot anticlockwise (REP-103).
    """
    v = 0.5
    end = run(moving(v, 0.0), v, 0.0, 10, PlantRows.of([Plant(wheel_mismatch=mismatch)]))[-1]
    turned = float(end.yaw[0])
    travelled = v * 10 * STEP
    right, left = travelled + turned * ROBOT.track / 2, travelled - turned * ROBOT.track / 2
    assert right / left == pytest.approx(1 + mismatch, rel=1e-9)
    radius = travelled / turned
    assert (float(end.x[0]), float(end.y[0])) == pytest.approx(
        (radius * math.sin(turned), radius * (1 - math.cos(turned))), abs=1e-9
    )


@FEW
@given(v=st.floats(0.05, 1.0), w=st.floats(-3.0, 3.0), grip=st.floats(0.5, 1.0))
def test_grip_shortens_travel_and_turn_alike(v: float, w: float, grip: float) -> None:
    """Half the grip, half the arc: the curvature stays (closed form)."""
    full, lost = (run(moving(v, w), v, w, 1, grip=share)[-1] for share in (1.0, grip))
    assert float(lost.yaw[0]) == pytest.approx(grip * float(full.yaw[0]), abs=1e-12)
    assert float(np.hypot(lost.x, lost.y)[0]) == pytest.approx(grip * float(np.hypot(full.x, full.y)[0]), rel=1e-3)
    assert (lost.left, lost.right) == (full.left, full.right)


@FEW
@given(
    delays=st.lists(st.integers(0, 6), min_size=1, max_size=5),
    steps=st.integers(1, 25),
    dropped=st.integers(0, 20),
    data=st.data(),
)
def test_delay_is_a_queue_per_row(delays: list[int], steps: int, dropped: int, data: st.DataObject) -> None:
    """Against plain lists: what comes out at step n is what went in at n - delay, zero before that."""
    keep = np.array(data.draw(st.lists(st.booleans(), min_size=len(delays), max_size=len(delays))))
    ring, rows = Delay(np.array(delays)), np.arange(len(delays))
    fed: list[np.ndarray] = []
    for number in range(steps):
        if number == dropped:
            ring.keep(keep)
            rows = rows[keep]
        fed.append(100.0 * (number + 1) + np.arange(len(delays)))
        v, w = ring.pass_through(fed[-1][rows], -fed[-1][rows])
        expected = [fed[number - delays[row]][row] if number >= delays[row] else 0.0 for row in rows]
        assert v.tolist() == expected
        assert (-w).tolist() == expected


def test_rows_of_a_plant_count_delay_in_steps() -> None:
    rows = PlantRows.of([Plant(command_delay=0.06, accel_scale=0.6, wheel_mismatch=0.08), Plant()], repeat=2)
    assert rows.delay.tolist() == [6, 6, 0, 0]
    assert rows.accel_scale.tolist() == [0.6, 0.6, 1.0, 1.0]
    assert rows.mismatch.tolist() == [0.08, 0.08, 0.0, 0.0]
