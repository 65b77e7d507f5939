"""What a session is told before it begins."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from fieldnav_ros.model import Frozen, Positive

LEAST_EPISODES = 400
"""With fewer a preparation has no generation for each grade, or no pairs for the verdict."""
NonNegative = Annotated[float, Field(ge=0)]


class Stage(Frozen):
    """A grade that the search goes through, and the time allowed for an episode on it (s)."""

    grade: str = Field(min_length=1)
    time_limit: Positive


class SessionConfig(Frozen):
    """What a session is told before it begins. Times in s."""

    seed: int = Field(default=0, ge=0, description="everything random in the session comes from it")
    floor_time_s: Positive = Field(description="floor time the session may use, resets included")
    episodes: int | None = Field(
        default=None, ge=1, description="episodes the session may use; where given, floor time does not bound it"
    )
    grade: str = Field(default="moving", min_length=1, description="grade of the yard that layouts are drawn from")
    time_limit: Positive = Field(default=10.0, description="time allowed for an episode; scales the costs of failures")
    lead_in: tuple[Stage, ...] = Field(
        default=(), max_length=20, description="easier grades that the search goes through first, in this order"
    )
    lead_share: float = Field(default=0.2, gt=0, lt=1, description="largest share of a search that one of them takes")
    population: int | None = Field(default=None, ge=4, le=1000, description="sets per generation; none: the engine's")
    layouts: int = Field(default=4, ge=1, le=1000, description="layouts per generation, the same for all its sets")
    sigma: float = Field(default=0.15, gt=0, le=1, description="first step size in the unit cube, without a prior")
    control: bool = Field(default=True, description="run the champion in every block of the search, to see drift")
    alpha: float = Field(default=0.05, gt=0, lt=1, description="bound on false acceptance over the whole session")
    rounds: int = Field(default=2, ge=1, le=16, description="most verdicts in a session; alpha is shared among them")
    verdict_share: float = Field(default=0.35, gt=0, lt=1, description="share of the floor time kept for the verdict")
    least_pairs: int = Field(default=8, ge=1, description="fewest pairs that a verdict is begun with")
    pairs_at_once: int = Field(default=1, ge=1, le=1000, description="pairs opened together, for a batch simulator")
    episode_guess_s: Positive = Field(default=3.0, description="mean episode, until episodes have been seen")
    reset_guess_s: NonNegative = Field(default=2.0, description="mean reset, until resets have been seen")
