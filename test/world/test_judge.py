"""The judge against dense sampling, and its rules one by one."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize_scalar

from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.world.carts import FAR
from fieldnav_ros.world.judge import RUNNING, Finding, Lookout, Track, arrived, look
from fieldnav_ros.yard import Arrival, Floor

OPEN = Floor(x=(-50.0, 50.0), y=(-50.0, 50.0), walled=False)
WALLED = Floor(x=(0.0, 2.4), y=(0.0, 1.6))
UNWALLED = Floor(x=(0.0, 2.4), y=(0.0, 1.6), walled=False)
TIGHT = Arrival(position=0.03, heading=0.25)
RADIUS = 0.06
PLACE = st.tuples(st.floats(-2.0, 2.0), st.floats(-2.0, 2.0))
ELSEWHERE = (40.0, 40.0, 0.0)


def track(x: float, y: float, yaw: float = 0.0) -> Track:
    return Track(np.array([x]), np.array([y]), np.array([yaw]))


def discs(*places: tuple[float, float], radius: float = 0.06) -> Obstacles:
    table = np.zeros((5, len(places), 1))
    for number, (x, y) in enumerate(places):
        table[:, number, 0] = x, y, 0.0, 0.0, radius
    return Obstacles(*table)


def judged(
    before: Any, now: Any, floor: Floor = OPEN, goal: Any = ELSEWHERE, carts: Any = (), moved: Any = None
) -> Finding:
    carts_before, carts_now = discs(*carts), discs(*(carts if moved is None else moved))
    return look(track(*before), track(*now), carts_before, carts_now, track(*goal), RADIUS, floor, TIGHT)


def code(finding: Finding) -> int:
    return int(finding.code[0])


@settings(deadline=None, max_examples=80)
@given(before=PLACE, now=PLACE, cart_before=PLACE, cart_now=PLACE)
def test_clearance_is_the_closest_approach_on_the_way(before: Any, now: Any, cart_before: Any, cart_now: Any) -> None:
    """Both move evenly; against SciPy's minimize_scalar and 1001 samples, ends included."""

    def gap(share: float) -> float:
        x, y = (a + share * (b - a) - c - share * (d - c) for a, b, c, d in zip(before, now, cart_before, cart_now))
        return math.hypot(x, y) - 0.06 - RADIUS

    sampled = min(gap(share) for share in np.linspace(0.0, 1.0, 1001))
    polished = minimize_scalar(gap, bounds=(0.0, 1.0), method="bounded", options={"xatol": 1e-10}).fun
    found = judged(before, now, carts=[cart_before], moved=[cart_now])
    assert found.clearance[0] == pytest.approx(min(sampled, polished), abs=1e-6)
    assert found.clearance[0] <= sampled + 1e-12
    assert code(found) == (OutcomeKind.CONTACT.code if found.clearance[0] < 0 else RUNNING)


def test_contact_between_two_samples_is_seen() -> None:
    """The robot passes right through a cart between two poses, far from it at both."""
    found = judged((-1.0, 0.0), (1.0, 0.0), carts=[(0.0, 0.05)])
    assert code(found) == OutcomeKind.CONTACT.code
    assert found.clearance[0] == pytest.approx(0.05 - 0.12)


def test_two_that_swap_places_side_by_side_do_not_touch() -> None:
    """Relative motion counts, not crossing paths."""
    crossing = judged((0.0, 0.0), (1.0, 0.0), carts=[(0.5, -1.0)], moved=[(0.5, 0.0)])
    assert code(crossing) == RUNNING
    assert crossing.clearance[0] == pytest.approx(math.sqrt(0.125) - 0.12)


def test_the_nearest_of_several_counts_and_discs_of_radius_0_do_not() -> None:
    carts = discs((0.0, 1.0), (0.0, 0.5), (0.0, 0.01))
    carts.radius[2] = 0.0
    at, goal = track(0.0, 0.0), track(*ELSEWHERE)
    found = look(at, at, carts, carts, goal, RADIUS, OPEN, TIGHT)
    assert found.clearance[0] == pytest.approx(0.5 - 0.12)
    carts.radius[:] = 0.0
    assert look(at, at, carts, carts, goal, RADIUS, OPEN, TIGHT).clearance[0] == math.inf
    assert judged((0.0, 0.0), (0.0, 0.0)).clearance[0] == math.inf


@pytest.mark.parametrize(
    ("place", "gap"),
    [((0.07, 0.8), 0.01), ((2.33, 0.8), 0.01), ((1.2, 0.07), 0.01), ((1.2, 1.53), 0.01), ((0.05, 0.8), -0.01)],
)
def test_walls_count_as_contact_on_every_side(place: tuple[float, float], gap: float) -> None:
    found = judged(place, place, WALLED)
    assert found.clearance[0] == pytest.approx(gap)
    assert code(found) == (OutcomeKind.CONTACT.code if gap < 0 else RUNNING)


@pytest.mark.parametrize("place", [(-0.01, 0.8), (2.41, 0.8), (1.2, -0.01), (1.2, 1.61)])
@pytest.mark.parametrize("floor", [WALLED, UNWALLED])
def test_centre_beyond_the_edge_is_off_the_floor(place: tuple[float, float], floor: Floor) -> None:
    assert code(judged((1.2, 0.8), place, floor)) == OutcomeKind.OFF_FLOOR.code


def test_without_walls_the_footprint_may_hang_over_the_edge() -> None:
    found = judged((0.01, 0.8), (0.01, 0.8), UNWALLED)
    assert code(found) == RUNNING
    assert found.clearance[0] == math.inf


# arrival


