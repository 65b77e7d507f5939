"""What can happen in a session, as frozen typed events. The ledger stores them; the state is a fold over them."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import Field, TypeAdapter, ValidationError, model_validator

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Frozen, Layout, Outcome, Positive
from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.tuning.config import NonNegative
from fieldnav_ros.tuning.config import SessionConfig as SessionConfig  # read as ``events.SessionConfig`` by many
from fieldnav_ros.tuning.space import Prior
from fieldnav_ros.yard import Yard

Phase = Literal["search", "verdict"]
Role = Literal["candidate", "control", "champion", "challenger"]
Decision = Literal["accept", "keep"]
Text = Annotated[str, Field(max_length=2000)]


class NamedSet(Frozen):
    """A parameter set in a batch; ``unit`` is its point in the unit cube as the search proposed it."""

    id: str
    role: Role
    parameters: ParameterSet
    unit: tuple[float, ...] | None = None


class Run(Frozen):
    """One episode of a batch: which of its sets on which of its layouts."""

    episode_id: int
    set_index: int
    layout_index: int


class Episode(Frozen):
    """An episode that can be run now. An id is used once: a voided episode is run again under a new one."""

    id: int
    phase: Phase
    batch: int
    set_id: str
    role: Role
    parameters: ParameterSet
    layout: Layout
    time_limit: float


class About(Frozen):
    """What a reader of the record wants to know, and no decision depends on."""

    software: Text = ""
    model: Text = Field(default="", description="the field that guided, see ``guide.MODELS``")
    yard: Yard | None = None
    place: Text = Field(default="", description="simulation, or the site in the operator's words")


class SessionBegun(Frozen):
    """First event of every ledger."""

    kind: Literal["session_begun"] = "session_begun"
    config: SessionConfig
    champion_id: str = "initial"
    champion: ParameterSet
    prior: Prior | None = None
    about: About | None = None


class RecordedEpisode(Frozen):
    """An episode of an earlier session, judged from its bag: the bag's name, how it ended, its cost (s)."""

    bag: Text
    outcome: Outcome
    cost: float


class EvidenceImported(Frozen):
    """Recorded episodes of one set, from before this session; comes before ``session_begun``.

    They place the search and tell how long episodes take. No verdict rests on them.
    """

    kind: Literal["evidence_imported"] = "evidence_imported"
    source: Text = Field(description="the ledger that the recordings belong to")
    model: Text = Field(default="", description="the field that guided, see ``guide.MODELS``")
    grade: str = Field(min_length=1)
    time_limit: Positive
    set_id: Text
    parameters: ParameterSet
    episodes: tuple[RecordedEpisode, ...] = Field(min_length=1, max_length=100_000)


class BatchOpened(Frozen):
    """Episodes to run, in this order: a generation of the search, or pairs for the verdict."""

    kind: Literal["batch_opened"] = "batch_opened"
    phase: Phase
    batch: int
    sets: tuple[NamedSet, ...]
    layouts: tuple[Layout, ...]
    runs: tuple[Run, ...]

    @model_validator(mode="after")
    def _runs_name_what_is_there(self) -> BatchOpened:
        for run in self.runs:
            if not (0 <= run.set_index < len(self.sets) and 0 <= run.layout_index < len(self.layouts)):
                raise ValueError(
                    f"episode {run.episode_id} is of set {run.set_index} on layout {run.layout_index},"
                    f" must be of {len(self.sets)} sets and {len(self.layouts)} layouts"
                )
        return self


class EpisodeScored(Frozen):
    """An outcome that counts."""

    kind: Literal["episode_scored"] = "episode_scored"
    episode_id: int
    outcome: Outcome
    cost: float
    floor_time_s: NonNegative
    source: Text = "judge"


class EpisodeVoided(Frozen):
    """An episode that does not count and is run again, on the same layout, as ``rerun_id``.

    Where its outcome was the last one, every decision that followed from it is taken back with it.
    """

    kind: Literal["episode_voided"] = "episode_voided"
    episode_id: int
    rerun_id: int
    floor_time_s: NonNegative = 0.0
    source: Text = "operator"


class ReportIgnored(Frozen):
    """A report that changes nothing (late, double, contradicting, unknown), kept for the record."""

    kind: Literal["report_ignored"] = "report_ignored"
    episode_id: int
    outcome: Outcome | None = None
    source: Text = "judge"
    reason: Text


