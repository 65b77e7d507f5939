"""The plan: how many episodes the budget holds, how many for the search, how many kept for the verdict.

The budget is floor time, or, where ``SessionConfig.episodes`` is given, a number of episodes.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import NamedTuple

from fieldnav_ros.tuning.config import SessionConfig

GUESS_WEIGHT = 4.0  # the guesses count as much as so many episodes seen


@dataclass(frozen=True)
class Times:
    """What episodes and resets have taken so far (s)."""

    episodes: int = 0
    episode_s: float = 0.0
    reset_s: float = 0.0
    recorded_s: float | None = None  # mean of earlier recordings, which then is the guess

    def after(self, episode_s: float, floor_time_s: float) -> Times:
        """Return the times with one more episode; what its floor time holds beyond it is the reset."""
        return replace(
            self,
            episodes=self.episodes + 1,
            episode_s=self.episode_s + episode_s,
            reset_s=self.reset_s + max(floor_time_s - episode_s, 0.0),
        )

    def means(self, config: SessionConfig) -> tuple[float, float]:
        """Return the expected episode and reset (s): a mean of the guesses and of what was seen."""
        weight = GUESS_WEIGHT + self.episodes
        return (
            (GUESS_WEIGHT * (self.recorded_s or config.episode_guess_s) + self.episode_s) / weight,
            (GUESS_WEIGHT * config.reset_guess_s + self.reset_s) / weight,
        )


class Plan(NamedTuple):
    """What the rest of the budget is for. Times in s; episodes are expected numbers, rounded down."""

    floor_left_s: float
    mean_episode_s: float
    mean_reset_s: float
    search_left_s: float
    episodes_left: int
    search_episodes: int
    verdict_episodes: int

    @property
    def step_s(self) -> float:
        """Expected floor time of one episode with its reset (s)."""
        return self.mean_episode_s + self.mean_reset_s

    def fits_one_more(self, since_s: float) -> bool:
        """Whether another episode with its reset is expected to end in time, ``since_s`` after the last one ended."""
        return self.floor_left_s - since_s >= self.step_s

    @property
    def used_up(self) -> bool:
        """Whether nothing is left at all; with some time left an episode may still end in it."""
        return self.floor_left_s <= 0


def make_plan(
    config: SessionConfig,
    times: Times,
    floor_used_s: float,
    round_budget_s: float,
    in_verdict: bool,
    episodes_before: int = 0,
) -> Plan:
    """Plan the rest of a session.

    ``round_budget_s`` is the floor time left, ``episodes_before`` the number of episodes run, when the round
    (search, then verdict) began; ``verdict_share`` of what was left then is kept for the verdict, and never less
    than ``least_pairs`` take. In the verdict all that is left is for it.
    """
    episode, reset = times.means(config)
    step = episode + reset
    if config.episodes is not None:
        given, count = max(config.episodes - episodes_before, 0), max(config.episodes - times.episodes, 0)
        reserve = max(int(config.verdict_share * given), 2 * config.least_pairs)
        search = 0 if in_verdict else max(count - reserve, 0)
        return Plan(count * step, episode, reset, search * step, count, search, count - search)
    left = max(config.floor_time_s - floor_used_s, 0.0)
    reserve_s = max(config.verdict_share * round_budget_s, 2 * config.least_pairs * step)
    search_s = 0.0 if in_verdict else max(left - reserve_s, 0.0)
    search = int(search_s / step)
    return Plan(left, episode, reset, search_s, int(left / step), search, max(int(left / step) - search, 0))


def alpha_of_round(alpha: float, number: int, rounds: int) -> float:
    """Return the part of ``alpha`` that verdict ``number`` (from 1) of at most ``rounds`` may spend.

    Halved from one to the next and scaled so that all of them sum to ``alpha`` (union bound): the first of one
    round has all of it, the first of two has two thirds.
    """
    return float(alpha * 2.0**-number / (1.0 - 2.0**-rounds))
