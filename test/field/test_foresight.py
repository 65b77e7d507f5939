"""Looking ahead, against the simulator's plant and carts, and against what can be worked out by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest
from episodes import YARD
from hypothesis import given, settings
from hypothesis import strategies as st

from fieldnav_ros.drive import DriveLaw, wrap
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.field.foresight import EASE, LOOKS, MARGIN, Course, Robots, Zones, look_ahead
from fieldnav_ros.parameters import DEFAULTS, Numbers, ParameterSet
from fieldnav_ros.world import carts as others
from fieldnav_ros.world.plant import STEP, Motion, PlantRows, step
from fieldnav_ros.yard import Floor, Plant

ROBOT, FLOOR = YARD.robot, YARD.floor
FEW = settings(deadline=None, max_examples=60)


def robots(x: float, y: float, yaw: float = 0.0, left: float = 0.0, right: float = 0.0) -> Robots:
    return Robots(*(np.array([value]) for value in (x, y, yaw, left, right, 5.0)))


def crowd(*discs: tuple[float, float, float, float, float]) -> Obstacles:
    return Obstacles(*(np.array(column)[:, None] for column in zip(*discs))) if discs else Obstacles.none(1)


def rows(numbers: ParameterSet) -> Numbers:
    return Numbers(*(np.array([value]) for value in numbers.numbers()))


def thin(numbers: ParameterSet) -> Numbers:
    return Numbers(*np.array(rows(numbers), np.float32))


def touch_at(seen: Zones, x: float, y: float) -> tuple[float, bool]:
    """Return depth and touching at a place that is kept for all looks, as they are at the first."""
    deep, touch = seen.along(np.broadcast_to(np.array([x, y], np.float32)[:, None, None], (LOOKS, 2, 1, 1)))
    return float(deep[0, 0, 0]), bool(touch[0, 0, 0] > 0.0)


def zones(robot: Robots, obstacles: Obstacles, numbers: ParameterSet = DEFAULTS, floor: Floor | None = FLOOR) -> Zones:
    return Zones.of(robot, obstacles, thin(numbers), ROBOT, floor)


def test_it_ends_where_the_plant_would_be() -> None:
    """Three looks against many steps of the plant under the same drive law, from any motion to any heading.

    A coarse thought: half of all ends within 1 cm and 0.1 rad, nine of ten within 4 cm and 0.6 rad.
    """
    rng = np.random.default_rng(1)
    off, turned = [], []
    for _ in range(300):
        yaw, facing = rng.uniform(-math.pi, math.pi, 2)
        left, right = rng.uniform(-1.2, 1.2, 2)
        lead, steer = rng.uniform(0.1, 0.4), rng.uniform(3.0, 10.0)
        numbers = DEFAULTS.model_copy(update={"motion_lead": lead, "steer_gain": steer})
        start = robots(1.2, 0.8, yaw, left, right)
        course = Course(np.array([[facing]]), np.array([[0.0]]), 1.0, 5.0)
        ahead = look_ahead(start, course, zones(start, crowd(), numbers), thin(numbers), ROBOT)
        motion, plant = Motion(*(part.copy() for part in start[:5])), PlantRows.of([Plant()])
        for _ in range(round(lead / STEP)):
            v, w = DriveLaw(0.0, start.distance, rows(numbers), ROBOT, EASE)(wrap(facing - motion.yaw))
            motion = step(motion, v, w, ROBOT, plant)
        off.append(math.hypot(ahead.x.item() - motion.x[0], ahead.y.item() - motion.y[0]))
        turned.append(abs(float(wrap(ahead.yaw.item() - motion.yaw[0]))))
    assert np.quantile(off, 0.5) < 0.01
    assert np.quantile(off, 0.9) < 0.04
    assert np.quantile(turned, 0.5) < 0.1
    assert np.quantile(turned, 0.9) < 0.6


@FEW
@given(x=st.floats(0.1, 2.3), y=st.floats(0.1, 1.5), vx=st.floats(-0.5, 0.5), vy=st.floats(-0.5, 0.5))
def test_obstacles_are_where_the_simulated_carts_will_be(x: float, y: float, vx: float, vy: float) -> None:
    """Turned back at walls as they are; source of the carts' rule: ``world.carts``, checked against closed forms."""
    start, cart = robots(1.2, 0.8), crowd((x, y, vx, vy, 0.06))
    seen = zones(start, cart, DEFAULTS.model_copy(update={"motion_lead": 0.6}))
    for look in range(LOOKS):
        for _ in range(20):
            cart = others.move(cart, FLOOR, STEP)
        assert start.x + seen.places[look, 0] == pytest.approx(cart.x, abs=1e-5)
        assert start.y + seen.places[look, 1] == pytest.approx(cart.y, abs=1e-5)


