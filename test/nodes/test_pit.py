"""The terminal beside the floor: what it says, how it fits, which keys it takes; with and without a screen."""

from __future__ import annotations

import re
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

pytest.importorskip("rich", reason="the terminal needs it")

from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.nodes.payloads import PastEpisode, TunerStatus
from fieldnav_ros.nodes.pit.keys import key_in
from fieldnav_ros.nodes.pit.screen import DIGITS, TALL, large, picture
from fieldnav_ros.nodes.pit.view import BAR, Heard, bar_of, clock_of, keys_of, line_of, view_of

PAST = tuple(
    PastEpisode(episode=number, kind=kind, time=3.21, source="judge")
    for number, kind in ((12, OutcomeKind.ARRIVED), (11, OutcomeKind.CONTACT), (10, OutcomeKind.TIMEOUT))
)


def status(**changes: Any) -> TunerStatus:
    values: dict[str, Any] = {
        "state": "running", "phase": "verdict", "episodes_done": 12, "episodes_left": 33, "floor_time_left": 485.0,
        "floor_time": 720.0, "champion": "initial", "champion_cost": 6.2, "challenger": "challenger-1",
        "challenger_cost": 4.8, "evidence": 3.1, "threshold": 20.0, "pairs": 4, "search_left": 0, "verdict_left": 33,
        "mean_episode": 4.6, "mean_reset": 3.1, "todo": "Stay off the floor.", "pose_age": 0.02, "last": PAST,
        "in_service": "challenger-1", "episode": "000013.ab12cd.4",
    }  # fmt: skip
    return TunerStatus(**(values | changes))


def shown(heard: Heard, width: int = 80, height: int = 24) -> str:
    return picture(view_of(heard), width, height).plain


@pytest.mark.parametrize(
    ("changes", "age", "banner", "alarm"),
    [
        ({}, 0.0, "EPISODE 13 IS RUNNING", False),
        ({"episode": None, "state": "placing"}, 0.0, "PLACE THE ROBOT", False),
        ({"episode": None, "state": "idle"}, 0.0, "READY TO BEGIN", False),
        ({"state": "released", "in_service": "initial"}, 0.0, "MATCH: CHAMPION IS IN SERVICE", False),
        ({"state": "released", "in_service": "challenger-1"}, 0.0, "MATCH CALL NOT CONFIRMED", True),
        ({"state": "released", "in_service": None}, 0.0, "MATCH CALL NOT CONFIRMED", True),
        ({"state": "ended", "in_service": None}, 0.0, "CHAMPION NOT CONFIRMED", True),
        ({"state": "ended", "in_service": "initial"}, 0.0, "SESSION OVER: CHAMPION IS IN SERVICE", False),
        ({"state": "waiting"}, 0.0, "WAITING FOR GUIDANCE", True),
        ({}, 4.0, "TUNER NOT HEARD FOR 4 s", True),
        ({"state": "released", "in_service": "initial"}, 4.0, "TUNER NOT HEARD FOR 4 s", True),
    ],
)
def test_banner_says_the_one_thing_that_matters(changes: dict[str, Any], age: float, banner: str, alarm: bool) -> None:
    """Never that the champion is in service unless it was read back, and by word that is fresh."""
    view = view_of(Heard(status(**changes), age))
    assert (view.banner, view.alarm) == (banner, alarm)
    assert ("!! " in shown(Heard(status(**changes), age)).splitlines()[0]) is alarm, "without colour too"


def test_a_match_call_on_its_way_is_not_taken_for_one_that_arrived() -> None:
    assert "NOT CONFIRMED" in view_of(Heard(status(), calling=True)).banner


def test_which_set_an_episode_runs_with_is_not_shown() -> None:
    """Who may take an episode back must not know whose it is, or the verdict's guarantee is theirs."""
    challenger, champion = status(in_service="challenger-1"), status(in_service="initial")
    hidden = shown(Heard(challenger)).replace("\n", " ")
    assert "holds" not in hidden
    assert "holds the champion" in shown(Heard(champion)), "only said where it gives nothing away"


