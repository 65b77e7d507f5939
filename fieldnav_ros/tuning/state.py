"""A session's state, and the fold that makes it from events. Pure: the same events give the same state."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any, NamedTuple

from fieldnav_ros.errors import InputError
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.cost import cost_bound
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


@dataclass(frozen=True)
class Batch:
    """Open episodes. ``runs`` holds the ids in force (a rerun replaces the voided one); ``costs`` what is scored."""

    opened: ev.BatchOpened
    runs: tuple[ev.Run, ...]
    costs: Mapping[int, float] = field(default_factory=dict)
    compared: tuple[int, ...] = ()

    def run(self, episode_id: int) -> ev.Run | None:
        """Return the run of that id; None where it is not of this batch."""
        return next((run for run in self.runs if run.episode_id == episode_id), None)

    def layout_runs(self, layout_index: int) -> list[ev.Run]:
        """Return the runs on one layout, in the order of their sets."""
        return sorted((run for run in self.runs if run.layout_index == layout_index), key=lambda run: run.set_index)

    def complete(self) -> list[int]:
        """Return the layouts on which every set has been scored."""
        return [
            index
            for index in range(len(self.opened.layouts))
            if all(run.episode_id in self.costs for run in self.layout_runs(index))
        ]

    def begun(self) -> set[int]:
        """Return the layouts on which some set has been scored."""
        return {run.layout_index for run in self.runs if run.episode_id in self.costs}


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
    prior: Prior | None = None
    initial: InService = NO_SET
    champion: InService = NO_SET
    champion_costs: Tally = NO_COSTS
    batch: Batch | None = None
    generations: tuple[Generation, ...] = ()
    controls: tuple[Control, ...] = ()
    generations_before: int = 0  # of this round's search
    round: Round | None = None
    rounds: int = 0  # verdicts reached
    round_budget_s: float = 0.0
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


def fold(state: State, event: ev.Event) -> State:
    """Return the state after one more event; InputError where the event cannot follow."""
    if state.config is None and not isinstance(event, ev.SessionBegun):
        raise InputError.of("first event of a session", event.kind, "session_begun")
    rule = _RULES.get(type(event))
    return rule(state, event) if rule else state


def _begun(state: State, event: ev.SessionBegun) -> State:
    if state.config is not None:
        raise InputError("session_begun came twice, must come once")
    champion = InService(event.champion_id, event.champion)
    return replace(
        state,
        config=event.config,
        prior=event.prior,
        initial=champion,
        champion=champion,
        round_budget_s=event.config.floor_time_s,
    )


def _opened(state: State, event: ev.BatchOpened) -> State:
    following = max((run.episode_id for run in event.runs), default=0) + 1
    return replace(
        state,
        batch=Batch(event, event.runs),
        next_batch=max(state.next_batch, event.batch + 1),
        next_episode=max(state.next_episode, following),
    )


def _open(state: State, event: Any) -> Batch:
    if state.batch is None:
        raise InputError(f"{event.kind} came while no batch was open")
    return state.batch


def _scored(state: State, event: ev.EpisodeScored) -> State:
    batch = _open(state, event)
    run = batch.run(event.episode_id)
    if run is None or event.episode_id in batch.costs:
        raise InputError.of("episode scored", event.episode_id, "an open episode without an outcome")
    role = batch.opened.sets[run.set_index].role
    tally = state.champion_costs
    return replace(
        state,
        batch=replace(batch, costs={**batch.costs, event.episode_id: event.cost}),
        champion_costs=tally.after(event.cost) if role in ("control", "champion") else tally,
        floor_used_s=state.floor_used_s + event.floor_time_s,
        times=state.times.after(event.outcome.time, event.floor_time_s),
        last_scored=event.episode_id,
        before_last=replace(state, before_last=None, last_scored=None),
    )


def _voided(state: State, event: ev.EpisodeVoided) -> State:
    used = state.floor_used_s + event.floor_time_s
    if event.episode_id == state.last_scored and state.before_last is not None:
        state = replace(
            state.before_last,
            times=state.times,
            next_episode=state.next_episode,
            next_batch=state.next_batch,
            challengers=state.challengers,
            paused=state.paused,
            released=state.released,
        )
    batch = _open(state, event)
    run = batch.run(event.episode_id)
    if run is None:
        raise InputError.of("episode voided", event.episode_id, "an open episode or the last one scored")
    again = run.model_copy(update={"episode_id": event.rerun_id})
    role = batch.opened.sets[run.set_index].role
    tally = state.champion_costs
    cost = batch.costs.get(event.episode_id)
    if cost is not None and role in ("control", "champion"):
        tally = Tally(tally.episodes - 1, tally.total - cost)
    return replace(
        state,
        batch=replace(
            batch,
            runs=tuple(again if item is run else item for item in batch.runs),
            costs={key: value for key, value in batch.costs.items() if key != event.episode_id},
        ),
        champion_costs=tally,
        floor_used_s=used,
        next_episode=max(state.next_episode, event.rerun_id + 1),
        last_scored=None,
        before_last=None,
    )


def _generation(state: State, event: ev.GenerationClosed) -> State:
    batch = _open(state, event)
    generations, controls = state.generations, state.controls
    if event.blocks:
        points = tuple(item.unit for item in batch.opened.sets if item.unit is not None)
        generations = (*generations, Generation(points, event.costs))
        if event.control is not None:
            controls = (*controls, Control(event.batch, event.control))
    return replace(state, batch=None, generations=generations, controls=controls)


def _named(state: State, event: ev.ChallengerNamed) -> State:
    bound = cost_bound(state.told.time_limit)
    return replace(
        state,
        challengers=state.challengers + 1,
        round=Round(
            number=event.round,
            challenger=InService(event.set_id, event.parameters),
            evidence=Evidence(bound, event.alpha),
            against=Evidence(bound, FUTILE),
        ),
    )


FUTILE = 0.05  # a challenger is dropped early once it is shown, at this level, to be worse; costs no validity


def _compared(state: State, event: ev.PairCompared) -> State:
    batch, current = _open(state, event), state.round
    if current is None:
        raise InputError("pair_compared came while no challenger was named")
    return replace(
        state,
        batch=replace(batch, compared=(*batch.compared, event.layout_index)),
        round=replace(
            current,
            evidence=current.evidence.after(event.difference),
            against=current.against.after(-event.difference),
            champion_costs=current.champion_costs.after(event.champion_cost),
            challenger_costs=current.challenger_costs.after(event.challenger_cost),
        ),
    )


def _verdict(state: State, event: ev.VerdictReached) -> State:
    accepted = state.round.challenger if state.round and event.verdict == "accept" else None
    tally = state.round.challenger_costs if state.round and accepted else state.champion_costs
    return replace(
        state,
        batch=None,
        round=None,
        rounds=event.round,
        verdict=event,
        accepted=accepted,
        champion_costs=tally,
        generations_before=len(state.generations),
        round_budget_s=max(state.told.floor_time_s - state.floor_used_s, 0.0),
    )


def _changed(state: State, event: ev.ChampionChanged) -> State:
    return replace(state, champion=InService(event.set_id, event.parameters), accepted=None)


def _spent(state: State, event: ev.FloorTimeUsed) -> State:
    return replace(state, floor_used_s=state.floor_used_s + event.seconds)


_RULES: dict[type, Callable[[State, Any], State]] = {
    ev.SessionBegun: _begun,
    ev.BatchOpened: _opened,
    ev.EpisodeScored: _scored,
    ev.EpisodeVoided: _voided,
    ev.GenerationClosed: _generation,
    ev.ChallengerNamed: _named,
    ev.PairCompared: _compared,
    ev.VerdictReached: _verdict,
    ev.ChampionChanged: _changed,
    ev.FloorTimeUsed: _spent,
    ev.Paused: lambda state, event: replace(state, paused=True),
    ev.Released: lambda state, event: replace(state, released=True),
    ev.Resumed: lambda state, event: replace(state, paused=False, released=False),
    ev.SessionEnded: lambda state, event: replace(state, ended=event.reason),
}
