"""Each known weakness of the published composition, shown on it, and the default field without it.

The published composition: Kim, Kim and Kwon, IEEE Trans. SMC-B 31(3), 2001; Lim, Choi, Kim and Kim, IFAC World
Congress 2008. Its numbers here are those from before this package had another field, or a set tuned for it on parked
carts; the default field has to do with the same ones.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from episodes import YARD, layout, ride
from scipy.optimize import brentq

from fieldnav_ros.field.approach import approach_vector
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.guide import Memory, Senses, guide
from fieldnav_ros.model import Layout, OutcomeKind
from fieldnav_ros.parameters import ParameterSet, stack
from fieldnav_ros.world.batch import simulate
from fieldnav_ros.world.layouts import draw_many

WIDE = ParameterSet(
    turn_radius=0.15, turn_softness=0.10, motion_lead=0.10, guard_distance=0.16, guard_fade=0.10, sidestep=0.30,
    steer_gain=5.0, arrival_gain=3.0, lateral_accel=1.5,
)  # fmt: skip
TIGHT = ParameterSet(
    turn_radius=0.054, turn_softness=0.047, motion_lead=0.17, guard_distance=0.098, guard_fade=0.041, sidestep=0.37,
    steer_gain=6.75, arrival_gain=10.0, lateral_accel=2.2,
)  # fmt: skip
SHORT_SIGHTED = ParameterSet(
    turn_radius=0.071, turn_softness=0.084, motion_lead=0.31, guard_distance=0.089, guard_fade=0.02, sidestep=0.26,
    steer_gain=8.1, arrival_gain=37.0, lateral_accel=6.9,
)  # fmt: skip
AHEAD = 0.30
"""Look-ahead (s) of the default field here: the published composition uses the same number otherwise."""


def same(numbers: ParameterSet) -> ParameterSet:
    """Return the numbers for the default field: the same but for the number that means another thing there."""
    return numbers.model_copy(update={"motion_lead": AHEAD})


def cancelling_point(radius: float, softness: float) -> float:
    """Return where on the goal's axis, ahead of the goal, the two published spirals cancel.

    Derivation, goal frame. On y = 0 the weights are 1/2 each and the spirals are mirror images, so their sum has no y
    part, and it is 0 where the x part cos(theta + a) of the left one is: theta + a = pi/2. For x > 0 the centre
    (0, d_e) is seen with theta = -atan(d_e / x) and rho = sqrt(x^2 + d_e^2) > d_e, where
    a = (pi/2)(2 - (d_e + K_r)/(rho + K_r)). Hence

        (pi/2) (1 - (d_e + K_r)/(rho + K_r)) = atan(d_e / x).

    From x = 0 on the left side rises from 0 towards pi/2 and the right side falls from pi/2 to 0: one solution.
    """

    def difference(x: float) -> float:
        rho = math.hypot(x, radius)
        return math.pi / 2 * (1 - (radius + softness) / (rho + softness)) - math.atan(radius / x)

    return float(brentq(difference, 1e-9, 10.0, xtol=1e-12))


def heading(model: str, x: float, y: float, yaw: float, numbers: ParameterSet) -> float:
    """Return the heading at a place on an empty floor; the goal is in the middle and faces +x."""
    place = [np.array([value]) for value in (x, y, yaw, 1.2, 0.8, 0.0)]
    senses = Senses._make([*place, Obstacles.none(1)])
    return float(guide(senses, stack([numbers]), YARD.robot, YARD.floor, Memory.start(1), 0.02, model).heading[0])


@pytest.mark.parametrize(("radius", "softness"), [(0.15, 0.10), (0.08, 0.02), (0.054, 0.047)])
def test_cancelling_point_ahead_of_the_goal(radius: float, softness: float) -> None:
    """Published: length 0 there, headings 1 mm apart in opposite directions. Default: none, for any yaw."""
    x = cancelling_point(radius, softness)
    assert np.hypot(*approach_vector(x, 0.0, radius, softness)) < 1e-9
    near, far = (approach_vector(x + off, 0.0, radius, softness) for off in (-1e-3, 1e-3))
    assert near[0] * far[0] < 0
    numbers = WIDE.model_copy(update={"turn_radius": radius, "turn_softness": softness})
    across = [heading("published", 1.2 + x + off, 0.8, 0.0, numbers) for off in (-1e-3, 1e-3)]
    assert math.cos(across[1] - across[0]) < -0.99
    for yaw in (-2.0, 0.0, 1.0, 3.0):
        across = [heading("foresight", 1.2 + x + off, 0.8, yaw, numbers) for off in (-1e-3, 1e-3)]
        assert math.cos(across[1] - across[0]) > 0.99


@pytest.mark.parametrize(
    "carts",
    [[(1.2, 0.963), (1.2, 0.643)], [(1.2, 0.943), (1.2, 0.663)], [(1.2, 0.803), (1.2, 0.953), (1.2, 0.653)]],
    ids=["wide gate", "narrow gate", "row of three"],
)
def test_dithering(carts: list[tuple[float, ...]]) -> None:
    """Published: the heading flips over from pose to pose, again and again. Default: it decides, and arrives."""
    where = layout((0.4, 0.8, 0.0), (2.0, 0.8, 0.0), *carts)
    assert ride(where, WIDE, "published").flips() >= 9
    own = ride(where, same(WIDE), "foresight")
    assert own.kind is OutcomeKind.ARRIVED
    assert own.flips() <= 2


def test_only_the_nearest_counts() -> None:
    """Published: it turns away from the nearer cart into the other. Default: past both."""
    where = layout((0.4, 0.8, 0.0), (2.0, 0.8, 0.0), (1.1, 0.83), (1.25, 0.65))
    assert ride(where, TIGHT, "published").kind is OutcomeKind.CONTACT
    assert ride(where, same(TIGHT), "foresight").kind is OutcomeKind.ARRIVED


def test_head_on_stall() -> None:
    """A cart 0.18 m behind the goal. Published: its repulsion never lets the robot in. Default: it arrives."""
    where = layout((0.4, 0.8, 0.0), (1.6, 0.8, 0.0), (1.78, 0.8))
    assert ride(where, WIDE, "published").kind is OutcomeKind.TIMEOUT
    assert ride(where, same(WIDE), "foresight").kind is OutcomeKind.ARRIVED


def test_walls_are_no_obstacles() -> None:
    """Published: of 200 empty floors some end at a wall. Default: none does."""
    layouts = draw_many(YARD, "empty", 200, 4)
    assert wall_contacts(layouts, WIDE, "published") >= 3
    assert wall_contacts(layouts, same(WIDE), "foresight") == 0


def test_pocket() -> None:
    """A pocket of three carts before the goal. Published: it never gets out. Default: it finds out and round."""
    where = layout((0.4, 0.8, 0.0), (2.0, 0.8, 0.0), (1.2, 0.8), (1.1, 0.94), (1.1, 0.66))
    assert ride(where, WIDE, "published").kind is not OutcomeKind.ARRIVED
    assert ride(where, same(WIDE), "foresight").kind is OutcomeKind.ARRIVED


@pytest.mark.parametrize(
    ("start", "goal", "carts"),
    [
        ((0.65, 0.63, -1.17), (1.81, 1.05, 2.51), [(1.21, 0.80), (1.23, 0.55)]),
        ((0.18, 0.92, 0.21), (1.72, 0.80, 2.92), [(1.48, 0.84), (1.40, 0.60)]),
        ((0.75, 1.31, -1.82), (1.84, 1.05, -0.34), [(1.41, 1.19), (1.35, 0.94)]),
    ],
)
def test_a_gap_that_is_too_narrow_is_driven_round(
    start: tuple[float, ...], goal: tuple[float, ...], carts: list[tuple[float, ...]]
) -> None:
    """With small steps to the side nothing better than the gap is seen, until the robot has waited for a while."""
    where = layout(start, goal, *carts)  # type: ignore[arg-type]  # three numbers each
    assert ride(where, SHORT_SIGHTED, "foresight").kind is OutcomeKind.ARRIVED


def wall_contacts(layouts: list[Layout], numbers: ParameterSet, model: str) -> int:
    """Return how many episodes on the empty floor end in a contact."""
    return int((simulate(YARD, "empty", layouts, [numbers], model=model).code == OutcomeKind.CONTACT.code).sum())
