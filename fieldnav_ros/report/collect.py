"""Sorts a ledger's events, and strikes decisions that a void took back. The session's own fold keeps the state."""

from __future__ import annotations

from typing import NamedTuple, TypeVar

from fieldnav_ros.errors import InputError
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.session import Session

Kind = TypeVar("Kind")
DECISIONS = (
    ev.BatchOpened,
    ev.GenerationClosed,
    ev.StageBegun,
    ev.ChallengerNamed,
    ev.PairCompared,
    ev.VerdictReached,
    ev.ChampionChanged,
)


class Place(NamedTuple):
    """Where an episode stands: its batch, which of its runs, and the grade and time limit (s) of that stage."""

    opened: ev.BatchOpened
    run: ev.Run
    grade: str
    time_limit: float


class Collector:
    """Takes events in order. ``scored`` holds what counts by episode, each with the floor time used by then (s)."""

    def __init__(self) -> None:
        self.session = Session()
        self.begun: ev.SessionBegun | None = None
        self.places: dict[int, Place] = {}
        self.scored: dict[int, tuple[ev.EpisodeScored, float]] = {}
        self.voided: list[tuple[ev.EpisodeVoided, ev.EpisodeScored | None]] = []
        self.spent: list[ev.FloorTimeUsed] = []
        self.ignored: list[ev.ReportIgnored] = []
        self.notes: list[ev.Noted] = []
        self.imported: list[ev.EvidenceImported] = []
        self.live: list[tuple[ev.Event, float]] = []
        self.taken_back = 0
        self._since_scored = 0

    def take(self, event: ev.Event) -> None:
        """Take one more event; InputError where it cannot follow the others."""
        last = self.session.state.last_scored
        self.session.apply(event)
        if isinstance(event, ev.SessionBegun):
            self.begun = event
        elif isinstance(event, ev.EpisodeScored):
            self._place(event.episode_id)
            self.scored[event.episode_id] = (event, self.session.state.floor_used_s)
            self._since_scored = len(self.live)
        elif isinstance(event, ev.EpisodeVoided):
            self._void(event, took_back=event.episode_id == last)
        elif isinstance(event, ev.FloorTimeUsed):
            self.spent.append(event)
        elif isinstance(event, ev.ReportIgnored):
            self.ignored.append(event)
        elif isinstance(event, ev.Noted):
            self.notes.append(event)
        elif isinstance(event, ev.EvidenceImported):
            self.imported.append(event)
        elif isinstance(event, DECISIONS):
            self._decide(event)

    def _decide(self, event: ev.Event) -> None:
        self.live.append((event, self.session.state.floor_used_s))
        if isinstance(event, ev.BatchOpened):
            self._check(event)
            stage = self.session.state.stage
            places = (Place(event, run, stage.grade, stage.time_limit) for run in event.runs)
            self.places.update({place.run.episode_id: place for place in places})

    def _check(self, opened: ev.BatchOpened) -> None:
        # the model of the event bounds no index
        for run in opened.runs:
            if not (0 <= run.set_index < len(opened.sets) and 0 <= run.layout_index < len(opened.layouts)):
                raise InputError(
                    f"batch {opened.batch}: episode {run.episode_id} names a set or layout it does not hold"
                )

    def _void(self, event: ev.EpisodeVoided, took_back: bool) -> None:
        if took_back:
            struck = self.live[self._since_scored :]
            self.taken_back += sum(not isinstance(item, ev.BatchOpened) for item, _ in struck)
            del self.live[self._since_scored :]
        earlier = self.scored.pop(event.episode_id, None)
        self.voided.append((event, earlier[0] if earlier else None))
        self.places[event.rerun_id] = self._place(event.episode_id)

    def _place(self, episode_id: int) -> Place:
        if episode_id not in self.places:
            raise InputError.of("episode", episode_id, "one that a batch opened")
        return self.places[episode_id]

    def open_episodes(self) -> int:
        """Return how many episodes wait for an outcome."""
        opened = [event for event, _ in self.live if isinstance(event, ev.BatchOpened)]
        closed = any(isinstance(event, (ev.GenerationClosed, ev.VerdictReached)) for event, _ in self.live[-1:])
        if not opened or closed:
            return 0
        done = {voided.episode_id for voided, _ in self.voided} | self.scored.keys()
        return sum(place.opened is opened[-1] and number not in done for number, place in self.places.items())

    def decided(self, kind: type[Kind]) -> list[tuple[Kind, float]]:
        """Return the decisions of one kind that were not taken back, each with the floor time used by then (s)."""
        return [(event, floor_s) for event, floor_s in self.live if isinstance(event, kind)]