@pytest.mark.parametrize("radius", [0.06, 0.12, 0.03])
@pytest.mark.parametrize(("guard", "fade"), [(0.16, 0.05), (0.2, 0.1), (0.12, 0.01)])
def test_a_zone_is_0_at_its_outer_edge_and_1_at_its_inner(radius: float, guard: float, fade: float) -> None:
    """By definition: d_min and d_min + 2 delta for an obstacle of the robot's size, others by their own."""
    numbers = DEFAULTS.model_copy(update={"guard_distance": guard, "guard_fade": fade})
    start = robots(1.2, 0.8)
    seen = zones(start, crowd((1.2, 0.8, 0.0, 0.0, radius)), numbers, None)
    inner = guard + radius - ROBOT.radius
    for distance, expected in ((inner, 1.0), (inner + 2 * fade, 0.0)):
        assert touch_at(seen, distance, 0.0)[0] == pytest.approx(expected, abs=2e-4 / fade)
    touch = ROBOT.radius + radius + MARGIN
    for distance, touches in ((touch - 1e-4, True), (touch + 1e-4, False)):
        assert touch_at(seen, 0.0, distance)[1] is touches


@pytest.mark.parametrize(("walled", "kept"), [(True, ROBOT.radius), (False, 0.0)])
def test_walls_and_edges_are_kept_off(walled: bool, kept: float) -> None:
    """A wall must not be touched by the footprint; an edge without walls must not be passed by the centre."""
    floor = FLOOR.model_copy(update={"walled": walled})
    start = robots(0.5, 0.8)
    seen = zones(start, crowd(), DEFAULTS, floor)
    for gap, touches in ((kept + MARGIN - 1e-4, True), (kept + MARGIN + 1e-4, False)):
        for x, y in ((gap - 0.5, 0.0), (2.4 - gap - 0.5, 0.0), (0.0, gap - 0.8), (0.0, 1.6 - gap - 0.8)):
            assert touch_at(seen, x, y)[1] is touches
    wide = DEFAULTS.guard_distance - ROBOT.radius
    for gap, expected in ((wide, 1.0), (wide + DEFAULTS.guard_fade, 0.0)):
        assert touch_at(seen, gap - 0.5, 0.0)[0] == pytest.approx(expected, abs=1e-3)


def test_sooner_touches_weigh_more_and_a_clear_way_nothing() -> None:
    course = Course(np.array([[0.0], [math.pi]]), 0.0, 1.0, 5.0)
    found = {}
    for ahead in (0.2, 0.45):
        start = robots(1.2, 0.8, 0.0, 1.0, 1.0)
        obstacles = crowd((1.2 + ahead, 0.8, 0.0, 0.0, 0.06))
        numbers = DEFAULTS.model_copy(update={"motion_lead": 0.5, "arrival_gain": 10.0, "lateral_accel": 10.0})
        seen = look_ahead(start, course, zones(start, obstacles, numbers), thin(numbers), ROBOT)
        found[ahead] = seen.touching[0].item()
    assert found[0.2] > found[0.45] > 0.0
    free = look_ahead(robots(1.2, 0.8), course, zones(robots(1.2, 0.8), crowd()), thin(DEFAULTS), ROBOT)
    assert (free.touching.sum(), free.crowding.sum()) == (0.0, 0.0)
