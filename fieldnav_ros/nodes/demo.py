"""The demo: real nodes, each a process of its own, retune a simulated cart on the parcel yard."""

from __future__ import annotations

import math
import os
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from rclpy.context import Context

from fieldnav_ros.arguments import make_folder
from fieldnav_ros.errors import InputError, WorkError
from fieldnav_ros.nodes.domain import Domain
from fieldnav_ros.nodes.payloads import TunerStatus
from fieldnav_ros.nodes.processes import Processes
from fieldnav_ros.nodes.tuner_node import SESSION_ENDED
from fieldnav_ros.nodes.watch import Watch
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.report.command import write_report
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.compare import unseen_costs
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.yard import load_yard

GRADE = "moving"
UNSEEN_LAYOUTS = 200
START_LIMIT = 120.0
SILENCE_LIMIT = 60.0


@dataclass(frozen=True)
class Files:
    """Where the demo leaves what it makes."""

    folder: Path

    @property
    def ledger(self) -> Path:
        """The session's record."""
        return self.folder / "session.ledger"

    @property
    def champion(self) -> Path:
        """The set in service at the end, as a ROS parameter file."""
        return self.folder / "champion.yaml"

    @property
    def report(self) -> Path:
        """The page about the session."""
        return self.folder / "report.html"

    @property
    def bags(self) -> Path:
        """A bag of each episode, if they were recorded."""
        return self.folder / "bags"


def run_demo(out: Path | None, floor_time_min: float, seed: int, record: bool = False) -> dict[str, Any]:
    """Run the demo and return its summary; progress goes to standard output.

    A folder named by the caller whose session was cut off is gone on with. Raises WorkError where a node dies.
    """
    files = Files(_free_folder() if out is None else out)
    _make(files.folder)
    began = time.monotonic()
    print(f"The parcel yard, an invented floor: four nodes, each its own process, {floor_time_min:g} simulated min.")
    with _graph(files, floor_time_min, seed, record) as (processes, watch):
        _follow(processes, watch, floor_time_min)
    seconds = time.monotonic() - began
    summary = _result(files, seed, seconds)
    if record:
        print(f"{files.bags}   a bag of each episode, for 'fieldnav rescore' and 'fieldnav report --bags'")
    return {**summary, "bags": str(files.bags) if record else None}


def _free_folder() -> Path:
    for number in range(1, 1000):
        folder = Path("fieldnav_demo" if number == 1 else f"fieldnav_demo_{number}")
        if not folder.exists():
            return folder
    raise InputError("fieldnav_demo to fieldnav_demo_999 all exist; name a folder with --out")


def _make(folder: Path) -> None:
    make_folder(folder)
    if not os.access(folder, os.W_OK):
        raise InputError(f"{folder}: cannot be written to")


def tuner_parameters(files: Files, floor_time_min: float, seed: int) -> dict[str, object]:
    """Return the parameters of the demo's tuner; ``floor_time_min`` in simulated minutes."""
    return {
        "ledger": files.ledger, "champion_file": files.champion, "floor_time": floor_time_min,
        "seed": seed, "grade": GRADE, "floor_clock": "episode",
        # the carts' contacts make costs noisy: enough pairs for a proof matter more here than a longer search
        "verdict_share": 0.5, "place": "simulation, the demo's parcel yard",
        # no robot is at risk: larger steps, and more generations of fewer layouts, get further in the time there is
        "layouts": 2, "first_step": 0.25,
    }  # fmt: skip


@contextmanager
def _graph(files: Files, floor_time_min: float, seed: int, record: bool) -> Iterator[tuple[Processes, Watch]]:
    domain = Domain()
    domain.enter()
    told: dict[str, dict[str, object]] = {
        "tuner_node": tuner_parameters(files, floor_time_min, seed), "recorder_node": {"bags": files.bags},
    }  # fmt: skip
    if record:
        told["simulator_node"] = {"listeners": 3.0}  # guidance, judge and recorder see the first pose
    nodes = (*(["recorder_node"] if record else []), "simulator_node", "judge_node", "guidance_node", "tuner_node")
    context = Context()
    with Processes() as processes:
        for node in nodes:
            own = config_path(f"{node.removesuffix('_node')}.yaml")
            processes.start(node, told.get(node, {}), [own, config_path("lockstep.yaml")])
        watch = Watch(context)
        try:
            yield processes, watch
        finally:
            watch.close()


