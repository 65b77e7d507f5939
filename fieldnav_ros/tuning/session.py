"""The tuner without ROS, clock or file: it is told outcomes and says what to do next.

Event-sourced. A command (``begin``, ``record``, ``void`` ...) returns events and changes nothing; the driver
appends them to the ledger and then applies them. So nothing is acknowledged that the ledger does not hold:

    session = Session(draw)
    session.apply(*ledger.events())            # nothing on a new ledger
    events = session.advance() if session.begun else session.begin(config)
    ledger.append(events); session.apply(*events)
    while not session.ended:
        episode = session.pending()[0]         # put its set in service, run it
        events = session.record(episode.id, outcome, floor_time_s)
        ledger.append(events); session.apply(*events)

Rules for reports. The first outcome of an open episode counts; every later, double, contradicting or unknown
report is recorded as ignored. A void takes back an episode of an open block, or the very last outcome with every
decision that followed from it; what has been decided on before that stands. A void should be called before its
caller knows which set ran, or the verdict's guarantee is the caller's own.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

from fieldnav_ros.errors import InputError, WorkError
from fieldnav_ros.model import Layout, Outcome, OutcomeKind
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.cost import cost
from fieldnav_ros.tuning.decide import Decider, Draw, plan_of, start_search, stopped
from fieldnav_ros.tuning.events import Episode, Event, SessionConfig
from fieldnav_ros.tuning.fold import fold
from fieldnav_ros.tuning.schedule import Plan
from fieldnav_ros.tuning.search import Search
from fieldnav_ros.tuning.space import Prior
from fieldnav_ros.tuning.state import InService, State
from fieldnav_ros.tuning.status import Summary, phase_of, summary_of

__all__ = ["Draw", "Episode", "InService", "Report", "Session", "SessionConfig"]


class Report(NamedTuple):
    """An outcome on its way in. ``floor_time_s`` is the episode with its reset."""

    episode_id: int
    outcome: Outcome
    floor_time_s: float
    source: str = "judge"


class Session:
    """One tuning session as a fold over its events."""

    def __init__(self, draw: Draw | None = None) -> None:
        """``draw`` makes layouts; a reader that takes no decisions can leave it out."""
        self.state = State()
        self._draw = draw
        self._engine: Search | None = None
        self._engine_stage = 0
        self._outcomes: dict[int, OutcomeKind] = {}

    def apply(self, *events: Event) -> None:
        """Fold events into the state. InputError where one cannot follow the events before it."""
        for event in events:
            self.state = fold(self.state, event)
            if isinstance(event, ev.EpisodeScored):
                self._outcomes[event.episode_id] = event.outcome.kind
            elif isinstance(event, ev.EpisodeVoided):
                self._outcomes[event.episode_id] = OutcomeKind.VOID

    @property
    def begun(self) -> bool:
        """Whether the session has its first event."""
        return self.state.config is not None

    @property
    def ended(self) -> bool:
        """Whether nothing more will be run."""
        return self.state.ended is not None

    @property
    def config(self) -> SessionConfig:
        """What the session was told; InputError before it has begun."""
        return self.state.told

    @property
    def champion(self) -> InService:
        """The set that is best by proof."""
        return self.state.champion

    @property
    def plan(self) -> Plan:
        """What the rest of the floor time is for."""
        return plan_of(self.state)

    def pending(self) -> list[Episode]:
        """Episodes that can be run now, in this order; none while paused, released or ended."""
        if self.state.paused or self.state.released or self.ended:
            return []
        return self._open_episodes()

    def in_service(self) -> InService:
        """Return the set that the robot must carry now: the first pending episode's, else the champion."""
        episodes = self.pending()
        return InService(episodes[0].set_id, episodes[0].parameters) if episodes else self.champion

    def begin(
        self,
        config: SessionConfig,
        champion: ParameterSet = DEFAULTS,
        prior: Prior | None = None,
        about: ev.About | None = None,
    ) -> list[Event]:
        """Begin with ``champion`` in service and, where there is one, a prior from an earlier session.

        ``about`` is for the record alone; no decision depends on it.
        """
        if self.begun:
            raise WorkError("the session has begun already: go on with it or start a new ledger")
        return self._followed([ev.SessionBegun(config=config, champion=champion, prior=prior, about=about)])

    def advance(self) -> list[Event]:
        """Return decisions that are due; none unless a crash parted an outcome from what follows from it."""
        return self._followed([])

    def record(self, episode_id: int, outcome: Outcome, floor_time_s: float, source: str = "judge") -> list[Event]:
        """Take an outcome; ``floor_time_s`` is what the episode and its reset took of the floor."""
        return self.record_all([Report(episode_id, outcome, floor_time_s, source)])

    def record_all(self, reports: Sequence[Report]) -> list[Event]:
        """Take outcomes in order, as if one after the other; the events can be stored in one transaction."""
        work, result = self._copy(), list[Event]()
        for report in reports:
            events = work._followed([work._report(report)])
            work.apply(*events)
            result += events
        self._engine, self._engine_stage = work._engine, work._engine_stage
        return result

    def void(self, episode_id: int | None = None, source: str = "operator") -> list[Event]:
        """Do not count an episode (without an id: the last one scored); it is run again on the same layout."""
        if episode_id is None:
            episode_id = self.state.last_scored
            if episode_id is None:
                raise WorkError("there is no last outcome to take back")
        if not self._can_void(episode_id):
            return [ev.ReportIgnored(episode_id=episode_id, source=source, reason=self._why_closed(episode_id))]
        return self._followed([self._voided(episode_id, 0.0, source)])

    def pause(self) -> list[Event]:
        """Begin no new episode until ``resume``."""
        return [] if self.state.paused or self.ended else [ev.Paused()]

    def resume(self) -> list[Event]:
        """Go on after a pause or a match call."""
        return [ev.Resumed()] if (self.state.paused or self.state.released) and not self.ended else []

    def release(self) -> list[Event]:
        """Match call: the champion is the set in service until ``resume``."""
        return [] if self.state.released or self.ended else [ev.Released()]

    def spend(self, seconds: float, why: str) -> list[Event]:
        """Take floor time that went into something other than an episode."""
        return (
            [] if self.ended else self._followed([ev.FloorTimeUsed(seconds=_seconds("floor time", seconds), why=why)])
        )

    def ignore(self, episode_id: int, outcome: Outcome, source: str, reason: str) -> list[Event]:
        """Keep a report that must not count, and why; for what the caller knows and the session does not."""
        return [ev.ReportIgnored(episode_id=episode_id, outcome=outcome, source=source, reason=reason)]

    def observe(self, name: str, set_id: str, layout: Layout, outcome: Outcome, source: str = "judge") -> list[Event]:
        """Score an episode that the session did not ask for; it changes no state and feeds no verdict."""
        limit = self.config.time_limit
        value = cost(outcome, limit)
        return [
            ev.EpisodeObserved(
                name=name, set_id=set_id, layout=layout, time_limit=limit, outcome=outcome, cost=value, source=source
            )
        ]

    def note(self, source: str, text: str) -> list[Event]:
        """Keep something for the record that changes nothing."""
        return [ev.Noted(source=source[:2000], text=text[:2000])]

    def stop(self, reason: str) -> list[Event]:
        """End the session; a verdict in progress is ``keep``."""
        return [] if self.ended else stopped(self.state, reason)

    def prior(self, learnt_from: str = "") -> Prior:
        """Return what the search has learnt so far, for a later session."""
        return self._search_at(self.state).prior(learnt_from, self.state.times.episodes)

    def summary(self) -> Summary:
        """Return plain numbers for a status line; times and costs in s."""
        return summary_of(self.state)

    @property
    def phase(self) -> str:
        """One word for where the session stands."""
        return phase_of(self.state)

    def _report(self, report: Report) -> Event:
        seconds = _seconds("floor time of an episode", report.floor_time_s)
        batch = self.state.batch
        open_now = batch is not None and batch.run(report.episode_id) is not None
        if self.ended or not open_now or report.episode_id in self._outcomes:
            reason = self._why_closed(report.episode_id, report.outcome.kind)
            return ev.ReportIgnored(
                episode_id=report.episode_id, outcome=report.outcome, source=report.source, reason=reason
            )
        value = cost(report.outcome, self.state.stage.time_limit)
        if value is None:
            return self._voided(report.episode_id, seconds, report.source)
        return ev.EpisodeScored(
            episode_id=report.episode_id,
            outcome=report.outcome,
            cost=value,
            floor_time_s=seconds,
            source=report.source,
        )

    def _voided(self, episode_id: int, seconds: float, source: str) -> ev.EpisodeVoided:
        return ev.EpisodeVoided(
            episode_id=episode_id, rerun_id=self.state.next_episode, floor_time_s=seconds, source=source
        )

    def _can_void(self, episode_id: int) -> bool:
        state = self.state
        if self.ended or episode_id == state.last_scored:
            return not self.ended
        run = state.batch.run(episode_id) if state.batch else None
        return state.batch is not None and run is not None and run.layout_index not in state.batch.compared

    def _why_closed(self, episode_id: int, kind: OutcomeKind | None = None) -> str:
        first = self._outcomes.get(episode_id)
        if self.ended:
            return "the session has ended"
        if not 0 < episode_id < self.state.next_episode:
            return "there is no such episode"
        if first is OutcomeKind.VOID:
            return "the episode was voided and is run again under another id"
        if first is None:
            return "the episode was cancelled before it was scored"
        if kind is None:
            return "its block is closed and later outcomes have been counted"
        if kind is first:
            return "a second report of the same outcome"
        return f"it contradicts the first outcome, {first.value}, which counts"

    def _open_episodes(self) -> list[Episode]:
        batch = self.state.batch
        if batch is None:
            return []
        opened, limit = batch.opened, self.state.stage.time_limit
        return [
            Episode(
                id=run.episode_id,
                phase=opened.phase,
                batch=opened.batch,
                set_id=opened.sets[run.set_index].id,
                role=opened.sets[run.set_index].role,
                parameters=opened.sets[run.set_index].parameters,
                layout=opened.layouts[run.layout_index],
                time_limit=limit,
            )
            for run in batch.runs.values()
            if run.episode_id not in batch.costs
        ]

    def _copy(self) -> Session:
        copy = Session(self._draw)
        copy.state, copy._outcomes = self.state, dict(self._outcomes)
        copy._engine, copy._engine_stage = self._engine, self._engine_stage
        return copy

    def _followed(self, events: list[Event]) -> list[Event]:
        """Return the events and every decision that follows from them."""
        state, result = self.state, list(events)
        for event in events:
            state = fold(state, event)
        while self._draw is not None and state.config is not None:
            decision = Decider(self._search_at(state), self._draw).next(state)
            if decision is None:
                break
            result.append(decision)
            state = fold(state, decision)
        return result

    def _search_at(self, state: State) -> Search:
        """Return the engine told exactly the state's generations; kept, as telling them anew takes time."""
        search, record = self._engine, state.stage_generations
        if search is None or self._engine_stage != state.stage.number or record[: len(search.told)] != search.told:
            search = start_search(state)
        for generation in record[len(search.told) :]:
            search.tell(generation)
        self._engine, self._engine_stage = search, state.stage.number
        return search


def _seconds(name: str, value: float) -> float:
    if not (math.isfinite(value) and value >= 0):
        raise InputError.of(name, value, "a finite number of seconds >= 0")
    return float(value)
