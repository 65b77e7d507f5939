"""Our search against plain ``cma`` on the COCO suites bbob and bbob-noisy, dimension 10, under the same budget.

    python test/benchmark/coco.py [--budget 60] [--instances 5]

N. Hansen et al., "COCO: a platform for comparing continuous optimizers in a black-box setting", Optimization Methods
and Software 36(1), 2021. Both engines start from the same point with the same step and population. Each names one
point at the end (ours its ``favourite``, cma its ``xfavorite``); on bbob-noisy what it is worth is measured by the
mean of many evaluations. The regret is that value less the function's optimum, and the ratio is ours over cma's, the
median over the problems: below 1 ours is better.
"""

from __future__ import annotations

import argparse
import json
import os
import tempfile
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import cma
import cocoex
import numpy as np

from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.tuning.search import Generation, Search

DIMENSION = 10
SIGMA = 0.15
LOOKS = 200
FLOOR = 1e-8
"""Regrets below it count as it: COCO's own target precision."""

Function = Callable[[FloatArray], float]


def in_cube(problem: Function) -> Function:
    """Return the problem over the unit cube: COCO's region of interest is [-5, 5]."""
    return lambda point: float(problem(10.0 * np.asarray(point) - 5.0))


def ours(function: Function, start: FloatArray, budget: int, seed: int) -> FloatArray:
    """Return what our search names after ``budget`` evaluations."""
    search = Search(start, SIGMA, (seed,))
    for _ in range(budget // search.population):
        points = search.ask()
        costs = tuple(function(point) for point in points)
        search.tell(Generation(tuple(tuple(map(float, point)) for point in points), costs))
    return search.favourite


def plain(function: Function, start: FloatArray, budget: int, seed: int) -> FloatArray:
    """Return what plain cma names after ``budget`` evaluations."""
    options = {"bounds": [0.0, 1.0], "seed": seed + 1, "verbose": -9, "verb_log": 0, "verb_disp": 0}
    engine = cma.CMAEvolutionStrategy(start, SIGMA, options)
    for _ in range(budget // engine.popsize):
        points = engine.ask()
        engine.tell(points, [function(point) for point in points])
    favourite: FloatArray = np.clip(engine.result.xfavorite, 0.0, 1.0)
    return favourite


def worth(function: Function, point: FloatArray, looks: int) -> float:
    """Return the mean of so many evaluations at a point."""
    return float(np.mean([function(point) for _ in range(looks)]))


def optimum(problem: Any) -> float:
    """Return the function's least value: COCO writes where it lies to a file in the working folder; no noise there."""
    before = Path.cwd()
    with tempfile.TemporaryDirectory() as folder:
        os.chdir(folder)
        try:
            problem._best_parameter("print")
        finally:
            os.chdir(before)
        [path] = Path(folder).iterdir()
        return float(problem(np.loadtxt(path)))


def ratios(suite_name: str, budget: int, instances: int) -> dict[str, list[float]]:
    """Return for each function the regrets' ratios over its instances."""
    noisy = suite_name == "bbob-noisy"
    options = f"dimensions: {DIMENSION} instance_indices: 1-{instances}"
    found: dict[str, list[float]] = {}
    for number, problem in enumerate(cocoex.Suite(suite_name, "", options)):
        function = in_cube(problem)
        start = np.random.default_rng(number).uniform(0.2, 0.8, DIMENSION)
        looks = LOOKS if noisy else 1
        named = [worth(function, find(function, start, budget, number), looks) for find in (ours, plain)]
        best = optimum(problem)
        regrets = [max(value - best, FLOOR) for value in named]
        found.setdefault(problem.id.split("_i")[0], []).append(regrets[0] / regrets[1])
    return found


def summary(found: dict[str, list[float]]) -> tuple[float, float]:
    """Return the geometric mean of the ratios and their median."""
    logs = np.log([ratio for row in found.values() for ratio in row])
    return float(np.exp(logs.mean())), float(np.exp(np.median(logs)))


def main(arguments: Sequence[str] | None = None) -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--budget", type=int, default=60, help="evaluations for each dimension")
    parser.add_argument("--instances", type=int, default=5)
    told = parser.parse_args(arguments)
    result = {}
    for key, suite in (("noisy_ratio", "bbob-noisy"), ("noiseless_ratio", "bbob")):
        found = ratios(suite, told.budget * DIMENSION, told.instances)
        mean, median = summary(found)
        print(f"{suite}: regret over plain cma's, geometric mean {mean:.3f}, median {median:.3f}")
        for name, row in found.items():
            print(f"  {name:28} " + " ".join(f"{ratio:8.3f}" for ratio in row))
        result[key] = round(median, 3)
    print(json.dumps(result))


if __name__ == "__main__":
    main()