def _follow(processes: Processes, watch: Watch, floor_time_min: float) -> None:
    """Begin the session and show its progress until it has ended."""
    end = time.monotonic() + START_LIMIT
    while not watch.call("begin") and not _over(watch):
        processes.check()
        if time.monotonic() > end:
            raise WorkError(f"the tuner could not be begun within {START_LIMIT:g} s")
    show = Progress(floor_time_min)
    heard = time.monotonic()
    while True:
        processes.check()
        if watch.spin():
            heard = time.monotonic()
            status = watch.status
            if status is not None:
                show(status)
                if _over(watch):
                    show.finish()
                    return
        elif time.monotonic() - heard > SILENCE_LIMIT:
            raise WorkError(f"nothing was heard from the tuner for {SILENCE_LIMIT:g} s")


def _over(watch: Watch) -> bool:
    """Tell whether the session has ended and the champion has been put back in service."""
    return watch.status is not None and watch.status.state == "ended" and watch.status.message == SESSION_ENDED


class Progress:
    """One line that is rewritten on a terminal; elsewhere a line every so many episodes."""

    EVERY = 25

    def __init__(self, floor_time_min: float) -> None:
        self._total = floor_time_min
        self._live = sys.stdout.isatty()
        self._shown = -1
        self._line = ""

    def __call__(self, status: TunerStatus) -> None:
        """Show where the session stands."""
        cost = "  -  " if status.champion_cost is None else f"{status.champion_cost:5.2f}"
        left = max(0.0, status.floor_time_left) / 60.0
        line = (
            f"{status.episodes_done:4d} episodes   {left:4.1f} of {self._total:g} min left   {status.phase:8}"
            f"champion {status.champion}, cost {cost} s"
        )
        if status.evidence is not None and status.threshold is not None and status.phase == "verdict":
            line += f"   evidence {status.evidence:.3g} of {status.threshold:.3g}"
        self._line = line
        if self._live:
            print(f"\r{line:<110}", end="", flush=True)
        elif status.episodes_done // self.EVERY != self._shown:
            self._shown = status.episodes_done // self.EVERY
            print(line, flush=True)

    def finish(self) -> None:
        """Leave the last line standing."""
        print() if self._live else print(self._line, flush=True)


def _result(files: Files, seed: int, seconds: float) -> dict[str, Any]:
    session = Session()
    with Ledger.read(files.ledger) as ledger:
        events = list(ledger.events())
    session.apply(*events)
    reason = next(event.reason for event in reversed(events) if event.kind == "session_ended")
    champion = session.champion
    yard = load_yard(config_path("yards/parcel_yard.yaml"))
    default, tuned = unseen_costs(yard, GRADE, [DEFAULTS, champion.parameters], UNSEEN_LAYOUTS, seed)
    change = float(tuned.mean() / default.mean() - 1.0)
    episodes = int(session.summary()["episodes_done"] or 0)
    report = _report(files)
    error = float((tuned - default).std(ddof=1) / math.sqrt(len(tuned)))
    print(
        f"\n{episodes} episodes in {seconds:.0f} s. Champion: {champion.set_id} ({reason}).\n"
        f"On {UNSEEN_LAYOUTS} layouts the search never saw the mean cost went from {default.mean():.2f} s with the "
        f"defaults\nto {tuned.mean():.2f} s with the champion ({change:+.0%}; standard error of the difference "
        f"{error:.2f} s).\n\n"
        f"{files.champion}   the champion, for --params-file\n{files.ledger}   every episode and decision"
        + (f"\n{report}   the session on one page" if report else "")
    )
    return {
        "episodes": episodes, "cost_default": float(default.mean()), "cost_champion": float(tuned.mean()),
        "cost_change": change, "champion_set": champion.set_id, "seconds": round(seconds, 1), "seed": seed,
        "champion": str(files.champion), "ledger": str(files.ledger),
        "report": str(report) if report else None,
    }  # fmt: skip


def _report(files: Files) -> Path | None:
    """Write the page; None, and a line that says why, where that cannot be done: the session is no less sound."""
    try:
        write_report(files.ledger, files.report)
    except WorkError as error:
        print(f"No report: {error}")
        return None
    return files.report
