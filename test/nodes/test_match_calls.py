"""Match calls at random moments of a running session; `test/benchmark/match_calls.py` makes two hundred of them."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

pytest.importorskip("rclpy", reason="starts real nodes")

sys.path.append(str(Path(__file__).parent.parent / "benchmark"))

from match_calls import Session

pytestmark = pytest.mark.ros


def test_a_dozen_match_calls_put_the_champion_back_and_one_that_hangs_is_not_called_done(tmp_path: Path) -> None:
    """Guidance's own numbers are read each time. How long an answer took is measured, not asserted."""
    with Session(tmp_path, seed=4) as session:
        for _ in range(12):
            session.call()
        session.disturbed(restart=False)
    tally = session.tally
    assert tally.confirmed == len(tally.times) == 12
    assert tally.false_words == 0
    assert tally.episodes_running > 0, "or the moments were not those of a running session"
    assert tally.recovered[0] < float("inf")
