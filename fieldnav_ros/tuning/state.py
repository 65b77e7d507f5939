"""A session's state: everything its decisions are made from. ``fold`` makes it from events."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import NamedTuple

from fieldnav_ros.errors import InputError
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.schedule import Times
from fieldnav_ros.tuning.search import Generation
from fieldnav_ros.tuning.space import Prior
from fieldnav_ros.tuning.verdict import Evidence


class InService(NamedTuple):
    """A parameter set under its id."""

    set_id: str
    parameters: ParameterSet


class Tally(NamedTuple):
    """Number and sum of the costs that a set has had."""

    episodes: int = 0
    total: float = 0.0

    def after(self, cost: float) -> Tally:
        """Return the tally with one more cost."""
        return Tally(self.episodes + 1, self.total + cost)

    @property
    def mean(self) -> float | None:
        """Mean cost (s); None before the first."""
        return self.total / self.episodes if self.episodes else None


NO_COSTS = Tally()
NO_SET = InService("none", DEFAULTS)
NO_TIMES = Times()


class Control(NamedTuple):
    """The champion's mean cost within one generation: over many of them, the drift."""

    batch: int
    cost: float


class Stage(NamedTuple):
    """The grade that is run now, since which generation and after how many episodes of the session."""

    number: int = 0
    grade: str = ""
    time_limit: float = 0.0
    generations_before: int = 0
    episodes_before: int = 0


NO_STAGE = Stage()


@dataclass(frozen=True)
class Batch:
    """Open episodes. ``runs`` holds the ids in force (a rerun replaces the voided one); ``costs`` what is scored.

    ``scored`` counts, for each layout, the sets that have been scored on it, so that a report to a batch of
    thousands takes no look at all of them.
    """

    opened: ev.BatchOpened
    runs: Mapping[int, ev.Run]
    scored: tuple[int, ...]
    costs: Mapping[int, float] = field(default_factory=dict)
    compared: tuple[int, ...] = ()

    @classmethod
    def of(cls, opened: ev.BatchOpened) -> Batch:
        """Return the batch with nothing scored."""
        return cls(opened, {run.episode_id: run for run in opened.runs}, (0,) * len(opened.layouts))

    def run(self, episode_id: int) -> ev.Run | None:
        """Return the run of that id; None where it is not of this batch."""
        return self.runs.get(episode_id)

    def role(self, run: ev.Run) -> ev.Role:
        """Return what the set of a run is in this batch."""
        return self.opened.sets[run.set_index].role

    def with_cost(self, run: ev.Run, cost: float) -> Batch:
        """Return the batch with one more run scored."""
        costs = {**self.costs, run.episode_id: cost}
        return replace(self, costs=costs, scored=_counted(self.scored, run.layout_index, 1))

    def with_rerun(self, run: ev.Run, episode_id: int) -> Batch:
        """Return the batch with a run to be done again under another id, in its old place."""
        again = run.model_copy(update={"episode_id": episode_id})
        runs = {item.episode_id: item for item in (again if item is run else item for item in self.runs.values())}
        if run.episode_id not in self.costs:
            return replace(self, runs=runs)
        costs = {key: value for key, value in self.costs.items() if key != run.episode_id}
        return replace(self, runs=runs, costs=costs, scored=_counted(self.scored, run.layout_index, -1))

    def layout_costs(self) -> list[list[float]]:
        """Return the costs on each layout on which every set has been scored, in the order of the sets."""
        table: dict[int, list[tuple[int, float]]] = {index: [] for index in self.complete()}
        for run in self.runs.values():
            if run.layout_index in table:
                table[run.layout_index].append((run.set_index, self.costs[run.episode_id]))
        return [[cost for _, cost in sorted(row)] for row in table.values()]

    def complete(self) -> list[int]:
        """Return the layouts on which every set has been scored."""
        return [index for index, count in enumerate(self.scored) if count == len(self.opened.sets)]

    def begun(self) -> list[int]:
        """Return the layouts on which some set has been scored."""
        return [index for index, count in enumerate(self.scored) if count]


def _counted(counts: tuple[int, ...], index: int, change: int) -> tuple[int, ...]:
    return (*counts[:index], counts[index] + change, *counts[index + 1 :])


@dataclass(frozen=True)
class Round:
    """A challenger before the verdict: evidence for it, and for its being worse (so that time is not wasted)."""

    number: int
    challenger: InService
    evidence: Evidence
    against: Evidence
    champion_costs: Tally = NO_COSTS
    challenger_costs: Tally = NO_COSTS


@dataclass(frozen=True)
class State:
    """Everything decisions are made from. Counters, clocks and tallies of time are never taken back."""

    config: ev.SessionConfig | None = None
    imported: tuple[ev.EvidenceImported, ...] = ()  # recordings of earlier episodes that this session can use
    prior: Prior | None = None  # where the search of this stage starts
    initial: InService = NO_SET
    champion: InService = NO_SET
    champion_costs: Tally = NO_COSTS
    stage: Stage = NO_STAGE
    batch: Batch | None = None
    generations: tuple[Generation, ...] = ()
    controls: tuple[Control, ...] = ()
    generations_before: int = 0  # of this round's search
    round: Round | None = None
    rounds: int = 0  # verdicts reached
    round_budget_s: float = 0.0
    episodes_before: int = 0  # this round
    verdict: ev.VerdictReached | None = None  # the last one
    accepted: InService | None = None  # accepted, to be made champion next
    floor_used_s: float = 0.0
    times: Times = NO_TIMES
    next_episode: int = 1
    next_batch: int = 1
    challengers: int = 0
    paused: bool = False
    released: bool = False
    ended: str | None = None
    last_scored: int | None = None
    before_last: State | None = None

    @property
    def told(self) -> ev.SessionConfig:
        """The configuration; InputError before the session has begun."""
        if self.config is None:
            raise InputError("the session has not begun: its first event must be session_begun")
        return self.config

    @property
    def stage_generations(self) -> tuple[Generation, ...]:
        """The generations of the present stage, which its search engine has been told."""
        return self.generations[self.stage.generations_before :]
