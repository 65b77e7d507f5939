"""The curriculum of a search: when an easier grade has taught enough.

Y. Bengio et al., "Curriculum learning", ICML 2009: easy cases first. A set that cannot reach the goal on an empty
floor does not need a crowded one to be told from a better one, and easy episodes are short.
"""

from __future__ import annotations

import numpy as np

from fieldnav_ros.tuning.schedule import Plan
from fieldnav_ros.tuning.state import State

WINDOW = 4
PAYS = 0.03
STAGE_WIDENING = 2.0
"""A search hands on what it has narrowed down for one grade; the best set of the next one lies close, not inside."""


def stage_over(state: State, plan: Plan, blocks: int) -> str | None:
    """Say why the search is to move on to the next grade; None where it is not.

    The last ``WINDOW`` generations are compared with as many before them: gains of less than ``PAYS`` of the
    cost do not pay. ``blocks`` is how many layouts the next generation could have; ``lead_share`` of the whole
    search is the most that one grade takes.
    """
    used = state.times.episodes - state.stage.episodes_before
    if not blocks:
        return "the episodes for the search are used up"
    if used >= state.told.lead_share * (state.times.episodes - state.episodes_before + plan.search_episodes):
        return "its share of the search is used up"
    costs = [float(np.mean(generation.costs)) for generation in state.stage_generations]
    if len(costs) >= 2 * WINDOW:
        earlier, later = np.mean(costs[-2 * WINDOW : -WINDOW]), np.mean(costs[-WINDOW:])
        if later > (1.0 - PAYS) * earlier:
            return f"it stopped paying: {earlier:.2f} s, then {later:.2f} s"
    return None
