"""How many episodes the search needs on the moving parcel yard, cold and with a prior, beside three published searches.

    python test/benchmark/sample_efficiency.py [--seeds 10] [--unseen 1000] [--model foresight]

The yardstick is plain CMA-ES (package cma, population 10, each set on 10 layouts of its own, 75 generations: 7,500
episodes). Beside it, with as many episodes and as many layouts a set: the tree-structured Parzen estimator (Bergstra
et al., NeurIPS 2011; package optuna) and random search. Ours: a session of a quarter of the episodes, cold, and one of
a fifteenth with a prior from simulated plants of the yard's ranges. All begin at the table's defaults; the verdict's
pairs are part of ours. Figures are mean costs (s) on layouts that nobody has seen; the last line is JSON with medians
over the seeds.
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import cma
import numpy as np
import optuna

HERE = Path(__file__).resolve()
sys.path[:0] = [str(HERE.parent), str(HERE.parents[2])]
from simulated import hold, one_robot, parcel_yard  # beside this file

from fieldnav_ros.parameters import DEFAULTS, ParameterSet, stack
from fieldnav_ros.tuning.cost import costs
from fieldnav_ros.tuning.pretune import pretune_config
from fieldnav_ros.tuning.space import SPACE, Prior
from fieldnav_ros.world.batch import _Run, simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.yard import Yard

GRADE = "moving"
POPULATION, LAYOUTS, GENERATIONS = 10, 10, 75
EPISODES = POPULATION * LAYOUTS * GENERATIONS
COLD, WARM = EPISODES // 4, EPISODES // 15
PRIOR_EPISODES = 20_000
UNSEEN = 5_000_000
"""Seed of the layouts that judge."""


class Floor:
    """The moving yard with its plant as it is; counts nothing, decides nothing."""

    def __init__(self, unseen: int, model: str) -> None:
        self.model = model
        self.ranged = parcel_yard()
        self.yard = one_robot(self.ranged)
        self.limit = self.yard.grade(GRADE).time_limit
        self._unseen = draw_many(self.yard, GRADE, unseen, UNSEEN)

    def costs(self, points: list[Any], seed: int) -> np.ndarray:
        """Return each point's mean cost on layouts of its own."""
        rows = LAYOUTS * len(points)
        layouts = draw_many(self.yard, GRADE, rows, seed)
        # every set on its own layouts alone: the simulator's public face would run every set on all of them
        code, time_s, _, _ = _Run(
            self.yard, layouts, [self.yard.plant] * rows, np.arange(rows),
            stack([SPACE.from_unit(point) for point in points], LAYOUTS), self.model, self.limit, 0.0,
        ).finish()  # fmt: skip
        found: np.ndarray = costs(code, time_s, self.limit).reshape(len(points), LAYOUTS).mean(axis=1)
        return found

    def judge(self, parameters: ParameterSet) -> float:
        """Return a set's mean cost on the unseen layouts."""
        result = simulate(self.yard, GRADE, self._unseen, [parameters], model=self.model)
        return float(costs(result.code, result.time, self.limit).mean())


def yardstick(floor: Floor, seed: int) -> ParameterSet:
    """Run plain CMA-ES and return the set at its last mean."""
    search = cma.CMAEvolutionStrategy(
        SPACE.to_unit(DEFAULTS), 0.25, {"bounds": [0, 1], "popsize": POPULATION, "seed": seed + 1, "verbose": -9}
    )
    for generation in range(GENERATIONS):
        points = search.ask()
        search.tell(points, list(floor.costs(points, 1000 * (seed + 1) + generation)))
    return SPACE.from_unit(np.clip(search.result.xfavorite, 0.0, 1.0))


def parzen(floor: Floor, seed: int) -> ParameterSet:
    """Run the tree-structured Parzen estimator, ten sets at a time, and return its best."""
    optuna.logging.set_verbosity(optuna.logging.WARNING)
    study = optuna.create_study(sampler=optuna.samplers.TPESampler(seed=seed, constant_liar=True))
    names = list(SPACE.names)
    study.enqueue_trial(dict(zip(names, (float(u) for u in SPACE.to_unit(DEFAULTS)))))
    for generation in range(GENERATIONS):
        trials = [study.ask() for _ in range(POPULATION)]
        points = [[trial.suggest_float(name, 0.0, 1.0) for name in names] for trial in trials]
        for trial, value in zip(trials, floor.costs(points, 1000 * (seed + 1) + generation)):
            study.tell(trial, float(value))
    return SPACE.from_unit([study.best_params[name] for name in names])


def random_search(floor: Floor, seed: int) -> ParameterSet:
    """Try sets drawn at random, the defaults among them, and return the best."""
    rng = np.random.default_rng(seed)
    points = [SPACE.to_unit(DEFAULTS), *rng.random((POPULATION * GENERATIONS - 1, len(SPACE.axes)))]
    found = np.concatenate([
        floor.costs(points[first : first + POPULATION], 1000 * (seed + 1) + first)
        for first in range(0, len(points), POPULATION)
    ])  # fmt: skip
    return SPACE.from_unit(points[int(found.argmin())])


def ours(floor: Floor, yard: Yard, episodes: int, seed: int, prior: Prior | None) -> tuple[Prior, ParameterSet]:
    """Run a session as ``fieldnav pretune`` does; return what it learnt and what it would put in service."""
    config = pretune_config(yard, max(episodes, 400), seed)
    if prior is not None:
        config = config.model_copy(update={"lead_in": ()})
    learnt = hold(yard, config, floor.model, prior).prior()
    return learnt, learnt.parameters()


def main() -> None:
    """Run all of them for each seed, print as it goes, and JSON last."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--seeds", type=int, default=10)
    parser.add_argument("--unseen", type=int, default=1000)
    parser.add_argument("--model", default="foresight", choices=("foresight", "published"))
    given = parser.parse_args()
    floor = Floor(given.unseen, given.model)
    start = floor.judge(DEFAULTS)
    print(f"defaults {start:.3f}", flush=True)
    prior, found = ours(floor, floor.ranged, PRIOR_EPISODES, 777, None)
    print(f"prior's mean, {PRIOR_EPISODES} episodes on many plants {floor.judge(found):.3f}", flush=True)
    ways: dict[str, tuple[int, Callable[[int], ParameterSet]]] = {
        "warm": (WARM, lambda seed: ours(floor, floor.yard, WARM, seed, prior)[1]),
        "cold": (COLD, lambda seed: ours(floor, floor.yard, COLD, seed, None)[1]),
        "yardstick": (EPISODES, lambda seed: yardstick(floor, seed)),
        "parzen": (EPISODES, lambda seed: parzen(floor, seed)),
        "random": (EPISODES, lambda seed: random_search(floor, seed)),
    }
    found_costs: dict[str, list[float]] = {name: [] for name in ways}
    for seed in range(given.seeds):
        for name, (_, way) in ways.items():
            began = time.monotonic()
            found_costs[name].append(floor.judge(way(seed)))
            print(f"seed {seed} {name:10s} {found_costs[name][-1]:.3f}   {time.monotonic() - began:.0f} s", flush=True)
    summary = {name: round(float(np.median(each)), 3) for name, each in found_costs.items()}
    for name, (episodes, _) in ways.items():
        low, high = min(found_costs[name]), max(found_costs[name])
        print(f"{name:10s} {episodes:5d} episodes: median {summary[name]:.3f}, {low:.3f} to {high:.3f}")
    print(json.dumps({"model": given.model, "seeds": given.seeds, "defaults": round(start, 3), **summary}))


if __name__ == "__main__":
    main()
