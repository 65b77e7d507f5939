"""What recordings of earlier episodes are good for in a new session: its plan, its first step, its start. Pure.

They are evidence of another day. They place the search and tell how long episodes take; no verdict rests on them.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

import numpy as np

from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.space import SPACE, Prior

LEAST_SETS = 10
"""Fewer sets than that place no search."""
BEST_SHARE, WIDTH = 0.1, 0.1
"""Share of the sets that counts as promising, and the spread given to each (unit cube): the paper's gamma and alpha."""
LEAST_BEST = 3
"""A best set alone is as likely the luckiest one, with noisy costs."""


def usable(
    items: Iterable[ev.EvidenceImported], config: ev.SessionConfig, about: ev.About | None
) -> tuple[ev.EvidenceImported, ...]:
    """Return what was recorded under the session's own conditions: grade, time limit and field."""
    model = about.model if about is not None else ""
    return tuple(
        item for item in items
        if (item.grade, item.time_limit, item.model) == (config.grade, config.time_limit, model)
    )  # fmt: skip


def mean_time(items: Sequence[ev.EvidenceImported]) -> float | None:
    """Return how long the episodes took on average (s); None without any."""
    times = [episode.outcome.time for item in items for episode in item.episodes]
    return math.fsum(times) / len(times) if times else None


def costs_of(items: Sequence[ev.EvidenceImported], parameters: ParameterSet) -> tuple[int, float]:
    """Return number and sum (s) of the costs recorded of exactly this set."""
    costs = [episode.cost for item in items if item.parameters == parameters for episode in item.episodes]
    return len(costs), math.fsum(costs)


def warm_start(items: Sequence[ev.EvidenceImported]) -> Prior | None:
    """Return where a search of the same floor should begin; None where too few sets were recorded to say.

    The promising distribution of M. Nomura et al., "Warm starting CMA-ES for hyperparameter optimization", AAAI
    2021: the Gaussian that is closest to one of width alpha around each of the best sets.
    """
    tallies = {item.parameters: costs_of(items, item.parameters) for item in items}
    if len(tallies) < LEAST_SETS:
        return None
    ranked = sorted(tallies, key=lambda chosen: tallies[chosen][1] / tallies[chosen][0])
    count = max(LEAST_BEST, math.ceil(BEST_SHARE * len(ranked)))
    best = np.array([SPACE.to_unit(chosen) for chosen in ranked[:count]])
    mean = best.mean(axis=0)
    spread = (best - mean).T @ (best - mean) / len(best)
    episodes = sum(count for count, _ in tallies.values())
    return Prior.of(mean, spread + WIDTH**2 * np.eye(best.shape[1]), "recorded episodes", episodes)
