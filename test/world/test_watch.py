"""Judging from reports: as the batch on the same floor, and what a report has that a simulation has not."""

from __future__ import annotations

import numpy as np
import pytest
from episodes import EXACT, YARD, as_nodes_do

from fieldnav_ros.crowd import NANO, Crowd, Reading, Sighting
from fieldnav_ros.model import Layout, OutcomeKind, Pose
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.world.batch import simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.world.watch import EpisodeWatch, Rules, Ruling


@pytest.mark.parametrize("grade", ["empty", "parked"])
def test_a_session_and_the_batch_agree_on_every_episode(grade: str) -> None:
    """Same kind, and the same time but for one pose: the judge sees every second step of the plant.

    Moving carts are left out: their velocities are given in the batch and tracked in a session.
    """
    layouts = draw_many(YARD, grade, 6, seed=7)
    batch = simulate(YARD, grade, layouts, [DEFAULTS])
    for column, layout in enumerate(layouts):
        _, outcome = as_nodes_do(YARD, layout, YARD.grade(grade).time_limit)
        expected = batch.outcome(0, column)
        assert outcome.kind == expected.kind
        assert 0.0 <= outcome.time - expected.time + 1e-9 < 0.02


def test_a_tampered_plant_is_the_batchs_plant() -> None:
    """Delay, mismatch, slip and weak motors act in a session as they do in the batch."""
    plant = YARD.plant.model_copy(
        update={"accel_scale": 0.6, "command_delay": 0.06, "wheel_mismatch": 0.08, "slip": 0.1}
    )
    yard = YARD.model_copy(update={"plant": plant})
    layouts = draw_many(yard, "empty", 6, seed=3)
    batch = simulate(yard, "empty", layouts, [DEFAULTS])
    for column, layout in enumerate(layouts):
        (_, outcome), expected = as_nodes_do(yard, layout, 5.0), batch.outcome(0, column)
        assert outcome.kind == expected.kind
        assert 0.0 <= outcome.time - expected.time + 1e-9 < 0.02


LAYOUT = Layout(start=Pose(x=0.5, y=0.8, yaw=0.0), goal=Pose(x=1.5, y=0.8, yaw=0.0))


def watch(limit: float = 5.0, crowd: Crowd | None = None) -> EpisodeWatch:
    rules = Rules(YARD.robot, YARD.floor, YARD.arrival, limit)
    return EpisodeWatch(LAYOUT, rules, crowd or Crowd(EXACT, YARD.cart_radius))


def drive(through: EpisodeWatch, *poses: tuple[float, float, float]) -> Ruling | None:
    """Report poses (s, x, y), facing along x; return the first ruling."""
    for seconds, x, y in poses:
        stamp = round(seconds * NANO)
        ruling = through.look_at(Reading(stamp, x, y, 0.0), stamp)
        if ruling is not None:
            return ruling
    return None


def along(first: float, last: float, start: float, speed: float = 1.0) -> list[tuple[float, float, float]]:
    count = round(abs(last - first) / speed / 0.02)
    way = np.linspace(first, last, count + 1)
    return [(start + 0.02 * number, float(x), 0.8) for number, x in enumerate(way)]


def test_time_runs_from_the_first_pose_near_the_start() -> None:
    """Poses from before the reset, far from the start, are not the episode's."""
    ruling = drive(watch(), (1.0, 2.0, 0.3), (1.02, 2.0, 0.3), *along(0.5, 1.6, start=3.0))
    assert ruling is not None
    assert ruling.outcome.kind == OutcomeKind.ARRIVED
    assert ruling.outcome.time == pytest.approx(0.98, abs=0.021)
    assert ruling.stamp / NANO == pytest.approx(3.0 + ruling.outcome.time)


def test_standing_ends_at_the_limit_exactly() -> None:
    poses = [(0.02 * number, 0.5, 0.8) for number in range(60)]
    ruling = drive(watch(limit=1.0), *poses)
    assert ruling is not None
    assert (ruling.outcome.kind, ruling.outcome.time) == (OutcomeKind.TIMEOUT, 1.0)


def test_one_wrong_pose_changes_nothing_but_a_lifted_robot_is_void() -> None:
    way = along(0.5, 1.6, start=0.0)
    outlier = [*way[:10], (way[10][0], 2.3, 0.1), *way[11:]]
    ruling, undisturbed = drive(watch(), *outlier), drive(watch(), *way)
    assert ruling is not None
    assert ruling == undisturbed
    lifted = drive(watch(), *way[:10], *((0.2 + 0.02 * number, 2.0, 0.3) for number in range(40)))
    assert lifted is not None
    assert lifted.outcome.kind == OutcomeKind.VOID
    assert "jumped" in lifted.detail


def test_contact_between_two_poses_is_not_missed() -> None:
    """A cart that crosses the robot's way between two samples: the judge looks along the segment."""
    crowd = Crowd(EXACT, 0.06)
    looking = watch(crowd=crowd)
    assert drive(looking, (0.0, 0.5, 0.8)) is None
    for seconds, y in ((0.0, 0.60), (0.2, 1.0)):
        crowd.see(Sighting(round(seconds * NANO), np.array([[0.5], [y]])), round(seconds * NANO))
    ruling = drive(looking, (0.2, 0.5, 0.8))
    assert ruling is not None
    assert ruling.outcome.kind == OutcomeKind.CONTACT
