"""The verdict's two promises: few false acceptances over null sessions, and proof of large gains in few pairs.

    python test/benchmark/verdict.py [--sessions 1000]

A null session is a whole session, search and all its verdicts, in which every set has the same law of outcomes, so
that every acceptance is false; it is looked at after every episode and stops at the first acceptance. Outcomes are
those of the default set over fresh moving layouts and robots like the yard's, under the published model, which fails
often enough for large differences. In half of the episodes the layout decides (as where sets meet the same
difficulties), in the others chance. Power is counted on pairs alone: in a stated share of the champion's failures the
challenger arrives instead, which makes its gain.
"""

from __future__ import annotations

import argparse
import json
from collections.abc import Sequence

import numpy as np

from fieldnav_ros.model import Outcome
from fieldnav_ros.parameters import DEFAULTS, FloatArray
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.config import SessionConfig
from fieldnav_ros.tuning.cost import cost_bound, costs
from fieldnav_ros.tuning.events import Episode
from fieldnav_ros.tuning.pretune import session_on
from fieldnav_ros.tuning.verdict import Evidence
from fieldnav_ros.world.batch import BatchResult
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.world.work import Work
from fieldnav_ros.yard import Yard, load_yard

GRADE, MODEL = "moving", "published"
POOL = 400
EPISODES = 120
GAINS = (0.5, 1.0, 1.5, 2.0, 2.25)
PAIRS = (10, 20, 40, 80)
TRIALS = 2000


def pool_of(yard: Yard) -> BatchResult:
    """Return outcomes of the default set, one row, over fresh layouts and plants."""
    drawn = tuple(draw_many(yard, GRADE, POOL, 77))
    return Work(yard, GRADE, yard.grade(GRADE).time_limit, drawn, (DEFAULTS,), MODEL).run()


def accepts_falsely(yard: Yard, pool: Sequence[Outcome], seed: int) -> bool:
    """Run one null session; tell whether it ever accepts."""
    session = session_on(yard)
    limit = yard.grade(GRADE).time_limit
    config = SessionConfig(seed=seed, floor_time_s=1.0, episodes=EPISODES, grade=GRADE, time_limit=limit, layouts=2)
    session.apply(*session.begin(config))
    rng = np.random.default_rng((seed, 1))
    while episodes := session.pending():
        outcome = _outcome(episodes[0], pool, rng)
        session.apply(*session.record(episodes[0].id, outcome, outcome.time))
        if session.champion.set_id != "initial":
            return True
    return False


def _outcome(episode: Episode, pool: Sequence[Outcome], rng: np.random.Generator) -> Outcome:
    index = episode.layout.seed if rng.random() < 0.5 else int(rng.integers(len(pool)))
    return pool[index % len(pool)]


def power(cost: FloatArray, limit: float, gain: float, pairs: int, rng: np.random.Generator) -> float:
    """Return the share of trials that accept within so many pairs a challenger better by ``gain`` s in the mean."""
    failed = cost > limit
    quick = cost[~failed]
    share = gain / (failed.mean() * (cost[failed].mean() - quick.mean()))
    if share > 1.0:
        return float("nan")
    accepted = 0
    for _ in range(TRIALS):
        evidence = Evidence(cost_bound(limit), 0.05 * 2 / 3)  # the first of two verdicts
        before, other = rng.choice(cost, pairs), rng.choice(cost, pairs)
        spared = (other > limit) & (rng.random(pairs) < share)
        after = np.where(spared, rng.choice(quick, pairs), other)
        for difference in before - after:
            evidence = evidence.after(float(difference))
            if evidence.accepted:
                accepted += 1
                break
    return accepted / TRIALS


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--sessions", type=int, default=1000)
    sessions = parser.parse_args().sessions
    yard = load_yard(config_path("yards/parcel_yard.yaml"))
    result = pool_of(yard)
    limit = yard.grade(GRADE).time_limit
    cost = costs(result.code[0], result.time[0], limit)
    print(f"pool: mean cost {cost.mean():.2f} s, failures {np.mean(cost > limit):.1%}")
    rng = np.random.default_rng(5)
    print("accepted within pairs " + "".join(f"{pairs:>8}" for pairs in PAIRS))
    found = {}
    for gain in GAINS:
        shares = [power(cost, limit, gain, pairs, rng) for pairs in PAIRS]
        found[f"{gain:g}"] = shares[PAIRS.index(40)]
        print(f"gain of {gain:4.1f} s          " + "".join(f"{share:8.2f}" for share in shares))
    pool = [result.outcome(0, column) for column in range(POOL)]
    false = sum(accepts_falsely(yard, pool, seed) for seed in range(sessions))
    print(f"{false} of {sessions} null sessions accepted, looked at after each of {EPISODES} episodes")
    known = {gain: round(share, 3) for gain, share in found.items() if np.isfinite(share)}
    print(json.dumps({"false_accept": false / sessions, "power": known}))


if __name__ == "__main__":
    main()
