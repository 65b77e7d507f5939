"""A rehearsed session, operated through a real pseudo-terminal from begin to match call, faster than real time."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

pytest.importorskip("rclpy", reason="starts real nodes")
pytest.importorskip("rich", reason="the terminal needs it")

from pit_terminal import PitTerminal, helped
from rehearsed import Witness, session_of, small

from fieldnav_ros.crowd import NANO
from fieldnav_ros.nodes.processes import Processes
from fieldnav_ros.nodes.rehearse import Rehearsal
from fieldnav_ros.nodes.tuner_node import FLOOR_TIME_UP
from fieldnav_ros.params_file import read_parameters

pytestmark = pytest.mark.ros
SPEED, FLOOR_TIME = 5.0, 3.0
TOLERANCE = 30.0
"""Seconds by which a session may miss its floor time."""


@pytest.fixture
def rehearsal(tmp_path: Path) -> Iterator[Rehearsal]:
    made = Rehearsal(
        tmp_path, FLOOR_TIME, SPEED, seed=3, grade="empty",
        yard=small("parcel_yard", tmp_path), floor=small("rehearsal_floor", tmp_path),
    )  # fmt: skip
    with Processes() as processes:
        made.start(processes)
        yield made
        processes.check()


def test_a_session_from_begin_to_match_call_through_a_terminal_that_is_lost_on_the_way(rehearsal: Rehearsal) -> None:
    with Witness() as witness:
        with PitTerminal() as first:
            first.until(lambda screen: "READY TO BEGIN" in screen)
            first.press("b")
            first.until(lambda screen: "DRIVES" in screen or "EPISODE" in screen)
            witness.catch_up()
            began = witness.stamp
            first.until(lambda screen: re.search(r"PLAN +[2-9] done", screen), helped(first))
            first.lose()
            assert first.child.wait(30.0) == 0
        with PitTerminal(["--json"]) as second, PitTerminal(["--watch"], environment={"NO_COLOR": "1"}) as looker:
            help_it = helped(second)

            def help_and_witness(screen: str) -> None:
                help_it(screen)
                looker.look(0.0)
                witness.catch_up()

            second.until(lambda screen: "SESSION OVER: CHAMPION IS IN SERVICE" in screen, help_and_witness)
            witness.catch_up()
            seconds = (witness.stamp - began) / NANO
            looker.press("b")
            looker.until(lambda screen: "SESSION OVER" in screen)
            second.press("r")
            second.until(lambda screen: "release: champion" in screen and "read back" in screen)
            second.press("q")
            assert second.child.wait(30.0) == 0
            second.look(1.0)
            summary = json.loads(re.findall(r"^\{.*\}", second.raw.replace("\r", ""), re.MULTILINE)[-1])
    session, events = session_of(rehearsal.ledger)
    scored = [event for event in events if event.kind == "episode_scored"]
    assert summary["episodes"] == len(scored) >= 10
    assert summary["champion_confirmed"] is True
    assert summary["champion"] == session.champion.set_id
    assert read_parameters(rehearsal.folder / "champion.yaml") == session.champion.parameters
    # every episode that was asked for, and judged, is in the ledger
    judged = {json.loads(message.data)["episode"].split(".")[0] for message in witness.outcomes}
    kept = {event.episode_id for event in events if event.kind in ("episode_scored", "episode_voided")}
    assert {int(number) for number in judged} == kept
    # the plan was kept, by the poses' own clock
    assert seconds <= 60.0 * FLOOR_TIME + TOLERANCE
    # what the terminals took to show the end is no floor time, so there is no bound from below
    assert 0.0 < session.state.floor_used_s <= seconds + TOLERANCE / 3
    assert session.state.ended is not None
    if session.state.ended == FLOOR_TIME_UP:
        assert seconds >= 60.0 * FLOOR_TIME - TOLERANCE
