"""Speed of the batched simulator: 8 sets on 400 layouts with 4 moving carts, published model.

    python test/benchmark/throughput.py

Against the same equations compiled with numba (``compiled.py``), against the physics engine pymunk stepping the same
scenes without guidance, and with two worker processes. Needs the extra ``benchmark`` and, for ``two_workers``, two
free cores. Processor time is compared within one run, alternating, so that a busy machine costs both sides.
"""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path

import compiled
import numpy as np
import pymunk
from simulated import one_robot, parcel_yard

from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.prepare.workers import InPlace, LocalProcesses
from fieldnav_ros.tuning.space import SPACE
from fieldnav_ros.world.batch import BatchResult, simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.world.plant import STEP
from fieldnav_ros.world.work import Work
from fieldnav_ros.yard import Yard

SETS, LAYOUTS, GRADE, MODEL, SEED = 8, 400, "moving", "published", 3
REPEATS = 5
SCENES, SCENE_STEPS = 60, 300


def scene() -> tuple[Yard, list[Layout], list[ParameterSet]]:
    """Return the yard, the layouts, and sets spread around the defaults."""
    yard = one_robot(parcel_yard())
    rng = np.random.default_rng(0)
    sets = [SPACE.from_unit(SPACE.to_unit(DEFAULTS) + 0.15 * rng.standard_normal(9)) for _ in range(SETS)]
    return yard, draw_many(yard, GRADE, LAYOUTS, SEED), sets


def best_rates(runs: Sequence[Callable[[], int]], clock: Callable[[], float], repeats: int = REPEATS) -> list[float]:
    """Return each run's best rate (robot-steps per s of the clock) over the repeats, the runs taking turns."""
    rates = [0.0] * len(runs)
    for _ in range(repeats):
        for number, run in enumerate(runs):
            began = clock()
            steps = run()
            rates[number] = max(rates[number], steps / (clock() - began))
    return rates


def check_equal(batch: BatchResult, other: compiled.Outcomes) -> float:
    """Return the largest difference of times (s) and gaps (m); exit where the two are not the same simulation."""
    difference = max(
        float(np.abs(batch.time - other.time).max()), float(np.abs(batch.clearance - other.clearance).max())
    )
    if not np.array_equal(batch.code, other.code) or difference > 1e-9 or batch.steps != other.steps:
        raise SystemExit(f"batch and compiled equations differ by {difference:.3g}: their speeds cannot be compared")
    return difference


def engine_scenes(yard: Yard, layouts: Sequence[Layout]) -> list[pymunk.Space]:
    """Return spaces with four walls, the robot driving straight on from its start, and the carts, all elastic discs."""
    (low_x, high_x), (low_y, high_y) = yard.floor.x, yard.floor.y
    corners = [(low_x, low_y), (high_x, low_y), (high_x, high_y), (low_x, high_y)]
    spaces = []
    for layout in layouts:
        space = pymunk.Space()
        for one, other in zip(corners, corners[1:] + corners[:1]):
            wall = pymunk.Segment(space.static_body, one, other, 0.0)
            wall.elasticity = 1.0
            space.add(wall)
        start, speed = layout.start, yard.robot.wheel_speed
        discs = [(start.x, start.y, speed * math.cos(start.yaw), speed * math.sin(start.yaw), yard.robot.radius)]
        discs += [(cart.x, cart.y, cart.vx, cart.vy, cart.radius) for cart in layout.obstacles]
        for x, y, vx, vy, radius in discs:
            body = pymunk.Body(1.0, pymunk.moment_for_circle(1.0, 0.0, radius))
            body.position, body.velocity = (x, y), (vx, vy)
            shape = pymunk.Circle(body, radius)
            shape.elasticity = 1.0
            space.add(body, shape)
        spaces.append(space)
    return spaces


def engine_run(yard: Yard, layouts: Sequence[Layout]) -> int:
    """Step fresh spaces and return the robot-steps, one for each step of a space."""
    for space in engine_scenes(yard, layouts[:SCENES]):
        for _ in range(SCENE_STEPS):
            space.step(STEP)
    return SCENES * SCENE_STEPS


def two_workers(work: Work) -> tuple[float, float]:
    """Return robot-steps per second of wall time in this process and in two others, all started beforehand."""
    with LocalProcesses(2) as workers:
        alone = InPlace()
        workers(work)
        one, two = best_rates(
            [lambda: sum(r.steps for r in alone(work)), lambda: sum(r.steps for r in workers(work))], time.perf_counter
        )
    return one, two


def peak_mib() -> float:
    """Return the peak memory (MiB) of a process of its own that runs the batch once, as the system counts it."""
    here = Path(__file__).resolve()
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(here.parent.parent.parent), *sys.path])}
    code = (
        "import resource; from fieldnav_ros.resources import config_path; from fieldnav_ros.yard import load_yard;"
        "from fieldnav_ros.parameters import DEFAULTS; from fieldnav_ros.world.batch import simulate;"
        "from fieldnav_ros.world.layouts import draw_many; from fieldnav_ros.world.plants import plant_of;"
        "yard = load_yard(config_path('yards/parcel_yard.yaml'));"
        f"layouts = draw_many(yard, {GRADE!r}, {LAYOUTS}, {SEED});"
        f"simulate(yard, {GRADE!r}, layouts, [DEFAULTS] * {SETS}, [plant_of(yard, each) for each in layouts]);"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)"
    )
    done = subprocess.run([sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True)
    return int(done.stdout) / 1024.0


def main() -> None:
    """Measure and print."""
    yard, layouts, sets = scene()
    batch = simulate(yard, GRADE, layouts, sets, model=MODEL)
    difference = check_equal(batch, compiled.run(yard, GRADE, layouts, sets))
    ours, theirs, engine, default = best_rates(
        [
            lambda: simulate(yard, GRADE, layouts, sets, model=MODEL).steps,
            lambda: compiled.run(yard, GRADE, layouts, sets).steps,
            lambda: engine_run(yard, layouts),
            lambda: simulate(yard, GRADE, layouts, sets).steps,
        ],
        time.process_time,
    )
    one, two = two_workers(Work(yard, GRADE, yard.grade(GRADE).time_limit, tuple(layouts), tuple(sets), MODEL))
    peak = peak_mib()
    print(f"{'':34}{'robot-steps per s':>20}")
    for name, rate in [
        ("batch, one core", ours), ("compiled equations, one core", theirs), ("pymunk, no guidance, one core", engine),
        ("batch, default model, one core", default), ("batch, this process (wall time)", one),
        ("batch, two workers (wall time)", two),
    ]:  # fmt: skip
        print(f"{name:34}{rate:20,.0f}")
    print(f"{batch.steps} robot-steps; batch and compiled equations differ by {difference:.1g}; peak {peak:.0f} MiB")
    print(json.dumps({
        "vs_compiled": round(ours / theirs, 3), "vs_pymunk": round(ours / engine, 2),
        "two_workers": round(two / one, 2), "peak_mib": round(peak),
    }))  # fmt: skip


if __name__ == "__main__":
    main()
