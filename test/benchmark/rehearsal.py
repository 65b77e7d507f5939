"""A whole rehearsed session through a pseudo-terminal: 12 simulated minutes on the parcel yard, to match call.

    python test/benchmark/rehearsal.py [--floor-time MIN] [--speed X] [--seed N] [--out DIR]

Prints what came of it; the last line is JSON: by how much the floor time was missed on the poses' own clock (s), how
many episodes were judged and how many of them are in the ledger, and what the verdict was.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "test")]

import pit_terminal
from pit_terminal import PitTerminal, helped
from rehearsed import Witness, session_of

from fieldnav_ros.crowd import NANO
from fieldnav_ros.nodes.domain import Domain
from fieldnav_ros.nodes.processes import Processes
from fieldnav_ros.nodes.rehearse import Rehearsal


def operate(rehearsal: Rehearsal, processes: Processes) -> tuple[float, set[int]]:
    """Run the session from begin to match call; return the floor time used (s) and the episodes that were judged."""
    with Witness() as witness, PitTerminal() as terminal:
        help_it = helped(terminal)
        shown = [""]

        def look_on(screen: str) -> None:
            processes.check()
            help_it(screen)
            witness.catch_up()
            plan = next((line.strip() for line in screen.splitlines() if "PLAN" in line), "")
            if plan != shown[0]:
                shown[0] = plan
                print(plan, flush=True)

        terminal.until(lambda screen: "READY TO BEGIN" in screen, look_on)
        witness.catch_up()
        began = witness.stamp
        terminal.press("b")
        terminal.until(lambda screen: "SESSION OVER: CHAMPION IS IN SERVICE" in screen, look_on)
        witness.catch_up()
        used = (witness.stamp - began) / NANO
        terminal.press("r")
        print(terminal.until(lambda screen: "release: champion" in screen and "read back" in screen))
        terminal.press("q")
        terminal.child.wait(30.0)
        names = [json.loads(message.data)["episode"] for message in witness.outcomes]
    return used, {int(name.split(".")[0]) for name in names}


def result(rehearsal: Rehearsal, used: float, judged: set[int], seconds: float) -> dict[str, Any]:
    """Return the figures."""
    session, events = session_of(rehearsal.ledger)
    kept = {event.episode_id for event in events if event.kind in ("episode_scored", "episode_voided")}
    verdict = session.state.verdict
    return {
        "floor_time_s": 60.0 * rehearsal.floor_time, "used_s": round(used, 1),
        "missed_by_s": round(used - 60.0 * rehearsal.floor_time, 1), "ended": session.state.ended,
        "judged": len(judged), "in_ledger": len(judged & kept), "verdict": verdict.verdict if verdict else None,
        "pairs": verdict.pairs if verdict else 0, "champion": session.champion.set_id, "seconds": round(seconds, 1),
    }  # fmt: skip


def main() -> int:
    """Run it; 0 where every judged episode is in the ledger and the floor time was not overrun by 30 s."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--floor-time", type=float, default=12.0)
    parser.add_argument("--speed", type=float, default=4.0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path)
    parser.add_argument("--record", action="store_true")
    given = parser.parse_args()
    pit_terminal.DEADLINE = 600.0 + 120.0 * given.floor_time
    folder = given.out or Path(tempfile.mkdtemp(prefix="fieldnav-rehearsal-"))
    folder.mkdir(parents=True, exist_ok=True)
    rehearsal = Rehearsal(folder, given.floor_time, given.speed, given.seed, record=given.record)
    domain = Domain()
    domain.enter()
    began = time.monotonic()
    with Processes() as processes:
        rehearsal.start(processes)
        used, judged = operate(rehearsal, processes)
    figures = result(rehearsal, used, judged, time.monotonic() - began)
    print(json.dumps(figures))
    sound = figures["judged"] == figures["in_ledger"] and used <= 60.0 * given.floor_time + 30.0
    return 0 if sound else 1


if __name__ == "__main__":
    raise SystemExit(main())