@pytest.mark.parametrize(("width", "height"), [(80, 24), (40, 24), (40, 16), (132, 50), (60, 20), (20, 10)])
@pytest.mark.parametrize("state", ["running", "idle", "placing", "released", "ended", "observing"])
def test_it_fits_and_the_keys_stay(width: int, height: int, state: str) -> None:
    todo = "Place the robot at mark A (x 0.40 m, y 0.80 m, facing 90 degrees). Turn it 35 degrees to the left."
    heard = Heard(
        status(state=state, todo=todo, outcomes="operator", warnings=("no pose for 3 s", "drives failed " * 9)),
        0.0, ("guidance_node: the newest pose is 3.10 s old, may be at most 0.15 s",), "release: done",
    )  # fmt: skip
    lines = shown(heard, width, height).splitlines()
    assert len(lines) == height
    assert all(len(line) <= width for line in lines)
    if height >= 16:
        assert "MATCH CALL" in " ".join(lines[-6:])


def test_everything_that_must_be_seen_is_on_80_by_24() -> None:
    text = shown(Heard(status(warnings=("no pose for 3 s",)), 0.0, ("guidance_node: held by the operator",)))
    for part in (
        "EPISODE 13", "Stay off", "12 done", "33 to go", "33 verdict", "4.6 s an episode", "initial", "6.20 s",
        "challenger-1", "4.80 s", "4 pairs", "3.1 of 20", "arrived 3.2 s", "contact", "timeout", "pose 0.02 s old",
        "no pose for 3 s", "held by the operator", "r MATCH CALL", "b begin", "p pause", "q leave",
    ):  # fmt: skip
        assert part in text, part


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(485.0, "8:05"), (59.2, "1:00"), (0.2, "0:01"), (0.0, "0:00"), (-0.4, "0:00"), (-61.0, "-1:01"), (3600, "60:00")],
)
def test_time_left_in_minutes_and_seconds(seconds: float, text: str) -> None:
    assert clock_of(seconds) == text


@given(st.text("0123456789:-", min_size=1, max_size=6), st.integers(1, 3))
def test_large_figures_are_five_lines_of_one_width(text: str, wide: int) -> None:
    rows = large(text, "#", wide)
    assert len(rows) == TALL
    assert len({len(row) for row in rows}) == 1


def test_no_two_figures_look_alike() -> None:
    assert len(set(DIGITS.values())) == len(DIGITS)


@given(st.floats(0.0, 1e12), st.floats(1.01, 1e6))
def test_the_bar_is_full_exactly_where_evidence_reaches_its_threshold(evidence: float, threshold: float) -> None:
    bar = bar_of(evidence, threshold)
    assert len(bar) == BAR + 2
    if evidence >= threshold:
        assert bar == f"[{'#' * BAR}]"
    if evidence <= 1.0:
        assert "#" not in bar


@pytest.mark.parametrize(
    ("pressed", "key"),
    [
        (b"b", "b"),
        (b"R", "r"),
        (b"aaa", "a"),
        (b"", ""),
        (b"\x1b[A", ""),
        (b"\x1bOA", ""),
        (b"act", ""),
        ("ä".encode(), ""),
        (b"\n", ""),
        (b"\x03", ""),
    ],
)
def test_only_a_single_letter_is_a_key(pressed: bytes, key: str) -> None:
    """Arrow keys send ESC [ A and the like (ECMA-48): their letters must not report an arrival."""
    assert key_in(pressed) == key


def test_outcome_keys_are_offered_only_where_they_count() -> None:
    assert "a arrived" in keys_of(status(outcomes="operator"), False)
    assert "a arrived" not in keys_of(status(), False)
    assert keys_of(status(outcomes="operator"), True) == "watching only    q leave"


def test_one_line_says_all_for_terminals_without_a_screen() -> None:
    line = line_of(Heard(status()))
    assert re.search(r"8:05 left.*EPISODE 13.*12 done.*initial 6\.20 s.*arrived 3\.2 s", line)
    assert "\n" not in line
    assert line_of(Heard(None)) == "NO TUNER HEARD"
