"""What the tuner says of itself: a word and a sentence for every scene, by a table."""

from __future__ import annotations

from typing import Any

import pytest

from fieldnav_ros.nodes.telling import Scene, evidence_of, state_of, todo_of


@pytest.mark.parametrize(
    ("changes", "state", "says"),
    [
        ({}, "idle", "hardware stop"),
        ({"phase": "paused"}, "paused", "hardware stop"),
        ({"wanted": True}, "running", "Stay off the floor."),
        ({"wanted": True, "running": True}, "running", "an episode is running"),
        ({"wanted": True, "running": True, "outcomes": "operator"}, "running", "report how it ends"),
        ({"wanted": True, "reachable": False}, "waiting", "guidance_node"),
        ({"wanted": True, "reset": "driving"}, "driving", "drives to its next start"),
        ({"wanted": True, "reset": "placing", "reset_words": "Place it there."}, "placing", "Place it there."),
        ({"phase": "released", "confirmed": True}, "released", "in service, read back"),
        ({"phase": "released"}, "released", "NOT confirmed"),
        ({"phase": "released", "reachable": False}, "released", "NOT confirmed"),
        ({"phase": "ended", "confirmed": True}, "ended", "Session over"),
        ({"phase": "ended"}, "ended", "NOT confirmed"),
        ({"mode": "observe", "wanted": True}, "observing", "no number is changed"),
    ],
)
def test_each_scene_has_its_word_and_its_advice(changes: dict[str, Any], state: str, says: str) -> None:
    scene = Scene(**{"phase": "search", **changes})
    assert state_of(scene) == state
    assert says in todo_of(scene)


@pytest.mark.parametrize("phase", ["search", "verdict", "paused", "released", "ended"])
def test_nobody_is_told_that_the_champion_is_in_service_unless_it_was_read_back(phase: str) -> None:
    for wanted in (True, False):
        for reset in ("", "driving", "placing"):
            assert "is in service" not in todo_of(Scene(phase, wanted=wanted, reset=reset, confirmed=False))


def test_evidence_stays_a_number_that_any_reader_takes() -> None:
    assert evidence_of(None) is None
    assert evidence_of(0.0) == 1.0
    assert evidence_of(5000.0) == 1e12
