"""Guidance in one moment: limits always hold, rows are alone, and the default does what the published field cannot."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.guide import DEFAULT_MODEL, MODELS, Memory, Senses, guide
from fieldnav_ros.model import Layout, Obstacle, OutcomeKind, Pose
from fieldnav_ros.parameters import DEFAULTS, TABLE, Numbers
from fieldnav_ros.resources import config_path
from fieldnav_ros.world.batch import simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.yard import load_yard

YARD = load_yard(config_path("yards/parcel_yard.yaml"))
ROBOT, FLOOR = YARD.robot, YARD.floor
anywhere = st.one_of(st.floats(-1.0, 3.0), st.floats(-1e300, 1e300))
angles = st.one_of(st.floats(-math.pi, math.pi), st.floats(-1e6, 1e6))
wheels = st.floats(-ROBOT.wheel_speed, ROBOT.wheel_speed)
numbers = st.tuples(*(st.floats(row.low, row.high) for row in TABLE)).map(lambda values: Numbers(*values))
discs = st.lists(st.tuples(anywhere, anywhere, st.floats(-5, 5), st.floats(-5, 5)), max_size=4)


def row(*values: float) -> list[np.ndarray]:
    return [np.array([value]) for value in values]


def crowd(states: list[tuple[float, float, float, float]]) -> Obstacles:
    table = np.array(states, dtype=float).reshape(-1, 4).T[:, :, None]
    return Obstacles._make([*table, np.full(table.shape[1:], 0.06)])


@pytest.mark.parametrize("model", MODELS)
@settings(max_examples=150)
@given(st.tuples(anywhere, anywhere, angles, anywhere, anywhere, angles), wheels, wheels, discs, numbers,
       st.floats(0.001, 0.2))  # fmt: skip
def test_any_finite_input_gives_a_finite_command_within_wheel_speed_and_acceleration(
    model: str, poses: tuple[float, ...], left: float, right: float,
    states: list[tuple[float, float, float, float]], chosen: Numbers, dt: float,
) -> None:  # fmt: skip
    memory = Memory.start(1)._replace(left=np.array([left]), right=np.array([right]))
    advice = guide(Senses._make([*row(*poses), crowd(states)]), chosen, ROBOT, FLOOR, memory, dt, model)
    heading, v, w = float(advice.heading[0]), float(advice.v[0]), float(advice.w[0])
    assert all(math.isfinite(value) for value in (heading, v, w))
    half = 0.5 * ROBOT.track * w
    for now, before in ((v - half, left), (v + half, right)):
        assert abs(now) <= ROBOT.wheel_speed * (1 + 1e-9)
        assert abs(now - before) <= ROBOT.wheel_accel * dt + 1e-9


@pytest.mark.parametrize("model", MODELS)
def test_rows_have_nothing_to_do_with_each_other(model: str) -> None:
    rng = np.random.default_rng(3)
    poses = [rng.uniform(0.2, 1.4, 20) for _ in range(6)]
    carts = Obstacles._make([*rng.uniform(-0.4, 1.4, (4, 3, 20)), np.full((3, 20), 0.06)])
    together = guide(Senses._make([*poses, carts]), DEFAULTS.numbers(), ROBOT, FLOOR, Memory.start(20), 0.02, model)
    for index in range(20):
        one = slice(index, index + 1)
        alone = guide(Senses._make([*(part[one] for part in poses), carts.take(one)]), DEFAULTS.numbers(), ROBOT,
                      FLOOR, Memory.start(1), 0.02, model)  # fmt: skip
        assert (alone.v[0], alone.w[0], alone.heading[0]) == (
            together.v[index], together.w[index], together.heading[index],
        )  # fmt: skip


def shares(model: str, layouts: list[Layout], grade: str = "parked") -> dict[OutcomeKind, float]:
    result = simulate(YARD, grade, layouts, [DEFAULTS], model=model)
    return {kind: float(result.share(kind)[0]) for kind in OutcomeKind}


@pytest.mark.parametrize("place", [0.7, 1.0, 1.3])
def test_cart_on_the_straight_way_is_passed(place: float) -> None:
    """Head-on, where a repulsion alone pushes back along the way (Koren and Borenstein, ICRA 1991)."""
    blocked = Layout(
        start=Pose(x=0.3, y=0.8, yaw=0.0), goal=Pose(x=1.8, y=0.8, yaw=0.0),
        obstacles=(Obstacle(x=place, y=0.8, radius=0.06),),
    )  # fmt: skip
    assert shares(DEFAULT_MODEL, [blocked])[OutcomeKind.ARRIVED] == 1.0


def test_walls_are_heeded_by_the_default_and_not_by_the_published_field() -> None:
    layouts = draw_many(YARD, "empty", 150, seed=21)
    assert shares("published", layouts, "empty")[OutcomeKind.CONTACT] > 0.02
    assert shares(DEFAULT_MODEL, layouts, "empty")[OutcomeKind.CONTACT] == 0.0


@pytest.mark.parametrize(("grade", "gain"), [("parked", 0.05), ("moving", 0.05)])
def test_more_episodes_arrive_and_fewer_touch_than_with_the_published_field(grade: str, gain: float) -> None:
    """Untuned defaults on the same 150 layouts; what tuned sets reach is for the benchmark to say."""
    layouts = draw_many(YARD, grade, 100, seed=22)
    published, default = shares("published", layouts, grade), shares(DEFAULT_MODEL, layouts, grade)
    assert default[OutcomeKind.ARRIVED] >= published[OutcomeKind.ARRIVED] + gain
    assert default[OutcomeKind.CONTACT] < published[OutcomeKind.CONTACT]


@pytest.mark.parametrize("delay", [0.06, 0.1])
def test_stated_delay_of_the_command_is_made_up_for(delay: float) -> None:
    """The same robot with late commands arrives more often when guidance is told how late they are."""
    late = YARD.model_copy(update={"plant": YARD.plant.model_copy(update={"command_delay": delay})})
    layouts = draw_many(late, "empty", 60, seed=23)
    quick = DEFAULTS.model_copy(update={"steer_gain": 9.0, "arrival_gain": 8.0, "lateral_accel": 4.0})
    untold, told = (
        float(simulate(late, "empty", layouts, [quick], command_delay=stated).share(OutcomeKind.ARRIVED)[0])
        for stated in (0.0, delay)
    )
    assert told > untold
