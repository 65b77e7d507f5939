"""The whole survey: starts as simulated, scenes that are refused."""

from __future__ import annotations

import math

import numpy as np
import pytest
from episodes import YARD
from field.test_weaknesses import WIDE, cancelling_point

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import KINDS, Obstacle, OutcomeKind, Pose
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.survey import survey as whole
from fieldnav_ros.survey.scene import Scene, clear, grid, headings, middle_of_goal
from fieldnav_ros.survey.starts import ALONG, HEADINGS, starts
from fieldnav_ros.survey.survey import survey
from fieldnav_ros.world.batch import simulate
from fieldnav_ros.world.paths import paths
from fieldnav_ros.yard import Grade


def cart(x: float, y: float) -> Obstacle:
    return Obstacle(x=x, y=y, radius=YARD.cart_radius)


SHORT = YARD.model_copy(update={"grades": {"any": Grade(time_limit=4.0)}})
STALL = Scene(SHORT, WIDE, "published", Pose(x=1.6, y=0.8, yaw=0.0), (cart(1.78, 0.8),))
GOAL = middle_of_goal(YARD)


def test_starts_cover_the_floor_clear_of_walls_and_carts() -> None:
    found = starts(STALL)
    places = sorted({(item.start.x, item.start.y) for item in found})
    assert len(found) == HEADINGS * len(places)
    x, y = np.array(places).T
    assert len(set(x)) == ALONG
    for value, (low, high) in ((x, YARD.floor.x), (y, YARD.floor.y)):
        assert value.min() - low == pytest.approx(high - value.max())
        assert value.min() - low > YARD.robot.radius
    assert (np.hypot(x - 1.78, y - 0.8) > YARD.robot.radius + YARD.cart_radius).all()
    yaws = sorted({item.start.yaw for item in found})
    assert np.allclose(np.diff(yaws), 2.0 * math.pi / HEADINGS)


@pytest.mark.parametrize("model", ["published", "foresight"])
def test_paths_end_as_the_batch_says(model: str) -> None:
    """The same starts by ``world.batch.simulate``: the same outcomes at the same times, carts or none."""
    for obstacles in ((), (cart(1.2, 0.9),)):
        layouts = starts(Scene(YARD, WIDE, model, GOAL, obstacles))[::17]
        driven = paths(YARD, layouts, WIDE, 4.0, model)
        batch = simulate(YARD, "empty", layouts, [WIDE], model=model, time_limit=4.0)
        assert (driven.code == batch.code[0]).all()
        assert np.allclose(0.01 * (driven.length - 1), batch.time[0])


def test_a_known_stall_fails_from_all_over_the_floor(monkeypatch: pytest.MonkeyPatch) -> None:
    """The published composition before a cart behind the goal; bit by bit as well as at once."""
    monkeypatch.setattr(whole, "KEPT", 1_000_000)
    found = survey(STALL)
    assert found.share_failed > 0.5
    assert {start.kind for start in found.failed} <= {KINDS[1], KINDS[2]}
    assert found.loops
    assert len(found.cancelling) == 2
    monkeypatch.setattr(whole, "KEPT", 200_000)
    again = survey(STALL)
    assert (again.starts, again.flips, len(again.loops)) == (found.starts, found.flips, len(found.loops))


def test_the_default_field_arrives_from_everywhere_on_an_empty_floor() -> None:
    found = survey(Scene(YARD, DEFAULTS, "foresight", GOAL))
    assert found.failed == ()
    assert all(start.kind is OutcomeKind.ARRIVED for start in found.starts)
    assert (found.cancelling, found.loops) == ((), ())


def test_the_published_field_has_its_cancelling_point_on_an_empty_floor() -> None:
    found = survey(Scene(YARD, DEFAULTS, "published", GOAL))
    ahead = GOAL.x + cancelling_point(DEFAULTS.turn_radius, DEFAULTS.turn_softness)
    ((x, y),) = found.cancelling
    assert math.dist((x, y), (ahead, GOAL.y)) < 1e-6


@pytest.mark.parametrize(
    ("goal", "carts", "said"),
    [
        ((2.39, 0.8), [], "x of the goal is 2.39, must be from 0.06 to 2.34"),
        ((1.8, -1.0), [], "y of the goal is -1.0, must be from 0.06 to 1.54"),
        ((1.8, 0.8), [(9.0, 0.8)], "x of the obstacle is 9.0, must be from 0 to 2.4"),
        ((1.8, 0.8), [(1.9, 0.8)], "must be more than 0.12 m for the robot to fit"),
    ],
)
def test_scenes_that_cannot_be_are_refused(
    goal: tuple[float, float], carts: list[tuple[float, float]], said: str
) -> None:
    scene = Scene(YARD, DEFAULTS, "foresight", Pose(x=goal[0], y=goal[1], yaw=0.0), tuple(cart(*at) for at in carts))
    with pytest.raises(InputError, match=said):
        survey(scene)


def test_a_floor_with_no_room_to_start_from_is_refused() -> None:
    """A goal region that just fits between walls where nothing else does."""
    floor = YARD.floor.model_copy(update={"y": (0.0, 0.13)})
    yard = YARD.model_copy(update={"floor": floor})
    with pytest.raises(InputError, match="number of places clear of walls and obstacles is 0"):
        survey(Scene(yard, DEFAULTS, "foresight", Pose(x=1.8, y=0.065, yaw=0.0)))


def test_headings_are_those_of_a_robot_that_faces_along_them() -> None:
    """The published field does not heed which way the robot faces; the default says the same when asked again."""
    x, y = (part.ravel() for part in np.meshgrid(*grid(YARD, 0.4)))
    assert clear(Scene(YARD, DEFAULTS, "published", GOAL), x, y).all()
    for model in ("published", "foresight"):
        heading = headings(Scene(YARD, DEFAULTS, model, GOAL), x, y)
        assert heading.shape == x.shape
        far = x < 1.0
        towards = np.arctan2(GOAL.y - y, GOAL.x - x)
        assert (np.cos(heading - towards)[far] > 0.5).all()  # from afar it leads to the goal, not away
