"""The batched simulator: rows independent of each other, physics' bound on time, common practice's order of grades."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import Phase, given, settings
from hypothesis import strategies as st

from fieldnav_ros.errors import InputError
from fieldnav_ros.guide import Advice, Memory
from fieldnav_ros.model import Layout, Obstacle, OutcomeKind, Pose
from fieldnav_ros.parameters import DEFAULTS, TABLE, ParameterSet
from fieldnav_ros.resources import config_path
from fieldnav_ros.world import batch
from fieldnav_ros.world.batch import BatchResult, simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.world.noise import record
from fieldnav_ros.world.plant import STEP
from fieldnav_ros.yard import Plant, Yard, load_yard

YARD = load_yard(config_path("yards/parcel_yard.yaml"))
SETS = st.builds(
    lambda units: ParameterSet.from_array([row.from_unit(u) for row, u in zip(TABLE, units)]),
    st.lists(st.floats(0.0, 1.0), min_size=len(TABLE), max_size=len(TABLE)),
)
PLANTS = st.builds(
    Plant,
    accel_scale=st.floats(0.3, 2.0), command_delay=st.floats(0.0, 0.2), wheel_mismatch=st.floats(-0.1, 0.1),
    slip=st.sampled_from([0.0, 0.2]), pose_noise=st.sampled_from([0.0, 0.005]), yaw_noise=st.sampled_from([0.0, 0.02]),
    pose_loss=st.sampled_from([0.0, 0.3]), pose_rate=st.sampled_from([20.0, 30.0, 50.0, 100.0]),
)  # fmt: skip
FEW = settings(
    deadline=None, max_examples=6, phases=[Phase.explicit, Phase.reuse, Phase.generate]
)  # shrinking would take minutes


def mixed(seed: int) -> list[Layout]:
    """Return layouts with many, few and no carts."""
    return draw_many(YARD, "moving", 4, seed) + [
        layout.model_copy(update={"obstacles": layout.obstacles[:count]})
        for count, layout in enumerate(draw_many(YARD, "parked", 3, seed + 1))
    ]


def cell(result: BatchResult, row: int, column: int) -> tuple[int, float, float]:
    return int(result.code[row, column]), float(result.time[row, column]), float(result.clearance[row, column])


# rows are independent


@FEW
@given(seed=st.integers(0, 1000), sets=st.lists(SETS, min_size=2, max_size=3), data=st.data())
def test_a_result_does_not_depend_on_the_rows_beside_it(
    seed: int, sets: list[ParameterSet], data: st.DataObject
) -> None:
    """Exactly: alone, in a batch, whatever plants, pose rates and numbers of carts the neighbours have."""
    layouts = mixed(seed)
    plants = [data.draw(PLANTS) for _ in layouts]
    together = simulate(YARD, "moving", layouts, sets, plants, time_limit=1.5)
    row = data.draw(st.integers(0, len(sets) - 1))
    for column, layout in enumerate(layouts):
        alone = simulate(YARD, "moving", [layout], [sets[row]], [plants[column]], time_limit=1.5)
        assert cell(alone, 0, 0) == cell(together, row, column)


@pytest.mark.parametrize(
    ("name", "value"),
    [("CHUNK", 1), ("CHUNK", 3), ("COMPACT_AT", 0.0), ("COMPACT_AT", 2.0), ("TAPE_CELLS", 1000)],
)
def test_a_result_does_not_depend_on_chunks_and_compaction(
    monkeypatch: pytest.MonkeyPatch, name: str, value: int
) -> None:
    layouts = mixed(5)
    plants = [Plant(slip=0.1, pose_noise=0.003, pose_loss=0.2, command_delay=0.01 * i) for i in range(len(layouts))]
    brisk = DEFAULTS.model_copy(update={"arrival_gain": 20.0, "lateral_accel": 6.0})
    sets = [brisk, brisk.model_copy(update={"steer_gain": 9.0})]
    usual = simulate(YARD, "moving", layouts, sets, plants, time_limit=3.0)
    monkeypatch.setattr(batch, name, value)
    other = simulate(YARD, "moving", layouts, sets, plants, time_limit=3.0)
    assert len(np.unique(usual.code)) > 1  # rows leave at different times
    for part in ("code", "time", "clearance"):
        assert np.array_equal(getattr(other, part), getattr(usual, part)), part
    assert other.steps == usual.steps


def test_rows_are_sets_and_columns_are_layouts() -> None:
    layouts, sets = draw_many(YARD, "empty", 5, 1), [DEFAULTS, DEFAULTS.model_copy(update={"arrival_gain": 1.0})]
    result = simulate(YARD, "empty", layouts, sets)
    assert result.code.shape == result.time.shape == result.clearance.shape == (2, 5)
    assert cell(simulate(YARD, "empty", layouts[3:4], sets[1:]), 0, 0) == cell(result, 1, 3)
    assert result.outcome(1, 3).time == result.time[1, 3]
    assert result.share(OutcomeKind.ARRIVED).tolist() == np.mean(result.code == 0, axis=1).tolist()


def test_another_noise_seed_gives_another_run() -> None:
    layouts = draw_many(YARD, "moving", 8, 1)
    others = [layout.model_copy(update={"seed": layout.seed + 1}) for layout in layouts]
    plants = [Plant(pose_noise=0.005, slip=0.1)] * 8
    one, two = (simulate(YARD, "moving", each, [DEFAULTS], plants) for each in (layouts, others))
    assert np.any(one.clearance != two.clearance)


# physics


@FEW
@given(seed=st.integers(0, 10**6), one=SETS, scale=st.floats(0.3, 1.5), mismatch=st.floats(-0.1, 0.1))
def test_no_arrival_is_faster_than_physics(seed: int, one: ParameterSet, scale: float, mismatch: float) -> None:
    """From rest: time >= distance/v_max + v_max/2a_max (closed form of constant acceleration, then top speed).

    The distance is that to the edge of the arrival tolerance, for there the clock stops. The form holds where
    the distance is long enough to reach top speed, v_max^2/2a_max, as on this floor it is.
    """
    layouts = draw_many(YARD, "empty", 40, seed)
    plant = Plant(accel_scale=scale, wheel_mismatch=mismatch)
    result = simulate(YARD, "empty", layouts, [one], [plant] * len(layouts))
    top, accel = YARD.robot.wheel_speed, YARD.robot.wheel_accel * scale
    for column, layout in enumerate(layouts):
        way = math.hypot(layout.goal.x - layout.start.x, layout.goal.y - layout.start.y) - YARD.arrival.position
        if result.code[0, column] == OutcomeKind.ARRIVED.code and way >= top**2 / (2 * accel):
            assert result.time[0, column] >= way / top + top / (2 * accel) - 1e-9


def full_speed(*_: Any, **__: Any) -> Advice:
    return Advice(np.zeros(1), np.full(1, 1.2), np.zeros(1), Memory.start(1))


def test_the_bound_on_time_is_sharp(monkeypatch: pytest.MonkeyPatch) -> None:
    """A robot told to go straight at full speed meets it to within the step in which it arrives."""
    monkeypatch.setattr(batch, "guide", full_speed)
    layout = Layout(start=Pose(x=0.2, y=0.8, yaw=0.0), goal=Pose(x=2.0, y=0.8, yaw=0.0))
    result = simulate(YARD, "empty", [layout], [DEFAULTS])
    bound = (1.8 - 0.03) / 1.2 + 1.2 / (2 * 4.0)
    assert result.outcome(0, 0).kind is OutcomeKind.ARRIVED
    assert bound <= result.time.item() <= bound + STEP + 1e-9


def test_outcomes_and_their_times_follow_from_the_motion(monkeypatch: pytest.MonkeyPatch) -> None:
    """Straight on at full speed into what stands there; times by the closed form as above."""
    monkeypatch.setattr(batch, "guide", full_speed)
    start, goal = Pose(x=0.2, y=0.8, yaw=0.0), Pose(x=2.2, y=0.2, yaw=0.0)
    cart = Obstacle(x=1.2, y=0.8, radius=0.06)
    open_yard = YARD.model_copy(update={"floor": YARD.floor.model_copy(update={"walled": False})})

    def run(yard: Yard, limit: float, *carts: Obstacle) -> tuple[Any, ...]:
        layout = Layout(start=start, goal=goal, obstacles=carts)
        outcome = simulate(yard, "moving", [layout], [DEFAULTS], time_limit=limit).outcome(0, 0)
        return outcome.kind, outcome.time, outcome.clearance

    def when(way: float) -> float:
        return math.ceil((way / 1.2 + 0.15) / STEP) * STEP

    kind, time, gap = run(YARD, 10.0, cart)
    assert (kind, time) == (OutcomeKind.CONTACT, pytest.approx(when(1.0 - 0.12), abs=1.1 * STEP))
    assert gap is not None
    assert -0.012 <= gap < 0
    kind, time, gap = run(YARD, 10.0)
    assert (kind, time) == (OutcomeKind.CONTACT, pytest.approx(when(2.2 - 0.06), abs=1.1 * STEP))
    kind, time, gap = run(open_yard, 10.0)
    assert (kind, time, gap) == (OutcomeKind.OFF_FLOOR, pytest.approx(when(2.2), abs=1.1 * STEP), None)
    passed = run(open_yard, 1.5, Obstacle(x=1.0, y=1.0, radius=0.06))
    assert passed == (OutcomeKind.TIMEOUT, pytest.approx(1.5), pytest.approx(0.2 - 0.12))  # least gap, not the last
    kind, time, gap = run(open_yard, 0.5, cart)
    assert (kind, time) == (OutcomeKind.TIMEOUT, pytest.approx(0.5))
    assert gap == pytest.approx(1.0 - 0.12 - 1.2 * (0.5 - 0.15), abs=1e-6)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_lost_pose_leaves_the_command_as_it_was(monkeypatch: pytest.MonkeyPatch, seed: int) -> None:
    """Nothing moves before the first pose that comes through; from there on the closed form as above."""
    monkeypatch.setattr(batch, "guide", full_speed)
    layout = Layout(start=Pose(x=0.2, y=0.8, yaw=0.0), goal=Pose(x=2.0, y=0.8, yaw=0.0), seed=seed)
    plant = Plant(pose_loss=0.9, pose_rate=100.0)
    first = int(np.argmin(record([layout], [plant], 500).lost[:, 0])) * STEP
    assert first > 0
    bound = first + (1.8 - 0.03) / 1.2 + 1.2 / (2 * 4.0)
    assert bound <= simulate(YARD, "empty", [layout], [DEFAULTS], [plant]).time.item() <= bound + STEP + 1e-9


@pytest.mark.parametrize(("rate", "expected"), [(100.0, 100), (50.0, 50), (20.0, 20), (30.0, 30), (70.0, 70)])
def test_guidance_is_asked_at_the_pose_rate(monkeypatch: pytest.MonkeyPatch, rate: float, expected: int) -> None:
    """Each time with the seconds since the last pose: whole steps, on the average one over the rate."""
    asked: list[float] = []

    def count(senses: Any, numbers: Any, robot: Any, floor: Any, memory: Any, dt: float, *_: Any) -> Advice:
        asked.append(float(np.max(dt)))
        return Advice(np.zeros(1), np.zeros(1), np.zeros(1), memory)

    monkeypatch.setattr(batch, "guide", count)
    simulate(YARD, "empty", draw_many(YARD, "empty", 1, 1), [DEFAULTS], [Plant(pose_rate=rate)], time_limit=1.0)
    assert len(asked) == expected
    assert asked == pytest.approx([1.0 / rate] * expected, abs=STEP)
    assert sum(asked) == pytest.approx(1.0, abs=STEP)


@pytest.mark.parametrize(
    ("plant", "differs"),
    [
        (Plant(accel_scale=0.6), lambda usual, other: other.time.mean() > usual.time.mean()),
        (Plant(command_delay=0.12), lambda usual, other: not np.array_equal(other.time, usual.time)),
        (Plant(pose_loss=0.9), lambda usual, other: other.time.mean() > usual.time.mean()),
    ],
)
def test_a_worse_plant_is_felt(plant: Plant, differs: Callable[[BatchResult, BatchResult], bool]) -> None:
    layouts = draw_many(YARD, "empty", 60, 2)
    usual, other = (
        simulate(YARD, "empty", layouts, [DEFAULTS], [each] * 60) for each in (Plant(), plant)
    )  # fmt: skip
    assert differs(usual, other)


def test_harder_floors_take_longer() -> None:
    """Common practice, the reason for limits of 5, 7 and 10 s: arrivals on a floor with carts take longer."""
    mean = {}
    for grade in ("empty", "parked", "moving"):
        layouts = draw_many(YARD, "moving" if grade == "moving" else "parked", 200, 4)
        if grade == "empty":
            layouts = [layout.model_copy(update={"obstacles": ()}) for layout in layouts]
        result = simulate(YARD, grade, layouts, [DEFAULTS])
        mean[grade] = float(np.mean(np.where(result.code == OutcomeKind.ARRIVED.code, result.time, 10.0)))
    assert mean["empty"] < mean["parked"]
    assert mean["empty"] < mean["moving"]


# refusals


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"layouts": []}, "number of layouts is 0, must be at least 1"),
        ({"sets": []}, "number of parameter sets is 0, must be at least 1"),
        ({"plants": []}, "number of plants is 0, must be that of the layouts, 2"),
        ({"grade": "storm"}, "'storm', must be one of empty, parked, moving"),
        ({"time_limit": 0.0}, "time limit is 0.0, must be > 0"),
        ({"time_limit": math.nan}, "time limit is nan, must be > 0"),
        ({"time_limit": 601.0}, "time limit is 601.0, must be > 0 and at most 600 s"),
    ],
)
def test_refusals_name_value_and_bound(change: dict[str, Any], says: str) -> None:
    usual = {"yard": YARD, "grade": "empty", "layouts": draw_many(YARD, "empty", 2, 1), "sets": [DEFAULTS]}
    with pytest.raises(InputError, match=says):
        simulate(**{**usual, **change})
