"""What a ledger says, as plain values: all that the page is made from. ``gather.facts`` makes them. Pure."""

from __future__ import annotations

import math
from dataclasses import dataclass

from fieldnav_ros.model import Layout, OutcomeKind
from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.schedule import Plan


@dataclass(frozen=True)
class NamedValues:
    """A parameter set under its id."""

    id: str
    values: ParameterSet


@dataclass(frozen=True)
class Episode:
    """An episode that counts. ``order`` counts from 1; ``floor_s`` is the floor time used when it was scored."""

    order: int
    id: int
    phase: ev.Phase
    batch: int
    set: NamedValues
    role: ev.Role
    layout: Layout
    time_limit: float
    kind: OutcomeKind
    time: float
    cost: float
    floor_s: float


@dataclass(frozen=True)
class Void:
    """An episode that does not count; ``earlier`` is the outcome it had before, if any. Floor time in s."""

    id: int
    phase: ev.Phase
    set_id: str
    role: ev.Role
    source: str
    rerun_id: int
    floor_time_s: float
    earlier: OutcomeKind | None


@dataclass(frozen=True)
class Pair:
    """Champion and challenger on one layout: costs and champion less challenger, in s."""

    pair: int
    champion_cost: float
    challenger_cost: float
    difference: float
    log_evidence: float
    floor_s: float


@dataclass(frozen=True)
class Round:
    """A challenger before the verdict; ``verdict`` is None where the record stops before it."""

    number: int
    champion: NamedValues
    challenger: NamedValues
    alpha: float
    begun_floor_s: float
    pairs: tuple[Pair, ...]
    verdict: ev.VerdictReached | None

    @property
    def log_threshold(self) -> float:
        """Natural logarithm of what the e-value must reach."""
        return self.verdict.log_threshold if self.verdict else -math.log(self.alpha)

    @property
    def log_evidence(self) -> float:
        """Natural logarithm of the e-value where the record stops; 0 before the first pair."""
        if self.verdict:
            return self.verdict.log_evidence
        return self.pairs[-1].log_evidence if self.pairs else 0.0

    @property
    def mean_difference(self) -> float | None:
        """Mean of champion less challenger (s); None before the first pair."""
        if self.verdict:
            return self.verdict.mean_difference
        return sum(pair.difference for pair in self.pairs) / len(self.pairs) if self.pairs else None

    @property
    def accepted(self) -> bool:
        """Whether the challenger went into service."""
        return self.verdict is not None and self.verdict.verdict == "accept"


@dataclass(frozen=True)
class Generation:
    """One generation's proposals; ``costs`` and ``control`` (s) stay empty where it was not closed."""

    number: int
    batch: int
    grade: str
    sets: tuple[ParameterSet, ...]
    costs: tuple[float, ...]
    control: float | None
    last_order: int


@dataclass(frozen=True)
class Spending:
    """Where the floor time went, in s; the parts sum to what the session has used."""

    search_run: float = 0.0
    search_reset: float = 0.0
    verdict_run: float = 0.0
    verdict_reset: float = 0.0
    void: float = 0.0
    other: float = 0.0

    @property
    def total(self) -> float:
        """All floor time used (s)."""
        return self.search_run + self.search_reset + self.verdict_run + self.verdict_reset + self.void + self.other


@dataclass(frozen=True)
class Recordings:
    """Recorded episodes of earlier sessions in this record: how many, of how many sets, how many of use to it."""

    sources: tuple[str, ...] = ()
    sets: int = 0
    episodes: int = 0
    used: int = 0


@dataclass(frozen=True)
class Facts:
    """Everything that the page says about one session. Without ``begun`` all else is empty."""

    begun: ev.SessionBegun | None
    before: NamedValues | None
    after: NamedValues | None
    episodes: tuple[Episode, ...]
    voids: tuple[Void, ...]
    rounds: tuple[Round, ...]
    generations: tuple[Generation, ...]
    spending: Spending
    plan: Plan | None
    ignored: tuple[ev.ReportIgnored, ...]
    notes: tuple[ev.Noted, ...]
    open_episodes: int
    taken_back: int
    ended: str | None
    recordings: Recordings = Recordings()

    @property
    def config(self) -> ev.SessionConfig | None:
        """What the session was told."""
        return self.begun.config if self.begun else None

    @property
    def about(self) -> ev.About:
        """What the session said of itself."""
        return (self.begun.about if self.begun else None) or ev.About()

    @property
    def grades(self) -> tuple[str, ...]:
        """Grades of the floor that the search went through, in order."""
        return tuple(dict.fromkeys(item.grade for item in self.generations))

    @property
    def failures(self) -> tuple[Episode, ...]:
        """Episodes that did not end with an arrival."""
        return tuple(item for item in self.episodes if item.kind is not OutcomeKind.ARRIVED)

    @property
    def changed(self) -> bool:
        """Whether another set is in service at the end than at the start."""
        return self.before is not None and self.after is not None and self.before.id != self.after.id

    @property
    def rival(self) -> NamedValues | None:
        """The last challenger that is not in service; None where there is none."""
        last = self.rounds[-1] if self.rounds else None
        return None if last is None or last.accepted else last.challenger

    def count(self, kind: OutcomeKind, role: ev.Role | None = None) -> int:
        """Return how many episodes (of a role) ended this way; voided ones are counted under VOID alone."""
        if kind is OutcomeKind.VOID:
            return sum(role in (None, item.role) for item in self.voids)
        return sum(item.kind is kind and role in (None, item.role) for item in self.episodes)
