"""A rehearsal at home: real nodes against a stand-in for hardware, and the operator's terminal on top."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any, NamedTuple

from fieldnav_ros.arguments import make_folder
from fieldnav_ros.nodes.domain import Domain
from fieldnav_ros.nodes.pit import command as pit
from fieldnav_ros.nodes.processes import Processes
from fieldnav_ros.resources import config_path

FASTEST_LAG = 0.045
NODES = ("simulator_node", "judge_node", "guidance_node", "tuner_node")


class Rehearsal(NamedTuple):
    """What a rehearsal is made of; ``floor_time`` in simulated min, ``speed`` in multiples of real time."""

    folder: Path
    floor_time: float = 12.0
    speed: float = 1.0
    seed: int = 1
    grade: str = "moving"
    outcomes: str = "judge"
    starts: str = "region"
    record: bool = False
    yard: Path | None = None
    """What the session is told of the floor; none: the parcel yard."""
    floor: Path | None = None
    """What the floor is like; none: config/yards/rehearsal_floor.yaml."""

    @property
    def ledger(self) -> Path:
        """The session's record."""
        return self.folder / "session.ledger"

    def parameters(self, node: str) -> dict[str, object]:
        """Return what a node needs on top of its own file and config/rehearsal.yaml."""
        told: dict[str, object] = {"yard": self.yard} if self.yard else {}
        if node == "simulator_node":
            floor = self.floor or config_path("yards/rehearsal_floor.yaml")
            # faster than real time the world waits for guidance, or a busy machine would be a clumsy robot
            lag = FASTEST_LAG if self.speed > 1.0 else 0.0
            return {
                "yard": floor, "speed": self.speed, "seed": self.seed, "grade": self.grade, "command_lag": lag
            }  # fmt: skip
        if node == "tuner_node":
            return {
                **told, "ledger": self.ledger, "champion_file": self.folder / "champion.yaml",
                "floor_time": self.floor_time, "seed": self.seed, "grade": self.grade, "outcomes": self.outcomes,
                "starts": self.starts, "place": "rehearsal, a simulated floor",
            }  # fmt: skip
        return {"bags": self.folder / "bags"} if node == "recorder_node" else told

    def start(self, processes: Processes) -> None:
        """Start the nodes."""
        for node in (*NODES, *(["recorder_node"] if self.record else [])):
            start_node(processes, node, self.parameters(node))


def start_node(processes: Processes, node: str, parameters: dict[str, object]) -> None:
    """Start one node of a rehearsal with its files and these parameters."""
    files = [config_path(f"{node.removesuffix('_node')}.yaml"), config_path("rehearsal.yaml")]
    processes.start(node, parameters, files)


def run_rehearsal(rehearsal: Rehearsal) -> dict[str, Any]:
    """Run nodes and terminal until the terminal is left; return the summary. Raises WorkError where a node dies."""
    make_folder(rehearsal.folder)
    domain = Domain()
    domain.enter()
    print(f"Nodes start; for another terminal: ROS_DOMAIN_ID={domain.number} fieldnav pit --watch")
    began = time.monotonic()
    with Processes() as processes:
        rehearsal.start(processes)
        farewell = f"The rehearsal is over; what it left is in {rehearsal.folder}."
        summary = pit.run("", "tuner_node", watch_only=False, check=processes.check, farewell=farewell)
    seconds = round(time.monotonic() - began, 1)
    return {**summary, "ledger": str(rehearsal.ledger), "seconds": seconds, "seed": rehearsal.seed}