class EpisodeObserved(Frozen):
    """The way to a goal that somebody else gave, in a match: scored for the record, feeding no decision.

    ``set_id`` is the champion's where guidance was seen to hold its numbers, else empty.
    """

    kind: Literal["episode_observed"] = "episode_observed"
    name: Text
    set_id: Text
    layout: Layout
    time_limit: Positive
    outcome: Outcome
    cost: float | None
    source: Text = "judge"


class GenerationClosed(Frozen):
    """Mean costs of a generation's candidates over the ``blocks`` layouts on which all of them ran.

    ``costs`` is empty where there was no such layout. ``control`` is the champion's mean over the same layouts.
    """

    kind: Literal["generation_closed"] = "generation_closed"
    batch: int
    blocks: int
    costs: tuple[float, ...]
    control: float | None = None


class StageBegun(Frozen):
    """The search moves on to the next grade of its curriculum, from ``prior``: what the last grade taught."""

    kind: Literal["stage_begun"] = "stage_begun"
    number: int = Field(ge=1)
    grade: str
    time_limit: Positive
    prior: Prior
    reason: Text


class ChallengerNamed(Frozen):
    """The search hands a set to the verdict; ``alpha`` is this round's part of the session's."""

    kind: Literal["challenger_named"] = "challenger_named"
    round: int
    set_id: str
    parameters: ParameterSet
    alpha: float


class PairCompared(Frozen):
    """One more pair of the verdict. ``difference`` is the champion's cost less the challenger's, in s."""

    kind: Literal["pair_compared"] = "pair_compared"
    round: int
    pair: int
    layout_index: int
    champion_cost: float
    challenger_cost: float
    difference: float
    log_evidence: float


class VerdictReached(Frozen):
    """``accept`` or ``keep``, and on what evidence (an e-value against its threshold)."""

    kind: Literal["verdict_reached"] = "verdict_reached"
    round: int
    verdict: Decision
    challenger_id: str
    pairs: int
    mean_difference: float | None
    log_evidence: float
    log_threshold: float
    reason: Text


class ChampionChanged(Frozen):
    """Another set is in service from here on."""

    kind: Literal["champion_changed"] = "champion_changed"
    set_id: str
    parameters: ParameterSet


class FloorTimeUsed(Frozen):
    """Floor time that went into something other than an episode."""

    kind: Literal["floor_time_used"] = "floor_time_used"
    seconds: NonNegative
    why: Text


class Paused(Frozen):
    """No new episode begins until ``Resumed``."""

    kind: Literal["paused"] = "paused"


class Released(Frozen):
    """Match call: the champion goes back in service, no new episode begins until ``Resumed``."""

    kind: Literal["released"] = "released"


class Resumed(Frozen):
    """Episodes may begin again after a pause or a match call."""

    kind: Literal["resumed"] = "resumed"


class SessionEnded(Frozen):
    """Nothing more will be run; the champion stays in service."""

    kind: Literal["session_ended"] = "session_ended"
    reason: Text


class Noted(Frozen):
    """Something worth keeping that changes no state (a stranger's parameter change, a restart, a warning)."""

    kind: Literal["noted"] = "noted"
    source: Text
    text: Text


_Acts = SessionBegun | BatchOpened | EpisodeScored | EpisodeVoided | ReportIgnored | FloorTimeUsed
_Watched = EpisodeObserved | EvidenceImported | Noted
_Search = GenerationClosed | StageBegun | ChallengerNamed
_Verdict = PairCompared | VerdictReached | ChampionChanged | SessionEnded
Event = Annotated[_Acts | _Watched | _Search | _Verdict | Paused | Released | Resumed, Field(discriminator="kind")]
_ADAPTER: TypeAdapter[Event] = TypeAdapter(Event)


def parse_event(payload: str | bytes, source: str = "event") -> Event:
    """Read one event from JSON; InputError, one sentence, where it is none."""
    try:
        return _ADAPTER.validate_json(payload)
    except ValidationError as error:
        raise InputError.from_validation(error, source) from error


def dump_event(event: Event) -> str:
    """Return the event as JSON; ``parse_event`` gives it back, floats to the last bit."""
    return event.model_dump_json()


def event_schema() -> dict[str, Any]:
    """Return the JSON Schema of all events."""
    return _ADAPTER.json_schema()
