"""The fold: a session's state after one more event. Pure: the same events give the same state."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

from fieldnav_ros.errors import InputError
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning import imported
from fieldnav_ros.tuning.cost import cost_bound
from fieldnav_ros.tuning.schedule import Times
from fieldnav_ros.tuning.search import Generation
from fieldnav_ros.tuning.state import NO_COSTS, Batch, Control, InService, Round, Stage, State, Tally
from fieldnav_ros.tuning.verdict import Evidence

FUTILE = 0.05  # a challenger is dropped early once it is shown, at this level, to be worse; costs no validity


def fold(state: State, event: ev.Event) -> State:
    """Return the state after one more event; InputError where the event cannot follow."""
    if state.config is None and not isinstance(event, (ev.SessionBegun, ev.EvidenceImported)):
        raise InputError.of("first event of a session", event.kind, "session_begun")
    rule = _RULES.get(type(event))
    return rule(state, event) if rule else state


def _imported(state: State, event: ev.EvidenceImported) -> State:
    if state.config is not None:
        raise InputError("evidence_imported came after session_begun, must come before it")
    return replace(state, imported=(*state.imported, event))


def _begun(state: State, event: ev.SessionBegun) -> State:
    if state.config is not None:
        raise InputError("session_begun came twice, must come once")
    champion, config = InService(event.champion_id, event.champion), event.config
    first = config.lead_in[0] if config.lead_in else config
    recorded = () if config.lead_in else imported.usable(state.imported, config, event.about)
    return replace(
        state,
        config=config,
        imported=recorded,
        times=Times(recorded_s=imported.mean_time(recorded)),
        champion_costs=Tally(*imported.costs_of(recorded, event.champion)),
        stage=Stage(grade=first.grade, time_limit=first.time_limit),
        prior=event.prior,
        initial=champion,
        champion=champion,
        round_budget_s=config.floor_time_s,
    )


def _opened(state: State, event: ev.BatchOpened) -> State:
    if (event.phase == "verdict") != (state.round is not None):
        raise InputError(f"batch_opened of a {event.phase} came in the other phase")
    if event.phase == "verdict" and len(event.sets) != 2:
        raise InputError.of("sets of a verdict's batch_opened", len(event.sets), "2: champion and challenger")
    following = max((run.episode_id for run in event.runs), default=0) + 1
    return replace(
        state,
        batch=Batch.of(event),
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
    tally = state.champion_costs
    return replace(
        state,
        batch=batch.with_cost(run, event.cost),
        champion_costs=tally.after(event.cost) if batch.role(run) in ("control", "champion") else tally,
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
    tally = state.champion_costs
    cost = batch.costs.get(event.episode_id)
    if cost is not None and batch.role(run) in ("control", "champion"):
        tally = Tally(tally.episodes - 1, tally.total - cost)
    return replace(
        state,
        batch=batch.with_rerun(run, event.rerun_id),
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
        if len(points) != len(event.costs):
            raise InputError.of("costs of a generation closed", len(event.costs), f"{len(points)}, one for each set")
        generations = (*generations, Generation(points, event.costs))
        if event.control is not None:
            controls = (*controls, Control(event.batch, event.control))
    return replace(state, batch=None, generations=generations, controls=controls)


def _stage(state: State, event: ev.StageBegun) -> State:
    """Move to another grade: what costs on the last one says nothing about costs on this one."""
    before = len(state.generations)
    return replace(
        state,
        prior=event.prior,
        champion_costs=NO_COSTS,
        generations_before=before,
        stage=Stage(event.number, event.grade, event.time_limit, before, state.times.episodes),
    )


def _named(state: State, event: ev.ChallengerNamed) -> State:
    if state.batch is not None:
        raise InputError("challenger_named came while a batch was open")
    bound = cost_bound(state.stage.time_limit)
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
        episodes_before=state.times.episodes,
    )


def _changed(state: State, event: ev.ChampionChanged) -> State:
    return replace(state, champion=InService(event.set_id, event.parameters), accepted=None)


def _spent(state: State, event: ev.FloorTimeUsed) -> State:
    return replace(state, floor_used_s=state.floor_used_s + event.seconds)


_RULES: dict[type, Callable[[State, Any], State]] = {
    ev.EvidenceImported: _imported,
    ev.SessionBegun: _begun,
    ev.BatchOpened: _opened,
    ev.EpisodeScored: _scored,
    ev.EpisodeVoided: _voided,
    ev.GenerationClosed: _generation,
    ev.StageBegun: _stage,
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
