"""Match calls at random moments of a running session: is the champion back in service, and how soon?

    python test/benchmark/match_calls.py [--calls 200] [--hung 10] [--restarts 3] [--seed N]

Each call's answer is checked against guidance itself, whose numbers are read over a service of its own. With ``--hung``
guidance is stopped (SIGSTOP) when the call comes, with ``--restarts`` it is killed and started again: then the call is
answered in time, with the plain word that it is not confirmed, and the champion goes in as soon as guidance is there.
The last line is JSON; times in s, from the call to its answer.
"""

from __future__ import annotations

import argparse
import json
import random
import signal
import sys
import tempfile
import time
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent.parent
sys.path[:0] = [str(ROOT)]

from rcl_interfaces.srv import GetParameters
from rclpy.context import Context

from fieldnav_ros.nodes.domain import Domain
from fieldnav_ros.nodes.processes import Processes
from fieldnav_ros.nodes.service_link import NAMES
from fieldnav_ros.nodes.watch import Watch
from fieldnav_ros.params_file import read_parameters
from fieldnav_ros.resources import config_path

WORLD = ("simulator_node", "judge_node", "guidance_node", "tuner_node")
DEADLINE = 120.0


class Caller(Watch):
    """Calls, and asks guidance itself what numbers it holds."""

    def __init__(self, context: Context) -> None:
        super().__init__(context)
        self._read = self._node.create_client(GetParameters, "guidance_node/get_parameters")

    def numbers(self) -> list[float]:
        """Return the nine numbers that guidance holds now; empty where it does not answer.

        A request that was sent to a server which is gone meanwhile is lost: so it is made again.
        """
        end = time.monotonic() + DEADLINE
        while time.monotonic() < end and self._read.wait_for_service(timeout_sec=DEADLINE):
            future = self._read.call_async(GetParameters.Request(names=NAMES))
            self._executor.spin_until_future_complete(future, timeout_sec=2.0)
            if future.done():
                return [value.double_value for value in future.result().values]
            self._read.remove_pending_request(future)
        return []

    def release(self) -> tuple[bool, float]:
        """Make a match call; return whether it was confirmed, and how long its answer took (s)."""
        began = time.monotonic()
        future = self.ask("release")
        if future is None:
            return False, 0.0
        self._executor.spin_until_future_complete(future, timeout_sec=DEADLINE)
        answer: Any = future.result() if future.done() else None
        return bool(answer is not None and answer.success), time.monotonic() - began

    def until_confirmed(self) -> float:
        """Wait until the status says that the champion is in service; return how long that took (s)."""
        began = time.monotonic()
        while time.monotonic() - began < DEADLINE:
            self.spin(0.1)
            status = self.status
            if status is not None and status.state == "released" and status.in_service == status.champion:
                return time.monotonic() - began
        return float("inf")


@dataclass
class Tally:
    """What came of the calls."""

    times: list[float] = field(default_factory=list)
    confirmed: int = 0
    episodes_running: int = 0
    hung: list[float] = field(default_factory=list)
    recovered: list[float] = field(default_factory=list)
    false_words: int = 0
    """Calls that were called confirmed while guidance held other numbers."""

    def figures(self) -> dict[str, Any]:
        """Return them for a machine."""
        return {
            "calls": len(self.times), "confirmed": self.confirmed, "slowest_s": round(max(self.times, default=0.0), 3),
            "median_s": round(sorted(self.times)[len(self.times) // 2], 3) if self.times else None,
            "episodes_running": self.episodes_running, "false_words": self.false_words, "disturbed": len(self.hung),
            "slowest_disturbed_s": round(max(self.hung, default=0.0), 3),
            "slowest_recovery_s": round(max(self.recovered, default=0.0), 3),
        }  # fmt: skip


class Session:
    """A lockstep session with everything needed to disturb it; a context manager."""

    def __init__(self, folder: Path, seed: int) -> None:
        self._folder, self._seed = folder, seed
        self._processes = Processes()
        self._random = random.Random(seed)
        self.tally = Tally()

    def __enter__(self) -> Session:
        for node in WORLD:
            self._start(node)
        self.caller = Caller(Context())
        self._begin()
        return self

    def __exit__(self, *_: object) -> None:
        self._processes.stop()
        self.caller.close()

    def call(self) -> None:
        """Make one call at a random moment and begin again."""
        self._wait()
        status = self.caller.status
        self.tally.episodes_running += bool(status is not None and status.episode)
        sound, seconds = self.caller.release()
        self.tally.times.append(seconds)
        right = self._champion_there()
        self.tally.confirmed += sound and right
        self.tally.false_words += sound and not right
        self._begin()

    def disturbed(self, restart: bool) -> None:
        """Make a call while guidance hangs or is being started again, then let it come back."""
        self._wait()
        if restart:
            self._processes.kill("guidance_node", signal.SIGKILL)
        else:
            self._processes.send("guidance_node", signal.SIGSTOP)
        sound, seconds = self.caller.release()
        self.tally.hung.append(seconds)
        self.tally.false_words += sound
        if restart:
            self._start("guidance_node")
        else:
            self._processes.send("guidance_node", signal.SIGCONT)
        self.tally.recovered.append(self.caller.until_confirmed())
        self.tally.false_words += not self._champion_there()
        self._begin()

    def _champion_there(self) -> bool:
        wanted = list(read_parameters(self._folder / "champion.yaml").to_ros().values())
        return self.caller.numbers() == wanted

    def _wait(self) -> None:
        end = time.monotonic() + self._random.uniform(0.0, 0.7)
        while time.monotonic() < end:
            self.caller.spin(0.02)

    def _begin(self) -> None:
        end = time.monotonic() + DEADLINE
        while not self.caller.call("begin", 1.0):
            self._processes.check()
            if time.monotonic() > end:
                raise SystemExit("the tuner could not be begun")

    def _start(self, node: str) -> None:
        given: dict[str, object] = {}
        if node == "tuner_node":
            given = {
                "ledger": self._folder / "session.ledger", "champion_file": self._folder / "champion.yaml",
                "floor_time": 2000.0, "seed": self._seed, "grade": "empty",
            }  # fmt: skip
        files = [config_path(f"{node.removesuffix('_node')}.yaml"), config_path("lockstep.yaml")]
        self._processes.start(node, given, files)


def main() -> int:
    """Make the calls; 0 where all were confirmed within a second and none falsely."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--calls", type=int, default=200)
    parser.add_argument("--hung", type=int, default=10)
    parser.add_argument("--restarts", type=int, default=3)
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    domain = Domain()
    domain.enter()
    with tempfile.TemporaryDirectory() as folder, Session(Path(folder), given.seed) as session:
        for number in range(given.calls):
            session.call()
            print(f"{number + 1:4d}  {session.tally.times[-1]:.3f} s", flush=True)
        for number in range(given.hung + given.restarts):
            session.disturbed(restart=number >= given.hung)
            tally = session.tally
            print(f"disturbed  {tally.hung[-1]:.3f} s, recovered after {tally.recovered[-1]:.3f} s", flush=True)
        figures = session.tally.figures()
    print(json.dumps(figures))
    in_time = figures["slowest_s"] <= 1.0 and figures["slowest_disturbed_s"] <= 1.1
    return 0 if in_time and figures["confirmed"] == given.calls and not figures["false_words"] else 1


if __name__ == "__main__":
    raise SystemExit(main())
