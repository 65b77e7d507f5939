"""How often, how safely and how fast the default field arrives, beside three published ways to steer.

    python test/benchmark/arrival.py [--seeds 3] [--layouts 2000] [--episodes 24000] [--sets FILE]

Parcel yard, a pose at each step of 0.01 s, limit 8 s; the grade `rough` is `moving` with 60 ms of command delay, pose
noise of 4 mm and 1.5 deg, 2 % of poses lost and 30 poses a second. For each seed and grade every way to steer is tuned
by CMA-ES (package cma) on the same number of episodes, and then judged on layouts that nobody has seen. Times are given
over the bound distance / v_max + v_max / 2 a_max. The table shows medians over the seeds; the last line is JSON.

A contact is counted unavoidable if, from none of the moments 0.2, 0.4, ... 1.0 s before it, any of 25 manoeuvres (two
wheel speeds from -1, -1/2, 0, 1/2 and 1 of the largest, standing still among them, held from then on) would have got
the robot past the time of contact by 0.2 s. It is counted `standing` if the robot was slower than 0.05 m/s.
"""

from __future__ import annotations

import argparse
import json
import math
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from unittest import mock

import cma
import numpy as np

HERE = Path(__file__).resolve()
sys.path[:0] = [str(HERE.parent), str(HERE.parents[2])]
from escapes import contacts  # beside this file
from peers import PEERS, Peer  # beside this file

from fieldnav_ros.model import Layout, OutcomeKind
from fieldnav_ros.parameters import DEFAULTS, TABLE, ParameterSet
from fieldnav_ros.resources import config_path
from fieldnav_ros.world import batch
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.yard import Plant, Yard, load_yard

LIMIT = 8.0
CLEAN = Plant(pose_rate=100.0)
ROUGH = Plant(
    pose_rate=30.0, command_delay=0.06, pose_noise=0.004, yaw_noise=math.radians(1.5), pose_loss=0.02
)  # fmt: skip
GRADES: dict[str, tuple[str, Plant]] = {
    "empty": ("empty", CLEAN), "parked": ("parked", CLEAN), "moving": ("moving", CLEAN), "rough": ("moving", ROUGH),
}  # fmt: skip
POPULATION, LAYOUTS_A_GENERATION = 12, 40
UNSEEN = 1_000_000
"""Added to a seed for the layouts that judge."""


@dataclass(frozen=True)
class Values:
    """Numbers of a peer in the shape in which the simulator hands parameter sets to guidance."""

    numbers: tuple[float, ...]

    def to_array(self) -> np.ndarray:
        """Return them, padded to the nine that a set has."""
        return np.array([*self.numbers, *[0.0] * (len(TABLE) - len(self.numbers))])


@dataclass(frozen=True)
class Way:
    """A way to steer that can be tuned: where in the unit cube to begin, and how to simulate points of it."""

    start: list[float]
    make: Callable[[Sequence[float]], Any]
    model: str = "foresight"
    peer: Peer | None = None

    def simulate(self, yard: Yard, grade: str, layouts: list[Layout], sets: list[Any]) -> batch.BatchResult:
        """Run every set on every layout under the grade's conditions."""
        name, plant = GRADES[grade]
        with instead_of_guide(self.peer):
            return batch.simulate(
                yard, name, layouts, sets, [plant] * len(layouts), self.model, LIMIT, plant.command_delay
            )


@contextmanager
def instead_of_guide(peer: Peer | None) -> Iterator[None]:
    """Let the simulator ask the peer for commands."""
    if peer is None:
        yield
        return
    many = len(peer.ranges)

    def ask(senses: Any, numbers: Any, *rest: Any) -> Any:
        return peer.guide(senses, numbers[:many], *rest)

    with mock.patch.object(batch, "guide", ask):
        yield


def own(model: str) -> Way:
    """Return a model of the package as a way to steer."""
    return Way(
        [row.to_unit(row.default) for row in TABLE],
        lambda point: ParameterSet.from_array([row.from_unit(float(u)) for row, u in zip(TABLE, point)]),
        model,
    )


def foreign(peer: Peer) -> Way:
    """Return a peer as a way to steer."""
    return Way(
        [each.unit() for each in peer.ranges],
        lambda point: Values(tuple(each.at(float(u)) for each, u in zip(peer.ranges, point))),
        peer=peer,
    )


WAYS: dict[str, Way] = {
    "foresight": own("foresight"), "published": own("published"),
    **{name: foreign(peer) for name, peer in PEERS.items()},
}  # fmt: skip


def cost(result: batch.BatchResult) -> np.ndarray:
    """Return the mean cost (s) of each set: its time, 1.2 times the limit, or twice the limit (common practice)."""
    late = np.where(result.code == OutcomeKind.TIMEOUT.code, 1.2 * LIMIT, 2.0 * LIMIT)
    return np.asarray(np.where(result.code == OutcomeKind.ARRIVED.code, result.time, late).mean(axis=1))


