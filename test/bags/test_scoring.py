"""Recorded episodes judged again say what the judge said, in whatever order messages came and under other rules."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from bags.recordings import (
    BEGAN,
    LOCKSTEP,
    PACED,
    Line,
    asked,
    drive,
    lines_of,
    pose,
    recorded,
    text,
    write,
)  # fmt: skip
from episodes import EXACT, YARD

from fieldnav_ros.bags.scoring import OtherRules, number_of, score_bag
from fieldnav_ros.crowd import NANO, Reading
from fieldnav_ros.errors import InputError
from fieldnav_ros.judging import Judging, Patience
from fieldnav_ros.model import Layout, OutcomeKind, Pose
from fieldnav_ros.nodes.payloads import ObserveEpisode, StopEpisode, decode_request
from fieldnav_ros.world.layouts import draw_many

GRADES = ("empty", "parked", "moving")
NEAR = Layout(start=Pose(x=0.5, y=0.8, yaw=0.0), goal=Pose(x=1.1, y=0.8, yaw=0.0))


@pytest.mark.parametrize("about", [LOCKSTEP, PACED], ids=["lockstep", "paced"])
@pytest.mark.parametrize("grade", GRADES)
def test_the_same_judge_says_the_same_of_a_record(tmp_path: Path, grade: str, about: dict[str, str]) -> None:
    limit = YARD.grade(grade).time_limit
    for number, layout in enumerate(draw_many(YARD, grade, 3, seed=5)):
        path, outcome = recorded(tmp_path, f"{number:06d}.a.1", layout, limit, about=about)
        found = score_bag(path, YARD, decode_request)
        assert found.outcome == outcome
        assert found.number == number
        assert found.bad == 0
        assert found.t[-1] == pytest.approx(outcome.time)
        assert (found.x[0], found.y[0]) == pytest.approx((layout.start.x, layout.start.y))


def disordered(lines: list[Line]) -> list[Line]:
    """Swap poses and obstacles, let the first pose overtake the request, and the report overtake the last pose."""
    request, body, ends = lines[0], lines[1:-2], lines[-2:]
    swapped = [line for pair in zip(body[1::2], body[0::2]) for line in pair]
    return [request, *swapped[:-2], *ends, *swapped[-2:]]


def test_in_lockstep_the_order_of_messages_changes_nothing(tmp_path: Path) -> None:
    [layout] = draw_many(YARD, "moving", 1, seed=6)
    path, outcome = recorded(tmp_path, "1.a.1", layout, 8.0, change=disordered)
    assert score_bag(path, YARD, decode_request).outcome == outcome


def test_other_rules_make_another_outcome(tmp_path: Path) -> None:
    path, outcome = recorded(tmp_path, "1.a.1", NEAR, 8.0)
    assert outcome.kind is OutcomeKind.ARRIVED
    wider = score_bag(path, YARD, decode_request, OtherRules(arrival_position=0.2)).outcome
    assert wider is not None
    assert wider.time < outcome.time
    shorter = score_bag(path, YARD, decode_request, OtherRules(time_limit=0.5)).outcome
    assert shorter is not None
    assert (shorter.kind, shorter.time) == (OutcomeKind.TIMEOUT, 0.5)
    assert score_bag(path, YARD, decode_request, OtherRules(arrival_position=1e-4)).outcome is None, "it ends too early"


def test_a_stopped_episode_and_a_cut_recording_have_no_outcome(tmp_path: Path) -> None:
    seen, _ = drive(NEAR, 8.0)
    request = asked("1.a.1", NEAR, 8.0)
    lines = lines_of(request, seen, None)
    stopped = [*lines[:40], (0, lines[40][1], text(StopEpisode(episode="1.a.1"))), *lines[40:]]
    assert score_bag(write(tmp_path, "stopped", stopped), YARD, decode_request).outcome is None
    cut = score_bag(write(tmp_path, "cut", lines[:40]), YARD, decode_request)
    assert cut.outcome is None
    assert len(cut.t) == 19


def test_the_episode_begins_with_the_pose_that_the_live_judge_began_with(tmp_path: Path) -> None:
    """The request reached the judge five poses later than the recorder: its times are shorter by those."""
    seen, _ = drive(NEAR, 8.0)
    request = asked("1.a.1", NEAR, 8.0)
    judge = Judging(YARD, EXACT, YARD.cart_radius, Patience())
    judge.begin(NEAR, YARD.arrival, 8.0, 0.0)
    ruling = None
    for sighting, reading in seen[5:]:
        judge.sighting(sighting, sighting.stamp)
        ruling = ruling or judge.pose(reading, reading.stamp, reading.stamp / NANO)
    assert ruling is not None
    path = write(tmp_path, "late", lines_of(request, seen, ruling.outcome, ruling.stamp / NANO), PACED)
    assert score_bag(path, YARD, decode_request).outcome == ruling.outcome
    for report in ("[]", '{"source": "judge"}', '{"source": "judge", "stamp": 1e999, "time": 0}', "{", "[" * 5000):
        broken = [*lines_of(request, seen, None), (1, BEGAN + 10 * NANO, text(report))]
        natural = score_bag(write(tmp_path, f"b{len(report)}", broken, PACED), YARD, decode_request).outcome
        assert natural is not None
        assert natural.time == pytest.approx(ruling.outcome.time + 0.1)


def test_a_watched_episode_is_judged_like_any_other(tmp_path: Path) -> None:
    seen, outcome = drive(NEAR, 8.0)
    watched = ObserveEpisode(**asked("match.1", NEAR, 8.0).model_dump(exclude={"action"}))
    lines = lines_of(asked("match.1", NEAR, 8.0), seen, outcome)
    path = write(tmp_path, "match.1", [(0, BEGAN, text(watched)), *lines[1:]])
    found = score_bag(path, YARD, decode_request)
    assert (found.outcome, found.number) == (outcome, None)


def test_what_the_live_judge_ignores_is_ignored_and_counted(tmp_path: Path) -> None:
    def with_strangers(lines: list[Line]) -> list[Line]:
        wrong_frame = (2, lines[9][1], pose(Reading(NANO, 0.5, 0.8, 0.0), frame="elsewhere"))
        no_number = (2, lines[9][1], pose(Reading(2 * NANO, float("nan"), 0.8, 0.0)))
        return [lines[0], (0, BEGAN, text("{}")), *lines[1:10], wrong_frame, no_number, *lines[10:]]

    path, outcome = recorded(tmp_path, "1.a.1", NEAR, 8.0, change=with_strangers)
    found = score_bag(path, YARD, decode_request)
    assert found.outcome == outcome
    assert found.bad == 3


def test_silence_is_void_as_it_is_live(tmp_path: Path) -> None:
    """The judge's patience is 10 s without a pose, 30 s without one near the start (config/judge.yaml)."""
    request = asked("1.a.1", NEAR, 60.0)
    start = [(2, BEGAN + n, pose(Reading(n + 1, 0.5, 0.8, 0.0))) for n in range(3)]
    ticks = [(1, BEGAN + n * NANO, text("{}")) for n in range(1, 40)]
    path = write(tmp_path, "silent", [(0, BEGAN, text(request)), *start, *ticks], PACED)
    silent = score_bag(path, YARD, decode_request)
    assert silent.ruling is not None
    assert silent.ruling.outcome.kind is OutcomeKind.VOID
    assert silent.ruling.detail.startswith("no pose for")
    never = score_bag(write(tmp_path, "never", [(0, BEGAN, text(request)), *ticks], PACED), YARD, decode_request)
    assert never.ruling is not None
    assert "no pose near the start" in never.ruling.detail


def test_a_bag_without_a_request_is_refused(tmp_path: Path) -> None:
    lines = [(2, BEGAN, pose(Reading(1, 0.0, 0.0, 0.0)))]
    with pytest.raises(InputError, match="holds no request"):
        score_bag(write(tmp_path, "none", lines), YARD, decode_request)


@pytest.mark.parametrize(
    ("name", "number"),
    [("000012.ab12cd.3", 12), ("7.x", 7), ("0.x", 0), ("000000.x", 0), ("go-1", None), ("12", None), ("٣.x", None)],
)
def test_an_episodes_number_is_the_start_of_its_name(name: str, number: int | None) -> None:
    assert number_of(name) == number


def test_tracks_are_those_that_were_driven(tmp_path: Path) -> None:
    seen, outcome = drive(NEAR, 8.0)
    path = write(tmp_path, "1.a.1", lines_of(asked("1.a.1", NEAR, 8.0), seen, outcome))
    found = score_bag(path, YARD, decode_request)
    np.testing.assert_allclose(found.x, [reading.x for _, reading in seen])
    np.testing.assert_allclose(found.y, [reading.y for _, reading in seen])
    np.testing.assert_allclose(np.diff(found.t), 0.02)