@pytest.mark.parametrize(
    ("before", "now", "there"),
    [
        ((0.1, 0.0, 0.0), (0.029, 0.0, 0.0), True),  # inside at the end
        ((0.1, 0.0, 0.0), (0.031, 0.0, 0.0), False),
        ((-0.5, 0.02, 0.0), (0.5, 0.02, 0.0), True),  # passes through
        ((-0.5, 0.04, 0.0), (0.5, 0.04, 0.0), False),  # passes by
        ((0.0, 0.0, 0.24), (0.0, 0.0, 0.24), True),
        ((0.0, 0.0, -0.26), (0.0, 0.0, -0.26), False),
        ((0.0, 0.0, 0.3), (0.0, 0.0, 0.2), True),  # turns on the spot into the tolerance
        ((0.0, 0.0, 0.3), (0.01, 0.0, 0.2), True),  # turns into it while leaving the middle
        ((0.0, 0.0, 0.3), (0.04, 0.0, 0.2), False),  # turns into it when it has left
        ((0.0, 0.0, math.pi), (0.0, 0.0, math.pi), False),
        ((-0.5, 0.0, 1.0), (0.5, 0.0, -1.0), True),  # heading between the samples, at the goal
        ((-0.5, 0.0, 0.0), (0.5, 0.0, 1.0), False),  # 0.5 rad off when it passes the goal
    ],
)
@pytest.mark.parametrize("turn", [0.0, 2.0, math.pi, -3.0])
@pytest.mark.parametrize("wound", [0.0, 2 * math.pi, -6 * math.pi])
def test_arrival_needs_place_and_heading_at_once(before: Any, now: Any, there: bool, turn: float, wound: float) -> None:
    """Wherever the goal faces and however often the robot has turned: yaw is an angle, not a number."""

    def placed(pose: tuple[float, float, float]) -> Track:
        x, y, yaw = pose
        cosine, sine = math.cos(turn), math.sin(turn)
        return track(1.0 + cosine * x - sine * y, 2.0 + sine * x + cosine * y, yaw + turn + wound)

    assert bool(arrived(placed(before), placed(now), track(1.0, 2.0, turn), TIGHT)[0]) is there


def test_contact_outranks_arrival_and_leaving_outranks_contact() -> None:
    goal = (1.0, 0.8, 0.0)
    assert code(judged((0.9, 0.8), (1.0, 0.8), WALLED, goal)) == OutcomeKind.ARRIVED.code
    assert code(judged((0.9, 0.8), (1.0, 0.8), WALLED, goal, carts=[(1.1, 0.8)])) == OutcomeKind.CONTACT.code
    off = judged((0.01, 0.8), (-0.01, 0.8), WALLED, (0.0, 0.8, 0.0), carts=[(0.0, 0.8)])
    assert code(off) == OutcomeKind.OFF_FLOOR.code


def test_rows_are_judged_each_for_itself() -> None:
    x = np.array([0.0, 1.0, 1.0, -0.1])
    at = Track(x, np.full(4, 0.8), np.zeros(4))
    goal = Track(np.full(4, 1.0), np.full(4, 0.8), np.array([0.0, 0.0, 3.0, 0.0]))
    empty = Obstacles.none(4)
    found = look(at, at, empty, empty, goal, RADIUS, UNWALLED, TIGHT)
    assert found.code.tolist() == [RUNNING, OutcomeKind.ARRIVED.code, RUNNING, OutcomeKind.OFF_FLOOR.code]


# many looks, thousands of rows


@settings(deadline=None, max_examples=60)
@given(seed=st.integers(0, 10**6), rows=st.integers(1, 400), carts=st.integers(0, 4), walled=st.booleans())
def test_a_lookout_finds_what_looks_find(seed: int, rows: int, carts: int, walled: bool) -> None:
    """Bit for bit, over a walk of robots and carts that ends some rows: near the goal, near carts, over the edge."""
    rng = np.random.default_rng(seed)
    floor = Floor(x=(0.0, 2.4), y=(0.0, 1.6), walled=walled)
    goal = Track(rng.uniform(0.3, 2.1, rows), rng.uniform(0.3, 1.3, rows), rng.uniform(-3.2, 3.2, rows))
    now = Track(goal.x + rng.normal(0, 0.1, rows), goal.y + rng.normal(0, 0.1, rows), goal.yaw + rng.normal(0, 1, rows))
    speed = rng.uniform(-0.5, 0.5, (2, carts, rows))
    radius = np.where(rng.random((carts, rows)) < 0.2, 0.0, 0.06)  # discs of radius 0 are no carts
    places = rng.uniform(0.0, 1.6, (2, carts, rows))
    far = np.where(radius > 0.0, places, FAR)
    crowd = Obstacles(far[0], far[1], speed[0], speed[1], radius)
    lookout = Lookout(0.06, floor, Arrival(), 0.018, 0.36, 0.01, 0.06)
    least, expected = np.full(rows, np.inf), np.full(rows, np.inf)
    for _ in range(12):
        before, crowd_before = now, crowd
        way, turned = rng.uniform(0, 0.018, rows), rng.uniform(-0.36, 0.36, rows)
        now = Track(now.x + way * np.cos(now.yaw), now.y + way * np.sin(now.yaw), now.yaw + turned)
        crowd = crowd._replace(x=crowd.x + 0.01 * crowd.vx, y=crowd.y + 0.01 * crowd.vy)
        found = look(before, now, crowd_before, crowd, goal, 0.06, floor, Arrival())
        running = expected >= 0.0
        expected = np.minimum(expected, found.clearance)
        ended = lookout.look(before, now, crowd_before, crowd, goal, least)
        assert np.array_equal(least, expected)
        codes = np.full(rows, RUNNING)
        codes[ended.rows] = ended.code
        assert np.array_equal(codes[running], found.code[running])