def tune(way: Way, yard: Yard, grade: str, episodes: int, seed: int) -> list[float]:
    """Return the point of the unit cube that CMA-ES ends at; every generation meets layouts of its own."""
    start = [min(max(u, 0.02), 0.98) for u in way.start]
    search = cma.CMAEvolutionStrategy(
        start, 0.25, {"bounds": [0, 1], "popsize": POPULATION, "seed": seed + 1, "verbose": -9}
    )
    for generation in range(max(1, episodes // (POPULATION * LAYOUTS_A_GENERATION))):
        layouts = draw_many(yard, GRADES[grade][0], LAYOUTS_A_GENERATION, 10_000 * (seed + 1) + generation)
        points = search.ask()
        search.tell(points, list(cost(way.simulate(yard, grade, layouts, [way.make(point) for point in points]))))
    return [float(u) for u in search.result.xfavorite]


def judge(way: Way, yard: Yard, grade: str, made: Any, layouts: list[Layout], escapes: bool) -> dict[str, float]:
    """Return percentages of arrivals, timeouts and contacts, and mean time over the bound, on unseen layouts."""
    result = way.simulate(yard, grade, layouts, [made])
    code, robot = result.code[0], yard.robot
    arrived = code == OutcomeKind.ARRIVED.code
    apart = np.array([math.hypot(each.goal.x - each.start.x, each.goal.y - each.start.y) for each in layouts])
    bound = apart / robot.wheel_speed + robot.wheel_speed / (2.0 * robot.wheel_accel)
    ratio = (result.time[0] / bound)[arrived]
    hit = np.flatnonzero((code == OutcomeKind.CONTACT.code) | (code == OutcomeKind.OFF_FLOOR.code))
    found = {
        "arrived": 100.0 * arrived.mean(),
        "timeout": 100.0 * (code == OutcomeKind.TIMEOUT.code).mean(),
        "contact": 100.0 * len(hit) / len(code),
        "ratio": float(ratio.mean()) if ratio.size else math.nan,
    }
    if escapes:
        unavoidable, standing = contacts(
            yard, [layouts[i] for i in hit], result.time[0, hit], GRADES[grade][1], made, way.model
        )  # fmt: skip
        found |= {"unavoidable": 100.0 * unavoidable / len(code), "standing": 100.0 * standing / len(code)}
    return found


def medians(found: list[dict[str, float]]) -> dict[str, float]:
    """Return the median over the seeds of each figure."""
    return {key: round(float(np.median([each[key] for each in found])), 3) for key in found[0]}


def main() -> None:
    """Tune, judge, print the table, and JSON last."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--seeds", type=int, default=3)
    parser.add_argument("--layouts", type=int, default=2000)
    parser.add_argument("--episodes", type=int, default=24_000, help="for the tuning of each way, grade and seed")
    parser.add_argument("--grades", nargs="+", choices=GRADES, default=list(GRADES))
    parser.add_argument("--ways", nargs="+", choices=WAYS, default=list(WAYS))
    parser.add_argument("--sets", type=Path, help="tuned sets: read where they are there, written otherwise")
    given = parser.parse_args()
    yard = load_yard(config_path("yards/parcel_yard.yaml"))
    points: dict[str, list[float]] = {}
    if given.sets and given.sets.exists():
        points = json.loads(given.sets.read_text(encoding="utf-8"))
    table: dict[tuple[str, str], list[dict[str, float]]] = {}
    for seed in range(given.seeds):
        for grade in given.grades:
            layouts = draw_many(yard, GRADES[grade][0], given.layouts, UNSEEN + seed)
            for name in given.ways:
                way, key, began = WAYS[name], f"{name} {grade} {seed} {given.episodes}", time.monotonic()
                if key not in points:
                    points[key] = tune(way, yard, grade, given.episodes, seed)
                    if given.sets:
                        given.sets.write_text(json.dumps(points, indent=1), encoding="utf-8")
                made = way.make(points[key])
                found = judge(way, yard, grade, made, layouts, name == "foresight")
                table.setdefault((name, grade), []).append(found)
                show(f"seed {seed}: {name}", grade, found, time.monotonic() - began)
            if "foresight" in given.ways:
                found = judge(WAYS["foresight"], yard, grade, DEFAULTS, layouts, False)
                table.setdefault(("default", grade), []).append(found)
    report(table, given.grades)


def show(name: str, grade: str, found: dict[str, float], took: float | None = None) -> None:
    """Print one line of the table."""
    parts = "  ".join(f"{key} {value:7.3f}" for key, value in found.items())
    print(f"{name:26s} {grade:7s} {parts}" + (f"   {took:.0f} s" if took is not None else ""), flush=True)


def report(table: dict[tuple[str, str], list[dict[str, float]]], grades: list[str]) -> None:
    """Print medians over the seeds, and all of them as one line of JSON."""
    print("\nmedians")
    summary: dict[str, Any] = {}
    peers: dict[str, Any] = {}
    for (name, grade), found in sorted(table.items(), key=lambda item: grades.index(item[0][1])):
        middle = medians(found)
        show(name, grade, middle)
        if name == "foresight":
            summary[grade] = middle
        else:
            peers.setdefault(name, {})[grade] = middle
    summary["default"] = peers.pop("default", {})
    print(json.dumps({**summary, "peers": peers}))


if __name__ == "__main__":
    main()
