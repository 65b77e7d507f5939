"""Tracks: episodes run again go as they did in ``world.batch``, and measured tracks come first."""

from __future__ import annotations

import math

import numpy as np
import pytest
from report.conftest import Zoo
from report.ledgers import parcel_yard

from fieldnav_ros.guide import MODELS
from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.parameters import DEFAULTS, TABLE, ParameterSet
from fieldnav_ros.report.facts import Facts
from fieldnav_ros.report.record import read_record
from fieldnav_ros.report.replay import FloorTrack, replay
from fieldnav_ros.report.scenes import Ground, failure_scene, field_scene
from fieldnav_ros.world.batch import simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.yard import Plant

PLANTS = [
    Plant(),
    Plant(accel_scale=0.6, command_delay=0.06, wheel_mismatch=0.08),
    Plant(slip=0.1, pose_noise=0.004, yaw_noise=0.02, pose_loss=0.1, pose_rate=30.0),
]


@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("plant", PLANTS, ids=["ideal", "slow", "noisy"])
@pytest.mark.parametrize("grade", ["empty", "moving"])
def test_outcomes_are_those_of_the_batch_simulator(grade: str, plant: Plant, model: str) -> None:
    yard = parcel_yard().model_copy(update={"plant": plant})
    sets = [DEFAULTS, ParameterSet.from_array([row.from_unit(0.3) for row in TABLE])]
    layouts = draw_many(yard, grade, 6, seed=3)
    result = simulate(yard, grade, layouts, sets, model=model)
    limit = yard.grade(grade).time_limit
    rows = [(chosen, layout) for chosen in range(2) for layout in range(6)]
    tracks = replay(yard, [layouts[i] for _, i in rows], [sets[i] for i, _ in rows], model, [limit] * len(rows))
    for (chosen, layout), track in zip(rows, tracks):
        outcome = result.outcome(chosen, layout)
        assert track.kind is outcome.kind
        assert track.time == pytest.approx(outcome.time)


def test_a_track_runs_from_the_start_to_where_the_outcome_says() -> None:
    """Arrived: within the tolerance of the goal. Contact: a footprint at a wall or cart. Steps no longer than v dt."""
    yard = parcel_yard()
    layouts = draw_many(yard, "moving", 30, seed=5)
    seen = set()
    for layout, track in zip(layouts, replay(yard, layouts, [DEFAULTS] * 30, MODELS[0], [10.0] * 30)):
        assert (track.x[0], track.y[0]) == (layout.start.x, layout.start.y)
        steps = np.hypot(np.diff(track.x), np.diff(track.y))
        assert steps.max() <= yard.robot.wheel_speed * 0.01 + 1e-9
        if track.kind is OutcomeKind.ARRIVED:
            off = math.hypot(track.x[-1] - layout.goal.x, track.y[-1] - layout.goal.y)
            assert off <= yard.arrival.position + steps[-1]
        seen.add(track.kind)
    assert OutcomeKind.ARRIVED in seen


def test_rows_may_have_time_limits_of_their_own() -> None:
    yard = parcel_yard()
    layouts = draw_many(yard, "empty", 2, seed=1) * 2
    short, _, long, _ = replay(yard, layouts, [DEFAULTS] * 4, MODELS[0], [0.5, 0.5, 5.0, 5.0])
    assert short.kind is OutcomeKind.TIMEOUT
    assert short.time == pytest.approx(0.5)
    assert long.time > 0.5


def facts_of(zoo: Zoo, name: str) -> Facts:
    return read_record(zoo[name]).facts


def test_measured_tracks_say_where_episodes_ended(zoo: Zoo) -> None:
    """The seam for tracks out of bags: by episode id, before anything that a simulation says."""
    found = facts_of(zoo, "kept")
    failed = found.failures[0]
    track = FloorTrack(np.array([0.0, 1.0]), np.array([0.3, 1.1]), np.array([0.3, 0.7]), failed.kind)
    scene = failure_scene(found, Ground.of(found), {failed.id: track})
    assert scene.measured == 1
    assert [item.track for item in scene.items] == [track] + [None] * (scene.total - 1)
    shown = field_scene(found, Ground.of(found), {})
    assert shown is not None
    runs = [item for item in found.episodes if item.layout == shown.layout and item.set.id == shown.views[0].set.id]
    shown = field_scene(found, Ground.of(found), {runs[0].id: track})
    assert shown is not None
    assert shown.views[0].main is track
    assert shown.views[0].measured
    assert not shown.views[1].measured


def test_a_simulated_record_is_known_by_being_repeated(zoo: Zoo) -> None:
    found = facts_of(zoo, "by_simulation")
    scene = failure_scene(found, Ground.of(found), {})
    assert scene.repeated
    assert all(item.track is not None and item.track.kind is item.kind for item in scene.items)
    other = failure_scene(facts_of(zoo, "kept"), Ground.of(facts_of(zoo, "kept")), {})
    assert not other.repeated
    assert all(item.track is None for item in other.items)


def test_an_unknown_field_or_yard_is_not_guessed(zoo: Zoo) -> None:
    for name in ("without_about", "hostile", "empty"):
        found = facts_of(zoo, name)
        assert field_scene(found, Ground.of(found), {}) is None
