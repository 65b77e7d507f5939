"""From events to facts: the one layer between a ledger and everything on the page. Pure."""

from __future__ import annotations

from collections.abc import Iterable

from fieldnav_ros.report.collect import Collector, Place
from fieldnav_ros.report.facts import (
    Episode,
    Facts,
    Generation,
    NamedValues,
    Pair,
    Recordings,
    Round,
    Spending,
    Void,
)
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.schedule import Times, make_plan


def facts(events: Iterable[ev.Event]) -> Facts:
    """Return what the events say. InputError where one cannot follow those before it."""
    seen = Collector()
    for event in events:
        seen.take(event)
    state, begun = seen.session.state, seen.begun
    if begun is None:
        return Facts(None, None, None, (), (), (), (), Spending(), None, (), tuple(seen.notes), 0, 0, None)
    episodes = _episodes(seen)
    config = begun.config
    return Facts(
        begun=begun,
        before=NamedValues(state.initial.set_id, state.initial.parameters),
        after=NamedValues(state.champion.set_id, state.champion.parameters),
        episodes=episodes,
        voids=_voids(seen),
        rounds=_rounds(seen, begun),
        generations=_generations(seen, episodes),
        spending=_spending(seen, episodes),
        plan=make_plan(config, Times(recorded_s=state.times.recorded_s), 0.0, config.floor_time_s, in_verdict=False),
        ignored=tuple(seen.ignored),
        notes=tuple(seen.notes),
        open_episodes=0 if state.ended is not None else seen.open_episodes(),
        taken_back=seen.taken_back,
        ended=state.ended,
        recordings=_recordings(seen),
    )


def _recordings(seen: Collector) -> Recordings:
    return Recordings(
        sources=tuple(dict.fromkeys(item.source for item in seen.imported)),
        sets=len({item.parameters for item in seen.imported}),
        episodes=sum(len(item.episodes) for item in seen.imported),
        used=sum(len(item.episodes) for item in seen.session.state.imported),
    )


def _set_of(place: Place) -> ev.NamedSet:
    return place.opened.sets[place.run.set_index]


def _episodes(seen: Collector) -> tuple[Episode, ...]:
    result = list[Episode]()
    for scored, floor_s in seen.scored.values():
        place = seen.places[scored.episode_id]
        chosen = _set_of(place)
        result.append(
            Episode(
                order=len(result) + 1,
                id=scored.episode_id,
                phase=place.opened.phase,
                batch=place.opened.batch,
                set=NamedValues(chosen.id, chosen.parameters),
                role=chosen.role,
                layout=place.opened.layouts[place.run.layout_index],
                time_limit=place.time_limit,
                kind=scored.outcome.kind,
                time=scored.outcome.time,
                cost=scored.cost,
                floor_s=floor_s,
            )
        )
    return tuple(result)


def _voids(seen: Collector) -> tuple[Void, ...]:
    result = []
    for voided, earlier in seen.voided:
        place = seen.places[voided.episode_id]
        chosen = _set_of(place)
        result.append(
            Void(
                id=voided.episode_id,
                phase=place.opened.phase,
                set_id=chosen.id,
                role=chosen.role,
                source=voided.source,
                rerun_id=voided.rerun_id,
                floor_time_s=voided.floor_time_s + (earlier.floor_time_s if earlier else 0.0),
                earlier=earlier.outcome.kind if earlier else None,
            )
        )
    return tuple(result)


def _rounds(seen: Collector, begun: ev.SessionBegun) -> tuple[Round, ...]:
    verdicts = {event.round: event for event, _ in seen.decided(ev.VerdictReached)}
    champion, result = NamedValues(begun.champion_id, begun.champion), list[Round]()
    for named, begun_s in seen.decided(ev.ChallengerNamed):
        compared = tuple(
            Pair(item.pair, item.champion_cost, item.challenger_cost, item.difference, item.log_evidence, floor_s)
            for item, floor_s in seen.decided(ev.PairCompared)
            if item.round == named.round
        )
        challenger = NamedValues(named.set_id, named.parameters)
        result.append(
            Round(named.round, champion, challenger, named.alpha, begun_s, compared, verdicts.get(named.round))
        )
        champion = challenger if result[-1].accepted else champion
    return tuple(result)


def _generations(seen: Collector, episodes: tuple[Episode, ...]) -> tuple[Generation, ...]:
    closed = {event.batch: event for event, _ in seen.decided(ev.GenerationClosed)}
    last = {item.batch: item.order for item in episodes}
    result = list[Generation]()
    for opened, _ in seen.decided(ev.BatchOpened):
        if opened.phase != "search":
            continue
        end = closed.get(opened.batch)
        result.append(
            Generation(
                number=len(result) + 1,
                batch=opened.batch,
                grade=seen.places[opened.runs[0].episode_id].grade if opened.runs else "",
                sets=tuple(item.parameters for item in opened.sets if item.role == "candidate"),
                costs=end.costs if end else (),
                control=end.control if end else None,
                last_order=last.get(opened.batch, 0),
            )
        )
    return tuple(result)


def _spending(seen: Collector, episodes: tuple[Episode, ...]) -> Spending:
    parts = dict.fromkeys(("search_run", "search_reset", "verdict_run", "verdict_reset"), 0.0)
    for item in episodes:
        used = seen.scored[item.id][0].floor_time_s
        parts[f"{item.phase}_run"] += min(item.time, used)
        parts[f"{item.phase}_reset"] += max(used - item.time, 0.0)
    void = sum(voided.floor_time_s + (earlier.floor_time_s if earlier else 0.0) for voided, earlier in seen.voided)
    return Spending(**parts, void=void, other=sum(event.seconds for event in seen.spent))
