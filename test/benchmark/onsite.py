"""What a session on site wins back when the robot is not the one that was prepared for at home.

    python test/benchmark/onsite.py [--seeds 20] [--budgets 60 200 400] [--model foresight]

The site's robot: wheel acceleration 40 % less, 60 ms more delay, wheels 8 % apart, up to 10 % slip; guidance knows of
none of it. A session begins with the prior's set in service and the prior as its start; search, controls and verdict
come out of its budget of episodes. Recovered: the share of the way from the prior's mean cost to that of the site's own
optimum (a search of 20,000 episodes there) on layouts that nobody has seen, 0 where the verdict is `keep`. The last
line is JSON with medians over the seeds; how often a set that is no better is accepted is in ``verdict.py``.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve()
sys.path[:0] = [str(HERE.parent), str(HERE.parents[2])]
from simulated import hold, one_robot, parcel_yard  # beside this file

from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.tuning.config import SessionConfig
from fieldnav_ros.tuning.cost import costs
from fieldnav_ros.tuning.pretune import pretune_config
from fieldnav_ros.tuning.space import Prior
from fieldnav_ros.world.batch import simulate
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.yard import Plant, Yard

GRADE = "moving"
SITE = Plant(accel_scale=0.6, command_delay=0.06, wheel_mismatch=0.08, slip=0.10)
PREPARED = 20_000
UNSEEN = 7_000_000


class Bench:
    """Runs sessions in batched simulation and judges sets on the site's unseen layouts."""

    def __init__(self, unseen: int, model: str) -> None:
        self.model = model
        self.home = parcel_yard()
        self.site = one_robot(self.home, SITE)
        self.limit = self.site.grade(GRADE).time_limit
        self._unseen = draw_many(self.site, GRADE, unseen, UNSEEN)

    def cost(self, parameters: ParameterSet) -> float:
        """Return a set's mean cost (s) on the site."""
        result = simulate(self.site, GRADE, self._unseen, [parameters], model=self.model)
        return float(costs(result.code, result.time, self.limit).mean())

    def prepare(self, yard: Yard, seed: int, prior: Prior | None = None) -> Prior:
        """Return what a preparation on a yard learns."""
        return hold(yard, pretune_config(yard, PREPARED, seed), self.model, prior).prior()

    def visit(self, prior: Prior, episodes: int, seed: int) -> tuple[ParameterSet, str]:
        """Run a session on site; return the champion and the verdict, or why there was none."""
        config = SessionConfig(
            seed=seed, floor_time_s=episodes * 2.0 * self.limit, episodes=episodes, grade=GRADE, time_limit=self.limit,
            rounds=1, reset_guess_s=self.site.reset_time,
        )  # fmt: skip
        session = hold(self.site, config, self.model, prior, prior.parameters())
        return session.champion.parameters, str(session.summary()["last_verdict"])


def main() -> None:
    """Prepare once, find the site's optimum, visit it, and print JSON last."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--seeds", type=int, default=20)
    parser.add_argument("--budgets", type=int, nargs="+", default=[60, 200, 400])
    parser.add_argument("--unseen", type=int, default=1000)
    parser.add_argument("--model", default="foresight", choices=("foresight", "published"))
    given = parser.parse_args()
    bench = Bench(given.unseen, given.model)
    prior = bench.prepare(bench.home, 1)
    start = bench.cost(prior.parameters())
    best = min(bench.cost(bench.prepare(bench.site, 2, learnt).parameters()) for learnt in (prior, None))
    print(f"on site: the prior's set costs {start:.3f} s, the site's own optimum {best:.3f} s", flush=True)
    summary: dict[str, object] = {"model": given.model, "prior": round(start, 3), "optimum": round(best, 3)}
    for budget in given.budgets:
        recovered, accepted = [], 0
        for seed in range(given.seeds):
            champion, verdict = bench.visit(prior, budget, seed)
            recovered.append((start - bench.cost(champion)) / (start - best) if verdict == "accept" else 0.0)
            accepted += verdict == "accept"
        middle = float(np.median(recovered))
        won = [share for share in recovered if share != 0.0]
        mean_won = float(np.median(won)) if won else 0.0
        told = f"accepted {accepted} of {given.seeds}, recovered {middle:.2f} (where accepted {mean_won:.2f})"
        print(f"{budget:4d} episodes: {told}", flush=True)
        summary[f"recovered_{budget}"] = round(middle, 3)
        summary[f"accepted_{budget}"] = round(accepted / given.seeds, 3)
        summary[f"recovered_where_accepted_{budget}"] = round(mean_won, 3)
    print(json.dumps(summary))


if __name__ == "__main__":
    main()
